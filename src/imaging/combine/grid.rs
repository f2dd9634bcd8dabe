//! The pixels of the mosaic, and which of them a field can reach.

use super::CombineError;
use super::field::FieldFacts;
use crate::sky::{CelestialWcs, Direction, GeometryError, ImageGeometry, Zenithal};
use nalgebra::{Matrix2, Vector3};

/// Most pixels of a mosaic: the two images in memory take 4 GiB then.
pub const MOST_MOSAIC_PIXELS: usize = 1 << 28;
/// Points along each side of a field.
const ALONG_SIDE: usize = 65;
/// Rounds in which the centre is moved to the middle of the fields.
const ROUNDS: usize = 6;
/// How far grids may differ and still be one, pixels.
const SAME: f64 = 1e-6;
/// The shared grid of the fields is taken when it is at most this much larger in area than the smallest.
const SHARED_AREA: f64 = 1.5;

/// Directions along the edge of the pixels that are not blank, to the outer side of the pixels; `None` entries are off the
/// sky.
fn edge(facts: &FieldFacts) -> Vec<Option<Direction>> {
    let [x0, x1, y0, y1] = facts.extent.map(|v| v as f64);
    let (x0, x1, y0, y1) = (x0 - 0.5, x1 + 0.5, y0 - 0.5, y1 + 0.5);
    (0..ALONG_SIDE)
        .flat_map(|i| {
            let t = i as f64 / (ALONG_SIDE - 1) as f64;
            let (x, y) = (x0 + t * (x1 - x0), y0 + t * (y1 - y0));
            [(x, y0), (x, y1), (x0, y), (x1, y)]
        })
        .map(|(x, y)| facts.wcs.direction_of(x, y))
        .collect()
}

/// The middle of a field's usable pixels.
pub(super) fn middle(facts: &FieldFacts) -> [f64; 2] {
    let [x0, x1, y0, y1] = facts.extent.map(|v| v as f64);
    [0.5 * (x0 + x1), 0.5 * (y0 + y1)]
}

/// The side of a field's pixel, the shorter one, radians.
fn side(facts: &FieldFacts) -> f64 {
    let axes = facts.wcs.axes();
    axes.column(0).norm().min(axes.column(1).norm())
}

/// The smallest orthographic image, to the pixel, that covers all fields at the finest pixel of any; or, when all fields lie
/// on pixels of one such image and it is not much larger, that one, so that nothing need be interpolated.
///
/// # Errors
/// When there is no field, they span a hemisphere, or the image would have more than [`MOST_MOSAIC_PIXELS`].
pub fn default_grid(fields: &[FieldFacts]) -> Result<ImageGeometry, CombineError> {
    let pixel = fields.iter().map(side).fold(f64::INFINITY, f64::min);
    let points: Vec<Direction> = fields.iter().flat_map(edge).flatten().collect();
    if points.is_empty() {
        return Err(GeometryError::BeyondHemisphere { corner: 1.0 }.into());
    }
    let sum: Vector3<f64> = points.iter().map(|p| p.unit_vector()).sum();
    let mut centre = Direction::from_vector(&sum);
    let mut half = [0.0; 2];
    for _ in 0..ROUNDS {
        let Some([l, m]) = spans(centre, &points) else {
            return Err(GeometryError::BeyondHemisphere { corner: 1.0 }.into());
        };
        half = [0.5 * (l[1] - l[0]), 0.5 * (m[1] - m[0])];
        centre = centre.frame().direction(0.5 * (l[0] + l[1]), 0.5 * (m[0] + m[1])).unwrap_or(centre);
    }
    // what the last move of the centre leaves uneven
    if let Some([l, m]) = spans(centre, &points) {
        half = [l, m].map(|span| span[1].max(-span[0]));
    }
    let sides = half.map(|half| 2.0 * (half / pixel - 0.5 - SAME).ceil().max(0.0) + 1.0);
    if let Some(shared) = shared_grid(fields)
        && (shared.width * shared.height) as f64 <= SHARED_AREA * sides[0] * sides[1]
    {
        return sized(shared);
    }
    // as a number, which cannot overflow, before as a size
    let too_many = sides[0] * sides[1] > MOST_MOSAIC_PIXELS as f64;
    let [width, height] = sides.map(|side| side as usize);
    if too_many {
        return Err(too_large(width, height, pixel));
    }
    sized(ImageGeometry::new(centre, width, height, pixel)?)
}

fn too_large(width: usize, height: usize, pixel: f64) -> CombineError {
    CombineError::TooLarge {
        width,
        height,
        pixel_arcsec: pixel.to_degrees() * 3600.0,
        most: MOST_MOSAIC_PIXELS,
        gib: width as f64 * height as f64 * 16.0 / f64::from(1 << 30),
    }
}

/// Refuses a mosaic that is too large.
pub(super) fn sized(geometry: ImageGeometry) -> Result<ImageGeometry, CombineError> {
    let ImageGeometry { width, height, pixel, .. } = geometry;
    match width.checked_mul(height) {
        Some(pixels) if pixels <= MOST_MOSAIC_PIXELS => Ok(geometry),
        _ => Err(too_large(width, height, pixel)),
    }
}

/// Lowest and highest l and m of the points; `None` when one lies beyond the hemisphere.
fn spans(centre: Direction, points: &[Direction]) -> Option<[[f64; 2]; 2]> {
    let frame = centre.frame();
    let mut spans = [[f64::INFINITY, f64::NEG_INFINITY]; 2];
    for &point in points {
        let [l, m, n] = frame.lmn(point);
        if n.is_nan() || n <= 0.0 {
            return None;
        }
        for (span, value) in spans.iter_mut().zip([l, m]) {
            *span = [span[0].min(value), span[1].max(value)];
        }
    }
    Some(spans)
}

/// The image of our own kind, about the common reference point, on whose pixels all fields lie.
fn shared_grid(fields: &[FieldFacts]) -> Option<ImageGeometry> {
    let first = fields.first()?.wcs;
    let pixel = side(fields.first()?);
    let longest = fields.iter().flat_map(|f| f.size).max()? as f64;
    let ours = |wcs: &CelestialWcs| {
        let apart = (wcs.axes() / pixel - Matrix2::new(-1.0, 0.0, 0.0, 1.0)).abs().max() * longest;
        wcs.projection() == Zenithal::Sin { xi: 0.0, eta: 0.0 }
            && wcs.reference().separation(first.reference()) <= SAME * pixel
            && apart <= SAME
            && wcs.reference_pixel().iter().all(|p| (p - p.round()).abs() <= SAME && p.abs() < 1e9)
    };
    if !fields.iter().all(|facts| ours(&facts.wcs)) {
        return None;
    }
    let mut half = [0i64; 2];
    for facts in fields {
        let reference = facts.wcs.reference_pixel().map(|p| p.round() as i64);
        for axis in 0..2 {
            let (low, high) = (facts.extent[2 * axis] as i64, facts.extent[2 * axis + 1] as i64);
            half[axis] = half[axis].max(high - reference[axis]).max(reference[axis] - low);
        }
    }
    let [width, height] = half.map(|half| 2 * half as usize + 1);
    ImageGeometry::new(first.reference(), width, height, pixel).ok()
}

/// First column and row and one past the last of the pixels of `geometry` that a field can reach; `None` when there are none.
pub(super) fn window(facts: &FieldFacts, geometry: &ImageGeometry) -> Option<[usize; 4]> {
    let mut low = [f64::INFINITY; 2];
    let mut high = [f64::NEG_INFINITY; 2];
    let mut whole = false;
    for point in edge(facts) {
        match point.and_then(|direction| geometry.pixel_of(direction)) {
            Some((x, y)) => {
                low = [low[0].min(x), low[1].min(y)];
                high = [high[0].max(x), high[1].max(y)];
            }
            None => whole = true,
        }
    }
    // a field with an edge beyond the hemisphere, or around the far side: every pixel is asked
    if whole {
        return Some([0, 0, geometry.width, geometry.height]);
    }
    // sides are curved between the points: at most a few in a thousand of their length
    let margin = |axis: usize| 2.0 + 0.01 * (high[axis] - low[axis]);
    let from = |axis: usize| (low[axis] - margin(axis)).floor().max(0.0) as usize;
    let to = |axis: usize, size: usize| ((high[axis] + margin(axis)).ceil() + 1.0).clamp(0.0, size as f64) as usize;
    let found = [from(0), from(1), to(0, geometry.width), to(1, geometry.height)];
    (found[0] < found[2] && found[1] < found[3]).then_some(found)
}

/// Whether any pixel of `geometry` lies within the extent of a field.
pub(super) fn touches(facts: &FieldFacts, geometry: &ImageGeometry) -> bool {
    let [x0, x1, y0, y1] = facts.extent.map(|v| v as f64);
    let within = |x: usize, y: usize| {
        let place = geometry.direction_of(x as f64, y as f64).and_then(|direction| facts.wcs.pixel_of(direction));
        place.is_some_and(|[x, y]| x > x0 - 0.5 && x < x1 + 0.5 && y > y0 - 0.5 && y < y1 + 0.5)
    };
    window(facts, geometry).is_some_and(|[x0, y0, x1, y1]| (y0..y1).any(|y| (x0..x1).any(|x| within(x, y))))
}

/// Steps in pixels of `geometry` (columns: for a step along either axis of the field) at a pixel of the field.
pub(super) fn steps(wcs: &CelestialWcs, geometry: &ImageGeometry, at: [f64; 2]) -> Option<Matrix2<f64>> {
    let place = |x: f64, y: f64| wcs.direction_of(x, y).and_then(|direction| geometry.pixel_of(direction));
    let [x, y] = at;
    let (right, left, up, down) = (place(x + 0.5, y)?, place(x - 0.5, y)?, place(x, y + 0.5)?, place(x, y - 0.5)?);
    Some(Matrix2::new(right.0 - left.0, up.0 - down.0, right.1 - left.1, up.1 - down.1))
}
