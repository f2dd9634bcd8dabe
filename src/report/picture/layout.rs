//! The sheet: where image, ticks, labels, colour bar, beam and small print go.

use super::canvas::{Canvas, Rgb};
use super::graticule::{Edge, Frame, Graticule, LabelRoom, graticule};
use super::scale::{BarNumbers, Scale, Stretch};
use super::text::{Anchor, Pen, write, write_upwards};
use super::{PictureError, PictureSpec};
use crate::imaging::beam_fit::FittedBeam;
use crate::sky::ImageGeometry;
use ndarray::{Array2, ArrayView2};

const PAPER: Rgb = [255, 255, 255];
const INK: Rgb = [28, 30, 38];
const GREY: Rgb = [104, 108, 118];
const LINE: Rgb = [96, 100, 110];
const BLANK: Rgb = [236, 236, 236];
const HATCH: Rgb = [205, 205, 205];

/// Longest side aimed at, pixels of the picture.
const LONGEST: f64 = 900.0;
const TITLE: f32 = 23.0;
const LABEL: f32 = 16.0;
const SMALL: f32 = 13.5;
const TICK: f64 = 7.0;
const BAR: i64 = 20;
const DECLINATION: &str = "Declination (ICRS)";

/// Paints an image (`[y][x]`, NaN = blank) with its axes, colour bar, beam and small print.
///
/// # Errors
/// When image and geometry differ in size, or the font or scale cannot be used.
pub fn paint<T: Copy + Into<f64>>(values: ArrayView2<T>, spec: &PictureSpec) -> Result<Canvas, PictureError> {
    let (rows, columns) = values.dim();
    let ImageGeometry { width, height, .. } = spec.geometry;
    if (rows, columns) != (height, width) || rows == 0 || columns == 0 {
        return Err(PictureError::Shape { rows, columns, height, width });
    }
    let pen = Pen::new()?;
    let zoom = Zoom::choose(width, height);
    let shown = zoom.shown(values);
    let scale = match spec.scale {
        Some(scale) => Scale::new(scale.low, scale.high, scale.stretch)
            .map(|checked| Scale { colours: scale.colours, ..checked })?,
        None => Scale::automatic(shown.iter().copied()),
    };

    let (image_width, image_height) = (shown.ncols() * zoom.enlarge, shown.nrows() * zoom.enlarge);
    let frame = zoom.frame(image_width, image_height);
    let per_point = zoom.image_pixels_per_point();
    let letter = pen.width("0", LABEL);
    let room = LabelRoom { letter: letter * per_point, line: 62.0 * per_point };
    let lines = graticule(&spec.geometry, &frame, room);

    let widest = |edge: Edge| {
        let labels = lines.ticks.iter().filter(|t| t.edge == edge).filter_map(|t| t.label.as_deref());
        labels.map(|l| pen.width(l, LABEL)).fold(0.0, f64::max)
    };
    let bar_height = image_height.max(120) as i64;
    let numbers = BarNumbers::of(&scale, spec.unit, 40.0 / bar_height as f64);
    let bar_labels = numbers.labels.iter().map(|l| pen.width(l, LABEL)).fold(0.0, f64::max);

    let left = (58.0 + widest(Edge::Left)).ceil() as i64;
    let top = 78 + if lines.polar { 26 } else { 0 };
    let right_labels = if lines.polar { widest(Edge::Right) + 10.0 } else { 0.0 };
    let bar_left = left + image_width as i64 + (24.0 + right_labels).ceil() as i64;
    let sheet_width = bar_left + BAR + (15.0 + bar_labels + 48.0).ceil() as i64;
    let small_print = small_print(spec, &zoom, &scale, shown.iter().any(|v| v.is_nan()));
    let print_top = top + bar_height + 68;
    let title_width = pen.width(spec.title, TITLE).max(pen.width(spec.quantity, LABEL)) + 48.0;
    let sheet_width = sheet_width.max((title_width.ceil() as i64).min(1600)).max(420);
    let print_lines = wrap(&pen, &small_print, SMALL, (sheet_width - 48) as f64);
    let sheet_height = print_top + 20 * print_lines.len() as i64 + 14;

    let mut canvas = Canvas::new(sheet_width as usize, sheet_height as usize, PAPER);
    let title = fit(&pen, spec.title, TITLE, (sheet_width - 48) as f64);
    write(&mut canvas, &pen, &title, TITLE, (24.0, 28.0), Anchor::Left, INK);
    let quantity = fit(&pen, spec.quantity, LABEL, (sheet_width - 48) as f64);
    write(&mut canvas, &pen, &quantity, LABEL, (24.0, 54.0), Anchor::Left, GREY);

    let sheet = Sheet { left, top, width: image_width as i64, height: image_height as i64, per_point };
    sheet.image(&mut canvas, &shown, zoom.enlarge, &scale);
    sheet.graticule(&mut canvas, &pen, &lines, &spec.geometry);
    canvas.outline(left, top, sheet.width, sheet.height, INK);
    if let Some(beam) = &spec.beam {
        sheet.beam(&mut canvas, &pen, beam, spec.geometry.pixel);
    }
    let name = numbers.unit.clone();
    let bar = Bar { left: bar_left, top, height: bar_height, labels: bar_labels, name };
    bar.paint(&mut canvas, &pen, &scale, &numbers);
    for (i, line) in print_lines.iter().enumerate() {
        write(&mut canvas, &pen, line, SMALL, (24.0, (print_top + 20 * i as i64) as f64 + 8.0), Anchor::Left, GREY);
    }
    Ok(canvas)
}

/// How image pixels become picture points: blocks of `average` × `average` averaged, each then `enlarge` points wide.
struct Zoom {
    average: usize,
    enlarge: usize,
}

impl Zoom {
    fn choose(width: usize, height: usize) -> Zoom {
        let longest = width.max(height) as f64;
        Zoom {
            average: ((longest / LONGEST).round() as usize).max(1),
            enlarge: ((LONGEST / longest).floor() as usize).clamp(1, 120),
        }
    }

    fn image_pixels_per_point(&self) -> f64 {
        self.average as f64 / self.enlarge as f64
    }

    fn frame(&self, width: usize, height: usize) -> Frame {
        let per_point = self.image_pixels_per_point();
        Frame {
            left: -0.5,
            right: width as f64 * per_point - 0.5,
            bottom: -0.5,
            top: height as f64 * per_point - 0.5,
        }
    }

    /// Block averages; a block is blank when all of its pixels are.
    fn shown<T: Copy + Into<f64>>(&self, values: ArrayView2<T>) -> Array2<f64> {
        let (rows, columns) = values.dim();
        let side = self.average;
        Array2::from_shape_fn((rows.div_ceil(side), columns.div_ceil(side)), |(y, x)| {
            let (mut sum, mut count) = (0.0, 0usize);
            for row in y * side..((y + 1) * side).min(rows) {
                for column in x * side..((x + 1) * side).min(columns) {
                    let value: f64 = values[[row, column]].into();
                    if value.is_finite() {
                        sum += value;
                        count += 1;
                    }
                }
            }
            if count > 0 { sum / count as f64 } else { f64::NAN }
        })
    }
}

/// The rectangle of the image on the canvas.
struct Sheet {
    left: i64,
    top: i64,
    width: i64,
    height: i64,
    per_point: f64,
}

impl Sheet {
    /// Canvas place of a place in image pixels.
    fn place(&self, (x, y): (f64, f64)) -> (f64, f64) {
        let across = (x + 0.5) / self.per_point - 0.5;
        let up = (y + 0.5) / self.per_point - 0.5;
        (self.left as f64 + across, (self.top + self.height - 1) as f64 - up)
    }

    fn image(&self, canvas: &mut Canvas, shown: &Array2<f64>, enlarge: usize, scale: &Scale) {
        for y in 0..self.height {
            let row = (self.height - 1 - y) as usize / enlarge;
            for x in 0..self.width {
                let value = shown[[row, x as usize / enlarge]];
                let colour = match value.is_finite() {
                    true => scale.colour(value),
                    false if (x + y).rem_euclid(8) < 2 => HATCH,
                    false => BLANK,
                };
                canvas.set(self.left + x, self.top + y, colour);
            }
        }
    }

    fn graticule(&self, canvas: &mut Canvas, pen: &Pen, lines: &Graticule, geometry: &ImageGeometry) {
        for line in &lines.lines {
            // Segments of a few points: many short ones would ink their joints twice.
            let mut from = self.place(line[0]);
            for (i, place) in line.iter().enumerate().skip(1) {
                let to = self.place(*place);
                if (to.0 - from.0).hypot(to.1 - from.1) >= 8.0 || i + 1 == line.len() {
                    canvas.stroke(from, to, 0.5, LINE, 0.5);
                    from = to;
                }
            }
        }
        for label in &lines.inner {
            let at = self.place(label.at);
            let half = pen.width(&label.label, SMALL) / 2.0 + 4.0;
            let (x, y) = ((at.0 - half) as i64, at.1 as i64 - 10);
            canvas.fill(x, y, (2.0 * half) as i64, 20, PAPER, 0.75);
            write(canvas, pen, &label.label, SMALL, at, Anchor::Middle, INK);
        }
        for tick in &lines.ticks {
            let at = self.place(tick.at);
            let inward = self.along_line(tick, geometry);
            canvas.stroke(at, (at.0 + TICK * inward.0, at.1 + TICK * inward.1), 1.2, INK, 1.0);
            let Some(label) = &tick.label else { continue };
            let (place, anchor) = match tick.edge {
                Edge::Bottom => ((at.0, at.1 + 17.0), Anchor::Middle),
                Edge::Top => ((at.0, at.1 - 15.0), Anchor::Middle),
                Edge::Left => ((at.0 - 9.0, at.1), Anchor::Right),
                Edge::Right => ((at.0 + 9.0, at.1), Anchor::Left),
            };
            write(canvas, pen, label, LABEL, place, anchor, INK);
        }
        let (middle_x, middle_y) = ((self.left + self.width / 2) as f64, (self.top + self.height / 2) as f64);
        let (below, beside) = match lines.polar {
            true => ("Right ascension along the frame, declination on the circles (ICRS)", ""),
            false if (self.height as f64) < pen.width(DECLINATION, LABEL) => {
                ("Right ascension below, declination at the left (ICRS)", "")
            }
            false => ("Right ascension (ICRS)", DECLINATION),
        };
        let below = fit(pen, below, LABEL, (canvas.width() - 40) as f64);
        let below_half = pen.width(&below, LABEL) / 2.0 + 12.0;
        let below_x = middle_x.max(below_half);
        write(canvas, pen, &below, LABEL, (below_x, (self.top + self.height) as f64 + 42.0), Anchor::Middle, INK);
        write_upwards(canvas, pen, beside, LABEL, (26.0, middle_y), INK);
    }

    /// Direction on the canvas, into the picture, of the line that a tick belongs to.
    fn along_line(&self, tick: &super::graticule::Tick, geometry: &ImageGeometry) -> (f64, f64) {
        let straight = match tick.edge {
            Edge::Bottom => (0.0, -1.0),
            Edge::Top => (0.0, 1.0),
            Edge::Left => (1.0, 0.0),
            Edge::Right => (-1.0, 0.0),
        };
        let (x, y) = tick.at;
        // A step of a few picture points along the line, found by moving the other coordinate.
        let step = 3.0 * self.per_point * geometry.pixel;
        let Some(here) = geometry.direction_of(x, y) else { return straight };
        let mut there = here;
        match tick.coordinate {
            super::Coordinate::RightAscension => there.dec += step,
            super::Coordinate::Declination => there.ra += step / here.dec.cos().max(1e-6),
        }
        let Some((x2, y2)) = geometry.pixel_of(there) else { return straight };
        let (dx, dy) = (x2 - x, -(y2 - y));
        let length = dx.hypot(dy);
        let inward = (dx * straight.0 + dy * straight.1) / length;
        // A line that grazes the frame gets a straight tick, or its own would be unreadable.
        if inward.is_nan() || inward.abs() <= 0.3 {
            return straight;
        }
        (dx / length * inward.signum(), dy / length * inward.signum())
    }

    /// The beam in the lower left corner, at the scale of the picture, or enlarged by a stated whole factor.
    fn beam(&self, canvas: &mut Canvas, pen: &Pen, beam: &FittedBeam, pixel: f64) {
        let points = |angle: f64| angle / pixel / self.per_point;
        let room = (self.width.min(self.height) as f64) * 0.3;
        if !(points(beam.major).is_finite() && points(beam.major) <= room && self.width.min(self.height) >= 90) {
            return; // Larger than a third of the picture: the small print states it.
        }
        let factor = if points(beam.minor) < 5.0 {
            (9.0 / points(beam.minor)).ceil().min(room / points(beam.major))
        } else {
            1.0
        };
        let factor = factor.floor().max(1.0);
        let (major, minor) = (points(beam.major) * factor, points(beam.minor) * factor);
        let label = if factor > 1.0 { format!("beam × {factor}") } else { "beam".to_string() };
        let label_width = pen.width(&label, SMALL);
        let box_width = (major + 18.0).max(label_width + 12.0).ceil();
        let box_height = (major + 16.0).max(24.0).ceil() + 18.0;
        let (x, y) = (self.left + 10, self.top + self.height - 10 - box_height as i64);
        canvas.fill(x, y, box_width as i64, box_height as i64, PAPER, 0.9);
        canvas.outline(x, y, box_width as i64, box_height as i64, GREY);
        let centre = (x as f64 + box_width / 2.0, y as f64 + (box_height - 18.0) / 2.0);
        let reach = (major / 2.0 + 2.0).ceil() as i64;
        let (sin, cos) = beam.position_angle.sin_cos();
        let inside = |x: f64, y: f64| {
            let (east, north) = (-(x - centre.0), -(y - centre.1));
            let (along, across) = (east * sin + north * cos, east * cos - north * sin);
            (along / (major / 2.0)).powi(2) + (across / (minor / 2.0)).powi(2) <= 1.0
        };
        for dy in -reach..=reach {
            for dx in -reach..=reach {
                let (px, py) = (centre.0.round() as i64 + dx, centre.1.round() as i64 + dy);
                // Sixteen samples a pixel give the ellipse a smooth edge.
                let hits = (0..16)
                    .filter(|i| {
                        let (sx, sy) = (f64::from(i % 4) / 4.0 - 0.375, f64::from(i / 4) / 4.0 - 0.375);
                        inside(px as f64 + sx, py as f64 + sy)
                    })
                    .count();
                canvas.blend(px, py, INK, hits as f64 / 16.0);
            }
        }
        let label_y = (y as f64) + box_height - 10.0;
        write(canvas, pen, &label, SMALL, (x as f64 + box_width / 2.0, label_y), Anchor::Middle, INK);
    }
}

/// The colour bar.
struct Bar {
    left: i64,
    top: i64,
    height: i64,
    labels: f64,
    name: String,
}

impl Bar {
    fn paint(&self, canvas: &mut Canvas, pen: &Pen, scale: &Scale, numbers: &BarNumbers) {
        for y in 0..self.height {
            let place = 1.0 - (y as f64 + 0.5) / self.height as f64;
            canvas.fill(self.left, self.top + y, BAR, 1, scale.colour(scale.value_at(place)), 1.0);
        }
        canvas.outline(self.left, self.top, BAR, self.height, INK);
        let right = (self.left + BAR) as f64;
        for (value, label) in numbers.values.iter().zip(&numbers.labels) {
            let y = self.top as f64 - 0.5 + (1.0 - scale.place(*value)) * self.height as f64;
            canvas.stroke((right, y), (right + 5.0, y), 1.2, INK, 1.0);
            let x = right + 15.0 + self.labels;
            write(canvas, pen, label, LABEL, (x, y), Anchor::Right, INK);
        }
        let x = right + 15.0 + self.labels + 24.0;
        write_upwards(canvas, pen, &self.name, LABEL, (x, (self.top + self.height / 2) as f64), INK);
    }
}

fn small_print(spec: &PictureSpec, zoom: &Zoom, scale: &Scale, has_blank: bool) -> String {
    let mut parts = Vec::new();
    if let Some(beam) = &spec.beam {
        parts.push(format!(
            "Beam {}, position angle {}°.",
            readable_sizes(beam.major, beam.minor),
            format!("{:.1}", beam.position_angle.to_degrees()).replace('-', "−")
        ));
    }
    parts.push(match (zoom.average, zoom.enlarge) {
        (1, 1) => "One picture point a pixel.".to_string(),
        (1, factor) => format!("Each pixel is shown {factor} points wide."),
        (side, _) => {
            format!("Each picture point is the mean of {side} × {side} pixels; point sources look fainter.")
        }
    });
    parts.push(match scale.stretch {
        Stretch::Linear => "Linear scale.".to_string(),
        Stretch::Asinh { .. } => "Scale: asinh, even steps near zero, factors beyond.".to_string(),
    });
    if has_blank {
        parts.push("Hatched: blank.".to_string());
    }
    parts.push(format!("Pixel {}, SIN projection.", readable_angle(spec.geometry.pixel)));
    parts.join("  ")
}

/// An angle in the unit that keeps it between 1 and 100 or so, with three significant digits.
pub fn readable_angle(radians: f64) -> String {
    let (per_radian, unit) = readable_unit(radians);
    format!("{}{unit}", three_digits(radians * per_radian))
}

/// The sizes of an ellipse, both in the unit that suits the larger.
pub fn readable_sizes(major: f64, minor: f64) -> String {
    let (per_radian, unit) = readable_unit(major);
    format!("{}{unit} × {}{unit}", three_digits(major * per_radian), three_digits(minor * per_radian))
}

fn readable_unit(radians: f64) -> (f64, &'static str) {
    let per_radian = 1f64.to_degrees() * 3600.0;
    match radians * per_radian {
        a if a < 0.1 => (per_radian * 1000.0, " mas"),
        a if a < 100.0 => (per_radian, "″"),
        a if a < 6000.0 => (per_radian / 60.0, "′"),
        _ => (per_radian / 3600.0, "°"),
    }
}

fn three_digits(value: f64) -> String {
    let decimals = (2 - value.abs().max(1e-3).log10().floor() as i32).clamp(0, 4) as usize;
    format!("{value:.decimals$}")
}

/// The line cut with an ellipsis where it would run over.
fn fit(pen: &Pen, line: &str, size: f32, room: f64) -> String {
    if pen.width(line, size) <= room {
        return line.to_string();
    }
    let mut letters: Vec<char> = line.chars().collect();
    while !letters.is_empty() {
        letters.pop();
        let cut: String = letters.iter().chain(&['…']).collect();
        if pen.width(&cut, size) <= room {
            return cut;
        }
    }
    String::new()
}

fn wrap(pen: &Pen, line: &str, size: f32, room: f64) -> Vec<String> {
    let mut lines: Vec<String> = Vec::new();
    for word in line.split(' ') {
        match lines.last_mut() {
            Some(last) if pen.width(&format!("{last} {word}"), size) <= room => {
                last.push(' ');
                last.push_str(word);
            }
            _ => lines.push(word.to_string()),
        }
    }
    lines
}
