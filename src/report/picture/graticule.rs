//! Where lines of equal right ascension and declination meet the frame of a picture, and what to write there.
//!
//! Lines are followed through the real projection ([`ImageGeometry`]): along each edge of the frame the coordinate is
//! sampled, and a crossing is the root of (coordinate - line value), found by bisection. With a celestial pole inside
//! the frame every edge carries right ascensions and the declination circles are labelled within; otherwise right
//! ascension stands below and declination at the left.

use super::sexagesimal::{DEC_STEPS, RA_STEPS, Step};
use crate::sky::{Direction, ImageGeometry};
use std::f64::consts::{FRAC_PI_2, PI};

/// Samples along an edge in which crossings are looked for.
const SAMPLES: usize = 600;
/// Samples along a line drawn across the picture.
const LINE_SAMPLES: usize = 1200;

/// A side of the frame.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Edge {
    /// Lowest row.
    Bottom,
    /// Highest row.
    Top,
    /// East side.
    Left,
    /// West side.
    Right,
}

impl Edge {
    const ALL: [Edge; 4] = [Edge::Bottom, Edge::Top, Edge::Left, Edge::Right];

    fn horizontal(self) -> bool {
        matches!(self, Edge::Bottom | Edge::Top)
    }
}

/// The outline of a picture in image pixels (pixel centres are whole numbers).
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Frame {
    /// Column of the left edge, -0.5 for a whole image.
    pub left: f64,
    /// Column of the right edge.
    pub right: f64,
    /// Row of the bottom edge.
    pub bottom: f64,
    /// Row of the top edge.
    pub top: f64,
}

impl Frame {
    fn point(&self, edge: Edge, t: f64) -> (f64, f64) {
        let across = self.left + t * (self.right - self.left);
        let up = self.bottom + t * (self.top - self.bottom);
        match edge {
            Edge::Bottom => (across, self.bottom),
            Edge::Top => (across, self.top),
            Edge::Left => (self.left, up),
            Edge::Right => (self.right, up),
        }
    }

    fn length(&self, edge: Edge) -> f64 {
        if edge.horizontal() { self.right - self.left } else { self.top - self.bottom }
    }

    fn holds(&self, (x, y): (f64, f64)) -> bool {
        (self.left..=self.right).contains(&x) && (self.bottom..=self.top).contains(&y)
    }
}

/// Which coordinate a line keeps.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Coordinate {
    /// Right ascension.
    RightAscension,
    /// Declination.
    Declination,
}

/// A crossing of a line with the frame.
#[derive(Debug, Clone, PartialEq)]
pub struct Tick {
    /// The coordinate the line keeps.
    pub coordinate: Coordinate,
    /// Its value, radians (right ascension in 0 to 2π).
    pub value: f64,
    /// Side of the frame.
    pub edge: Edge,
    /// Place in image pixels, on the frame.
    pub at: (f64, f64),
    /// What to write there; `None` for a bare tick.
    pub label: Option<String>,
}

/// A declination written beside its circle within the picture.
#[derive(Debug, Clone, PartialEq)]
pub struct InnerLabel {
    /// Declination, radians.
    pub declination: f64,
    /// Place in image pixels.
    pub at: (f64, f64),
    /// What to write.
    pub label: String,
}

/// Ticks, labels and lines of a picture.
#[derive(Debug, Clone, PartialEq)]
pub struct Graticule {
    /// Crossings with the frame.
    pub ticks: Vec<Tick>,
    /// Declinations within the picture, only with a pole in it.
    pub inner: Vec<InnerLabel>,
    /// Lines across the picture in image pixels, where lines bend or spread too much for ticks alone to guide the eye.
    pub lines: Vec<Vec<(f64, f64)>>,
    /// Whether a celestial pole lies inside the frame.
    pub polar: bool,
}

/// Room that labels take, in image pixels.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct LabelRoom {
    /// Width of a label letter.
    pub letter: f64,
    /// Least distance of two declination labels on a vertical edge.
    pub line: f64,
}

/// The graticule of a picture of `geometry` cut to `frame`.
pub fn graticule(geometry: &ImageGeometry, frame: &Frame, room: LabelRoom) -> Graticule {
    let pole = [FRAC_PI_2, -FRAC_PI_2]
        .into_iter()
        .find(|dec| geometry.pixel_of(Direction { ra: 0.0, dec: *dec }).is_some_and(|place| frame.holds(place)));
    let edges: Vec<EdgeTrack> =
        Edge::ALL.into_iter().map(|edge| EdgeTrack::follow(geometry, frame, edge)).collect();
    match pole {
        Some(pole) => about_pole(geometry, frame, &edges, room, pole),
        None => away_from_poles(geometry, frame, &edges, room),
    }
}

/// Both coordinates along an edge; right ascension without jumps. Parts beyond the hemisphere are `None`.
struct EdgeTrack {
    edge: Edge,
    samples: Vec<Option<(f64, f64)>>,
}

impl EdgeTrack {
    fn follow(geometry: &ImageGeometry, frame: &Frame, edge: Edge) -> EdgeTrack {
        let mut last: Option<f64> = None;
        let samples = (0..=SAMPLES)
            .map(|i| {
                let (x, y) = frame.point(edge, i as f64 / SAMPLES as f64);
                let direction = geometry.direction_of(x, y)?;
                let near = last.unwrap_or(geometry.centre.ra);
                let ra = near + turn(direction.ra - near);
                last = Some(ra);
                Some((ra, direction.dec))
            })
            .collect();
        EdgeTrack { edge, samples }
    }

    fn values(&self, coordinate: Coordinate) -> impl Iterator<Item = Option<f64>> {
        self.samples.iter().map(move |s| s.map(|(ra, dec)| pick(coordinate, ra, dec)))
    }

    fn range(&self, coordinate: Coordinate) -> Option<(f64, f64)> {
        self.values(coordinate).flatten().fold(None, |range, v| match range {
            None => Some((v, v)),
            Some((low, high)) => Some((f64::min(low, v), f64::max(high, v))),
        })
    }

    /// Crossings of the lines at whole multiples of `step`, as (multiple, place along the edge 0 to 1).
    fn crossings(
        &self,
        geometry: &ImageGeometry,
        frame: &Frame,
        coordinate: Coordinate,
        step: f64,
    ) -> Vec<(i64, f64)> {
        let values: Vec<Option<f64>> = self.values(coordinate).collect();
        let mut found = Vec::new();
        for (i, pair) in values.windows(2).enumerate() {
            let [Some(a), Some(b)] = pair else { continue };
            let (low, high) = (a.min(*b), a.max(*b));
            // A crossing exactly on a sample belongs to the interval above it.
            for k in (low / step).ceil() as i64..=(high / step).floor() as i64 {
                let value = k as f64 * step;
                if value == *b && i + 2 < values.len() {
                    continue;
                }
                let (mut from, mut to) = (i as f64 / SAMPLES as f64, (i + 1) as f64 / SAMPLES as f64);
                for _ in 0..50 {
                    let middle = (from + to) / 2.0;
                    let (x, y) = frame.point(self.edge, middle);
                    let Some(d) = geometry.direction_of(x, y) else { break };
                    let here = match coordinate {
                        Coordinate::RightAscension => a + turn(d.ra - a),
                        Coordinate::Declination => d.dec,
                    };
                    if (here < value) == (a < b) {
                        from = middle;
                    } else {
                        to = middle;
                    }
                }
                found.push((k, (from + to) / 2.0));
            }
        }
        found.sort_by(|a, b| a.1.total_cmp(&b.1));
        found
    }
}

fn pick(coordinate: Coordinate, ra: f64, dec: f64) -> f64 {
    match coordinate {
        Coordinate::RightAscension => ra,
        Coordinate::Declination => dec,
    }
}

/// An angle in (-π, π].
fn turn(angle: f64) -> f64 {
    let turned = angle.rem_euclid(2.0 * PI);
    if turned > PI { turned - 2.0 * PI } else { turned }
}

/// The finest step whose labels have room on this edge, with its crossings.
fn finest_step(
    geometry: &ImageGeometry,
    frame: &Frame,
    track: &EdgeTrack,
    coordinate: Coordinate,
    room: LabelRoom,
) -> Option<(Step, Vec<(i64, f64)>)> {
    let steps = match coordinate {
        Coordinate::RightAscension => RA_STEPS,
        Coordinate::Declination => DEC_STEPS,
    };
    let (low, high) = track.range(coordinate)?;
    let length = frame.length(track.edge);
    let mut last = None;
    for step in steps {
        if (high - low) / step.radians() > length / room.line {
            continue; // More lines than labels could ever stand: not worth finding.
        }
        let crossings = track.crossings(geometry, frame, coordinate, step.radians());
        let gap = if track.edge.horizontal() {
            (crossings.iter().map(|(k, _)| letters(&step.label(*k))).max().unwrap_or(0) as f64 + 3.0) * room.letter
        } else {
            room.line
        };
        if crossings.windows(2).all(|w| (w[1].1 - w[0].1) * length >= gap) {
            return Some((*step, crossings));
        }
        last = Some((*step, crossings));
    }
    last
}

fn letters(label: &str) -> usize {
    label.chars().filter(|c| !"^{}".contains(*c)).count()
}

fn away_from_poles(geometry: &ImageGeometry, frame: &Frame, edges: &[EdgeTrack], room: LabelRoom) -> Graticule {
    let mut ticks = Vec::new();
    let mut steps = [None, None];
    for (i, coordinate) in [Coordinate::RightAscension, Coordinate::Declination].into_iter().enumerate() {
        let (labelled, bare) = if i == 0 { (&edges[0], &edges[1]) } else { (&edges[2], &edges[3]) };
        let Some((step, crossings)) = finest_step(geometry, frame, labelled, coordinate, room) else { continue };
        steps[i] = Some(step);
        for (k, t) in crossings {
            ticks.push(tick(frame, labelled.edge, coordinate, step, k, t, true));
        }
        for (k, t) in bare.crossings(geometry, frame, coordinate, step.radians()) {
            ticks.push(tick(frame, bare.edge, coordinate, step, k, t, false));
        }
    }
    let mut lines = Vec::new();
    if needs_lines(frame, geometry, edges) {
        let range = |coordinate| {
            edges
                .iter()
                .filter_map(|e| e.range(coordinate))
                .fold((f64::INFINITY, f64::NEG_INFINITY), |a, b| (a.0.min(b.0), a.1.max(b.1)))
        };
        let (ra_range, dec_range) = (range(Coordinate::RightAscension), range(Coordinate::Declination));
        for (coordinate, step) in [Coordinate::RightAscension, Coordinate::Declination].into_iter().zip(steps) {
            let Some(step) = step.map(Step::radians) else { continue };
            let (low, high) = if coordinate == Coordinate::RightAscension { ra_range } else { dec_range };
            for k in (low / step).ceil() as i64..=(high / step).floor() as i64 {
                let value = k as f64 * step;
                lines.extend(match coordinate {
                    Coordinate::RightAscension => trace(geometry, frame, |t| Direction {
                        ra: value,
                        dec: dec_range.0 + t * (dec_range.1 - dec_range.0),
                    }),
                    Coordinate::Declination => trace(geometry, frame, |t| Direction {
                        ra: ra_range.0 + t * (ra_range.1 - ra_range.0),
                        dec: value,
                    }),
                });
            }
        }
    }
    Graticule { ticks, inner: Vec::new(), lines, polar: false }
}

/// Lines help once right ascensions spread by more than a quarter between bottom and top, or a declination line bends
/// by more than a hundredth of the frame.
fn needs_lines(frame: &Frame, geometry: &ImageGeometry, edges: &[EdgeTrack]) -> bool {
    let span = |track: &EdgeTrack| track.range(Coordinate::RightAscension).map(|(low, high)| high - low);
    let spreads = match (span(&edges[0]), span(&edges[1])) {
        (Some(bottom), Some(top)) => (bottom / top - 1.0).abs() > 0.25 || (top / bottom - 1.0).abs() > 0.25,
        _ => true,
    };
    let middle_row = (frame.bottom + frame.top) / 2.0;
    let dec = |x: f64| geometry.direction_of(x, middle_row).map(|d| d.dec);
    let bends = match (dec(frame.left), dec((frame.left + frame.right) / 2.0)) {
        (Some(side), Some(middle)) => (side - middle).abs() > 0.01 * (frame.top - frame.bottom) * geometry.pixel,
        _ => true,
    };
    spreads || bends
}

fn tick(frame: &Frame, edge: Edge, coordinate: Coordinate, step: Step, k: i64, t: f64, labelled: bool) -> Tick {
    let value = k as f64 * step.radians();
    Tick {
        coordinate,
        value: if coordinate == Coordinate::RightAscension { value.rem_euclid(2.0 * PI) } else { value },
        edge,
        at: frame.point(edge, t),
        label: labelled.then(|| step.label(k)),
    }
}

fn about_pole(
    geometry: &ImageGeometry,
    frame: &Frame,
    edges: &[EdgeTrack],
    room: LabelRoom,
    pole: f64,
) -> Graticule {
    // Two hours between lines, three in a small picture.
    let shortest = (frame.right - frame.left).min(frame.top - frame.bottom);
    let hours = if shortest > 40.0 * room.letter { 2 } else { 3 };
    let step = RA_STEPS.iter().copied().find(|s| s.is_hours(hours)).unwrap_or(RA_STEPS[RA_STEPS.len() - 1]);
    let mut ticks = Vec::new();
    for track in edges {
        let length = frame.length(track.edge);
        let mut last_labelled = f64::NEG_INFINITY;
        for (k, t) in track.crossings(geometry, frame, Coordinate::RightAscension, step.radians()) {
            let gap = if track.edge.horizontal() { 5.0 * room.letter } else { room.line * 0.5 };
            let labelled = t * length - last_labelled >= gap;
            if labelled {
                last_labelled = t * length;
            }
            ticks.push(tick(frame, track.edge, Coordinate::RightAscension, step, k, t, labelled));
        }
    }

    // Circles out to the farthest corner, about six of them.
    let sign = pole.signum();
    let farthest = edges
        .iter()
        .filter_map(|e| e.range(Coordinate::Declination))
        .map(|(low, high)| (pole - low).abs().max((pole - high).abs()))
        .fold(0.0, f64::max);
    let circle_step = DEC_STEPS
        .iter()
        .copied()
        .find(|s| s.radians() >= farthest / 6.0 && s.divides_right_angle())
        .unwrap_or(DEC_STEPS[DEC_STEPS.len() - 1]);
    let quarter = (FRAC_PI_2 / circle_step.radians()).round() as i64;
    let circles: Vec<i64> = (1..=(farthest / circle_step.radians()).floor() as i64).map(|k| quarter - k).collect();

    let mut lines = Vec::new();
    let innermost = circle_step.radians() * 0.25;
    for k in 0..(2.0 * PI / step.radians()).round() as i64 {
        lines.extend(trace(geometry, frame, |t| Direction {
            ra: k as f64 * step.radians(),
            dec: pole - sign * (innermost + t * (farthest - innermost)),
        }));
    }
    for k in &circles {
        let dec = sign * *k as f64 * circle_step.radians();
        lines.extend(trace(geometry, frame, |t| Direction { ra: 2.0 * PI * t, dec }));
    }

    // Label the circles along the meridian, half-way between two lines, that shows most of them.
    let meridians = (0..(2.0 * PI / step.radians()).round() as i64).map(|k| (k as f64 + 0.5) * step.radians());
    let mut inner: Vec<InnerLabel> = Vec::new();
    for ra in meridians {
        let here: Vec<InnerLabel> = circles
            .iter()
            .filter_map(|k| {
                let dec = sign * *k as f64 * circle_step.radians();
                let at = geometry.pixel_of(Direction { ra, dec })?;
                let clear = 4.0 * room.letter;
                let inset = Frame {
                    left: frame.left + clear,
                    right: frame.right - clear,
                    bottom: frame.bottom + 0.5 * clear,
                    top: frame.top - 0.5 * clear,
                };
                let label = circle_step.label(if sign < 0.0 { -*k } else { *k });
                inset.holds(at).then_some(InnerLabel { declination: dec, at, label })
            })
            .collect();
        if here.len() > inner.len() {
            inner = here;
        }
    }
    Graticule { ticks, inner, lines, polar: true }
}

/// The parts of a curve on the sky (t from 0 to 1) that lie in the frame.
fn trace(geometry: &ImageGeometry, frame: &Frame, curve: impl Fn(f64) -> Direction) -> Vec<Vec<(f64, f64)>> {
    let mut parts = Vec::new();
    let mut open: Vec<(f64, f64)> = Vec::new();
    for i in 0..=LINE_SAMPLES {
        match geometry.pixel_of(curve(i as f64 / LINE_SAMPLES as f64)).filter(|place| frame.holds(*place)) {
            Some(place) => open.push(place),
            None if open.len() > 1 => parts.push(std::mem::take(&mut open)),
            None => open.clear(),
        }
    }
    if open.len() > 1 {
        parts.push(open);
    }
    parts
}
