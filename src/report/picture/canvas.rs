//! A sheet of pixels to paint on, and its PNG form.

/// A colour, red green blue, 0 to 255.
pub type Rgb = [u8; 3];

/// A painted picture, rows from the top.
#[derive(Debug, Clone, PartialEq)]
pub struct Canvas {
    width: usize,
    height: usize,
    pixels: Vec<Rgb>,
}

impl Canvas {
    /// A sheet of one colour.
    pub fn new(width: usize, height: usize, colour: Rgb) -> Self {
        Canvas { width, height, pixels: vec![colour; width * height] }
    }

    /// Columns.
    pub fn width(&self) -> usize {
        self.width
    }

    /// Rows.
    pub fn height(&self) -> usize {
        self.height
    }

    /// The colour at column `x`, row `y` counted from the top, or `None` off the sheet.
    pub fn at(&self, x: usize, y: usize) -> Option<Rgb> {
        (x < self.width && y < self.height).then(|| self.pixels[y * self.width + x])
    }

    /// Mixes `colour` into a pixel; `cover` from 0 (nothing) to 1. Off the sheet nothing happens.
    pub fn blend(&mut self, x: i64, y: i64, colour: Rgb, cover: f64) {
        if x < 0 || y < 0 || x >= self.width as i64 || y >= self.height as i64 {
            return;
        }
        let cover = cover.clamp(0.0, 1.0);
        let pixel = &mut self.pixels[y as usize * self.width + x as usize];
        for (old, new) in pixel.iter_mut().zip(colour) {
            *old = (f64::from(*old) + (f64::from(new) - f64::from(*old)) * cover).round() as u8;
        }
    }

    /// Paints a pixel.
    pub fn set(&mut self, x: i64, y: i64, colour: Rgb) {
        self.blend(x, y, colour, 1.0);
    }

    /// Fills the rectangle that starts at (x, y).
    pub fn fill(&mut self, x: i64, y: i64, width: i64, height: i64, colour: Rgb, cover: f64) {
        for row in y..y + height {
            for column in x..x + width {
                self.blend(column, row, colour, cover);
            }
        }
    }

    /// A one-pixel outline just outside the rectangle that starts at (x, y).
    pub fn outline(&mut self, x: i64, y: i64, width: i64, height: i64, colour: Rgb) {
        self.fill(x - 1, y - 1, width + 2, 1, colour, 1.0);
        self.fill(x - 1, y + height, width + 2, 1, colour, 1.0);
        self.fill(x - 1, y, 1, height, colour, 1.0);
        self.fill(x + width, y, 1, height, colour, 1.0);
    }

    /// A straight stroke with smooth edges, between points in pixels (pixel centres are whole numbers).
    pub fn stroke(&mut self, from: (f64, f64), to: (f64, f64), thickness: f64, colour: Rgb, cover: f64) {
        let reach = thickness / 2.0 + 1.0;
        let (dx, dy) = (to.0 - from.0, to.1 - from.1);
        let length2 = dx * dx + dy * dy;
        let (x_low, x_high) = (from.0.min(to.0) - reach, from.0.max(to.0) + reach);
        let (y_low, y_high) = (from.1.min(to.1) - reach, from.1.max(to.1) + reach);
        for y in y_low.floor() as i64..=y_high.ceil() as i64 {
            for x in x_low.floor() as i64..=x_high.ceil() as i64 {
                let (px, py) = (x as f64 - from.0, y as f64 - from.1);
                let along = if length2 > 0.0 { ((px * dx + py * dy) / length2).clamp(0.0, 1.0) } else { 0.0 };
                let distance = (px - along * dx).hypot(py - along * dy);
                let edge = (thickness / 2.0 + 0.5 - distance).clamp(0.0, 1.0);
                if edge > 0.0 {
                    self.blend(x, y, colour, edge * cover);
                }
            }
        }
    }

    /// The sheet as a PNG file in memory.
    ///
    /// # Errors
    /// When the sheet is too large for a PNG (2^31 pixels a side).
    pub fn png(&self) -> Result<Vec<u8>, png::EncodingError> {
        let mut bytes = Vec::new();
        let side = |pixels: usize| u32::try_from(pixels).unwrap_or(u32::MAX);
        let mut encoder = png::Encoder::new(&mut bytes, side(self.width), side(self.height));
        encoder.set_color(png::ColorType::Rgb);
        encoder.set_depth(png::BitDepth::Eight);
        encoder.set_compression(png::Compression::High);
        let mut writer = encoder.write_header()?;
        writer.write_image_data(self.pixels.as_flattened())?;
        writer.finish()?;
        Ok(bytes)
    }
}
