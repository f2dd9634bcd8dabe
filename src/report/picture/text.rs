//! Text on a canvas, in DejaVu Sans Condensed (open licence, inside the program: no system font is looked for).
//!
//! `^{…}` raises what stands in the braces, as in `10^{-2}` or `10^{h}24^{m}`.

use super::PictureError;
use super::canvas::{Canvas, Rgb};
use ab_glyph::{Font, FontRef, PxScale, ScaleFont};

/// Size of raised text, as a fraction of its line.
const RAISED_SIZE: f32 = 0.68;
/// Height by which raised text stands above the line, as a fraction of its size.
const RAISED_BY: f32 = 0.36;

/// The font, ready to draw.
#[derive(Debug)]
pub struct Pen {
    font: FontRef<'static>,
}

/// A line of text as a sheet of ink, 0 to 1.
#[derive(Debug)]
pub struct Ink {
    /// Columns.
    pub width: usize,
    /// Rows.
    pub height: usize,
    cover: Vec<f32>,
}

impl Pen {
    /// Opens the font inside the program.
    ///
    /// # Errors
    /// When the font cannot be read, a defect of the build.
    pub fn new() -> Result<Self, PictureError> {
        let font = FontRef::try_from_slice(dejavu::sans_condensed::regular()).map_err(|_| PictureError::Font)?;
        Ok(Pen { font })
    }

    /// Width of a line in pixels.
    pub fn width(&self, text: &str, size: f32) -> f64 {
        let mut end = 0.0;
        self.walk(text, size, |_, _, advance_end| end = advance_end);
        f64::from(end)
    }

    /// Draws the line on its own sheet, as high as `size` asks whatever letters it has.
    pub fn ink(&self, text: &str, size: f32) -> Ink {
        let height = (size * 1.3).ceil() as usize;
        let width = self.width(text, size).ceil() as usize + 2;
        let mut ink = Ink { width, height, cover: vec![0.0; width * height] };
        self.walk(text, size, |glyph, baseline, _| {
            let mut glyph = glyph;
            glyph.position.x += 1.0;
            glyph.position.y = size - baseline;
            if let Some(outline) = self.font.outline_glyph(glyph) {
                let corner = outline.px_bounds().min;
                outline.draw(|x, y, cover| {
                    let (x, y) = (corner.x as i64 + i64::from(x), corner.y as i64 + i64::from(y));
                    if x >= 0 && y >= 0 && (x as usize) < width && (y as usize) < height {
                        let place = &mut ink.cover[y as usize * width + x as usize];
                        *place = (*place + cover).min(1.0);
                    }
                });
            }
        });
        ink
    }

    /// Calls `place` for each glyph with its height above the line and where the next one starts.
    fn walk(&self, text: &str, size: f32, mut place: impl FnMut(ab_glyph::Glyph, f32, f32)) {
        let mut x = 0.0;
        let mut raised = false;
        let mut previous = None;
        let mut letters = text.chars().peekable();
        while let Some(letter) = letters.next() {
            if letter == '^' && letters.peek() == Some(&'{') {
                letters.next();
                (raised, previous) = (true, None);
                continue;
            }
            if raised && letter == '}' {
                (raised, previous) = (false, None);
                continue;
            }
            let (height, baseline) = if raised { (size * RAISED_SIZE, size * RAISED_BY) } else { (size, 0.0) };
            // The size is that of an em; ab_glyph asks for the height of a line.
            let em = self.font.units_per_em().unwrap_or(2048.0);
            let scale = PxScale::from(height * self.font.height_unscaled() / em);
            let scaled = self.font.as_scaled(scale);
            let id = self.font.glyph_id(letter);
            if let Some(before) = previous {
                x += scaled.kern(before, id);
            }
            let advance = scaled.h_advance(id);
            place(id.with_scale_and_position(scale, ab_glyph::point(x, 0.0)), baseline, x + advance);
            x += advance;
            previous = Some(id);
        }
    }
}

/// Where a line stands about the point it is drawn at.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Anchor {
    /// The point is its left end.
    Left,
    /// The point is its middle.
    Middle,
    /// The point is its right end.
    Right,
}

/// Draws a line; `y` is the middle of its small letters.
pub fn write(canvas: &mut Canvas, pen: &Pen, text: &str, size: f32, at: (f64, f64), anchor: Anchor, colour: Rgb) {
    let ink = pen.ink(text, size);
    let left = match anchor {
        Anchor::Left => at.0,
        Anchor::Middle => at.0 - ink.width as f64 / 2.0,
        Anchor::Right => at.0 - ink.width as f64,
    };
    let (left, top) = (left.round() as i64, (at.1 - f64::from(size) * 0.66).round() as i64);
    for y in 0..ink.height {
        for x in 0..ink.width {
            canvas.blend(left + x as i64, top + y as i64, colour, f64::from(ink.cover[y * ink.width + x]));
        }
    }
}

/// Draws a line turned to read upwards, its middle at `at`.
pub fn write_upwards(canvas: &mut Canvas, pen: &Pen, text: &str, size: f32, at: (f64, f64), colour: Rgb) {
    let ink = pen.ink(text, size);
    let (left, bottom) =
        ((at.0 - f64::from(size) * 0.66).round() as i64, (at.1 + ink.width as f64 / 2.0).round() as i64);
    for y in 0..ink.height {
        for x in 0..ink.width {
            canvas.blend(left + y as i64, bottom - x as i64, colour, f64::from(ink.cover[y * ink.width + x]));
        }
    }
}
