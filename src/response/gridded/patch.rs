//! The part of the common pixel grid that one pointing contributes to, and the geometry about its centre.

use crate::beam::{Extent, StationBeams};
use crate::sky::{ImageGeometry, TangentFrame};

/// A window of the common pixel grid with its own phase centre, the direction of its middle pixel.
///
/// With (l, m) about the image centre and (l₀, m₀) the window's centre, the fringe phase about that centre is
/// u′(l − l₀) + v′(m − m₀) + w κ(l, m): u′ = u − w l₀/n₀ and v′ = v − w m₀/n₀ take the linear part of n, and
/// κ = n − n₀ + (l₀(l − l₀) + m₀(m − m₀))/n₀ is the curvature that remains.
#[derive(Debug, Clone)]
pub(crate) struct Patch {
    geometry: ImageGeometry,
    image_frame: TangentFrame,
    aim_frame: TangentFrame,
    /// First column and row in the image.
    pub origin: (usize, usize),
    /// Columns and rows.
    pub size: (usize, usize),
    centre_lmn: [f64; 3],
}

impl Patch {
    /// The smallest window beyond which all beam products stay below `level`, or which the response cut-off ends;
    /// `None` when that misses the image. `lowest_hz` is where the beams are widest.
    pub(crate) fn around(
        geometry: &ImageGeometry,
        beams: &StationBeams,
        lowest_hz: f64,
        level: f64,
    ) -> Option<Patch> {
        let radius = reach(beams, lowest_hz, level).min(beams.radius().unwrap_or(f64::INFINITY));
        let whole = (0, geometry.width, 0, geometry.height);
        let (x0, x1, y0, y1) = if radius >= 1.0 { whole } else { bounding_box(geometry, beams, radius)? };
        let origin = (x0, y0);
        let size = (x1 - x0, y1 - y0);
        let image_frame = geometry.frame();
        let (l, m) = geometry.lm((x0 + size.0 / 2) as f64, (y0 + size.1 / 2) as f64);
        let n = (1.0 - l * l - m * m).sqrt();
        let aim_frame = beams.aim().frame();
        Some(Patch { geometry: *geometry, image_frame, aim_frame, origin, size, centre_lmn: [l, m, n] })
    }

    /// Pixel side, direction cosine.
    pub(crate) fn pixel(&self) -> f64 {
        self.geometry.pixel
    }

    /// Declination of the image centre, radians.
    pub(crate) fn centre_declination(&self) -> f64 {
        self.geometry.centre.dec
    }

    /// The tangent frame of the image.
    pub(crate) fn image_frame(&self) -> &TangentFrame {
        &self.image_frame
    }

    /// u′, v′ (as the module text) and the path from the image centre to the window's centre, from u, v, w about the
    /// image centre; all metres.
    #[inline]
    pub(crate) fn effective(&self, [u, v, w]: [f64; 3]) -> (f64, f64, f64) {
        let [l0, m0, n0] = self.centre_lmn;
        let below = (l0 * l0 + m0 * m0) / (1.0 + n0);
        (u - w * l0 / n0, v - w * m0 / n0, u * l0 + v * m0 - w * below)
    }

    /// l − l₀, m − m₀ of an offset in pixels from the window's centre.
    fn offset(&self, dx: f64, dy: f64) -> (f64, f64) {
        (-dx * self.geometry.pixel, dy * self.geometry.pixel)
    }

    /// Curvature κ at an offset in pixels from the window's centre.
    pub(crate) fn curvature(&self, dx: f64, dy: f64) -> f64 {
        let [l0, m0, n0] = self.centre_lmn;
        let (dl, dm) = self.offset(dx, dy);
        let (l, m) = (l0 + dl, m0 + dm);
        let n = (1.0 - l * l - m * m).max(0.0).sqrt();
        // n − n₀ = −(2 l₀ dl + dl² + 2 m₀ dm + dm²)/(n + n₀), free of cancellation
        let step = -(2.0 * l0 * dl + dl * dl + 2.0 * m0 * dm + dm * dm) / (n + n0);
        step + (l0 * dl + m0 * dm) / n0
    }

    /// l, m about the aim at an offset in pixels from the window's centre.
    pub(crate) fn aim_lm(&self, dx: f64, dy: f64) -> [f64; 2] {
        let (dl, dm) = self.offset(dx, dy);
        let (l, m) = (self.centre_lmn[0] + dl, self.centre_lmn[1] + dm);
        match self.image_frame.direction(l, m) {
            Some(direction) => {
                let [al, am, _] = self.aim_frame.lmn(direction);
                [al, am]
            }
            None => [2.0, 2.0],
        }
    }

    /// Whether a direction is in front of the stations, less than 90° from the aim.
    pub(crate) fn in_front(&self, dx: f64, dy: f64) -> bool {
        let (dl, dm) = self.offset(dx, dy);
        self.image_frame
            .direction(self.centre_lmn[0] + dl, self.centre_lmn[1] + dm)
            .is_some_and(|direction| self.aim_frame.lmn(direction)[2] > 0.0)
    }

    /// Offsets in pixels from the window's centre that its first and last column (or row) have.
    pub(crate) fn span(n: usize) -> (f64, f64) {
        (-((n / 2) as f64), (n - 1 - n / 2) as f64)
    }
}

/// Angle from the aim (as a sine) beyond which no product of two stations' patterns passes `level`.
fn reach(beams: &StationBeams, lowest_hz: f64, level: f64) -> f64 {
    // a product passes the level only where the weaker pattern passes its square root
    let station_level = level.sqrt();
    let mut reach: f64 = 0.0;
    for station in 0..beams.len() {
        let beam = beams.beam(station);
        match beam.pattern.extent(station_level, lowest_hz) {
            Extent::Unbounded => return f64::INFINITY,
            Extent::Radius(radius) => reach = reach.max(radius + beam.offset[0].hypot(beam.offset[1])),
        }
    }
    reach
}

/// Columns and rows `(x0, x1, y0, y1)` (ends excluded) that hold the circle of sine `radius` about the aim.
fn bounding_box(
    geometry: &ImageGeometry,
    beams: &StationBeams,
    radius: f64,
) -> Option<(usize, usize, usize, usize)> {
    let [l, m, n] = geometry.frame().lmn(beams.aim());
    if n <= 0.0 {
        return None;
    }
    // the circle's rim is aim · cos ρ + tangent · sin ρ: its shadow stays within `radius` of (l, m) · cos ρ
    let cos = (1.0 - radius * radius).sqrt();
    let (xc, yc) = geometry.pixel_at(l * cos, m * cos);
    let half = radius / geometry.pixel;
    let clip = |low: f64, high: f64, size: usize| {
        let low = low.floor().max(0.0);
        let high = (high.ceil() + 1.0).min(size as f64);
        (low < high).then_some((low as usize, high as usize))
    };
    let (x0, x1) = clip(xc - half, xc + half, geometry.width)?;
    let (y0, y1) = clip(yc - half, yc + half, geometry.height)?;
    Some((x0, x1, y0, y1))
}
