//! Which axes a station table uses: decided by recomputing u, v, w of some rows.

use super::station_table::StationTables;
use super::{SPEED_OF_LIGHT, baseline_uvw};
use crate::sky::TangentFrame;

/// A disagreement below this share is put down to what is left out here: aberration, polar motion, and u, v, w in the
/// equator of date instead of ICRS (0.3 % after thirty years).
const AGREE: f64 = 0.01;

/// A row used for the comparison.
#[derive(Debug, Clone, Copy)]
pub(super) struct Sample {
    pub first: u32,
    pub second: u32,
    pub mjd_utc: f64,
    /// As read, metres if the file says seconds.
    pub uvw_m: [f64; 3],
}

/// What was decided.
#[derive(Debug, Clone)]
pub(super) struct Decision {
    /// Earth-fixed positions of all stations, metres.
    pub positions_m: Vec<[f64; 3]>,
    /// What to multiply u, v, w by (1 when they are what they should be).
    pub uvw_scale: f64,
    pub notes: Vec<String>,
}

#[derive(Debug, Clone, Copy, PartialEq)]
struct Axes {
    left: bool,
    local: bool,
}

impl Axes {
    fn name(self) -> &'static str {
        match (self.left, self.local) {
            (false, false) => "Earth-fixed axes",
            (false, true) => "axes turned to the local meridian",
            (true, false) => "left-handed Earth-fixed axes",
            (true, true) => "left-handed axes turned to the local meridian",
        }
    }

    fn position(self, offset: [f64; 3], centre: [f64; 3]) -> [f64; 3] {
        let [x, y, z] = offset;
        let y = if self.left { -y } else { y };
        let (sin, cos) = if self.local { centre[1].atan2(centre[0]).sin_cos() } else { (0.0, 1.0) };
        [centre[0] + cos * x - sin * y, centre[1] + sin * x + cos * y, centre[2] + z]
    }
}

/// Decides on the axes and units from `samples`, whose phase centre has the frame `frame`.
pub(super) fn decide(
    tables: &StationTables,
    samples: &[Sample],
    frame: &TangentFrame,
    reference_hz: f64,
) -> Decision {
    let positions = |axes: Axes| -> Vec<[f64; 3]> {
        tables.stations.iter().map(|s| axes.position(s.offset_m, s.centre_m)).collect()
    };
    let stated = Axes { left: tables.left_handed, local: false };
    let mut candidates = vec![stated];
    for left in [tables.left_handed, !tables.left_handed] {
        for local in [false, true] {
            let has_meridian = tables.stations.iter().all(|s| s.centre_m[0] != 0.0 || s.centre_m[1] != 0.0);
            if !candidates.contains(&Axes { left, local }) && (has_meridian || !local) {
                candidates.push(Axes { left, local });
            }
        }
    }
    let ut1 = tables.ut1_utc_s;
    let scale = uvw_scale(&positions(stated), samples, reference_hz);
    let mut notes = Vec::new();
    if let Some((_, why)) = scale {
        notes.push(format!("u, v, w are {why}, not seconds as they should be; converted"));
    }
    let uvw_scale = scale.map_or(1.0, |(factor, _)| factor);
    let fits: Vec<f64> =
        candidates.iter().map(|axes| residual(&positions(*axes), samples, frame, ut1, uvw_scale)).collect();
    let best = (0..candidates.len()).filter(|i| fits[*i].is_finite()).min_by(|a, b| fits[*a].total_cmp(&fits[*b]));
    let mut chosen = stated;
    match best {
        None => {
            notes.push("no row could be used to check the axes of the station table; taken as stated".to_string())
        }
        Some(best) if fits[best] <= AGREE => {
            // The stated axes win whenever they agree: near the Greenwich meridian the two kinds are alike.
            let take = if fits[0] <= AGREE && fits[0] < 3.0 * fits[best] { 0 } else { best };
            chosen = candidates[take];
            notes.push(format!(
                "station table in {} (u, v, w recomputed from it differ by {:.2e} of their length)",
                chosen.name(),
                fits[take]
            ));
        }
        Some(best) => {
            let reversed = residual(&positions(stated), samples, frame, ut1, -uvw_scale);
            notes.push(if reversed <= AGREE {
                "u, v, w have the opposite sign to what the station table and the FITS convention (first minus second \
                 station) give; they are used as stated, and if the file is at fault the image is turned by 180 degrees"
                    .to_string()
            } else {
                format!(
                    "u, v, w recomputed from the station table do not fit in any axes: as {} they differ by {:.2e} of \
                     their length, at best ({}) by {:.2e}; parallactic angles may be wrong",
                    stated.name(),
                    fits[0],
                    candidates[best].name(),
                    fits[best]
                )
            });
        }
    }
    let positions_m = positions(chosen);
    let radii = positions_m.iter().map(|p| p.iter().map(|x| x * x).sum::<f64>().sqrt());
    if let Some((n, radius)) = radii.enumerate().find(|(_, r)| *r < 6.3e6) {
        notes.push(format!(
            "station {} lies {:.0} km from the Earth's centre: ARRAYX, ARRAYY, ARRAYZ are missing or wrong, and \
             parallactic angles will be",
            tables.stations[n].station.name,
            radius / 1e3
        ));
    }
    Decision { positions_m, uvw_scale, notes }
}

fn difference(positions: &[[f64; 3]], sample: &Sample) -> Option<[f64; 3]> {
    let (p, q) = (positions.get(sample.first as usize)?, positions.get(sample.second as usize)?);
    Some([q[0] - p[0], q[1] - p[1], q[2] - p[2]])
}

fn square(v: [f64; 3]) -> f64 {
    v.iter().map(|x| x * x).sum()
}

/// sqrt(Σ |stated − recomputed|² / Σ |recomputed|²); NaN without rows.
fn residual(positions: &[[f64; 3]], samples: &[Sample], frame: &TangentFrame, ut1_utc_s: f64, scale: f64) -> f64 {
    let (mut off, mut all) = (0.0, 0.0);
    for sample in samples {
        let Some(baseline) = difference(positions, sample) else { continue };
        let computed = baseline_uvw(baseline, frame, sample.mjd_utc, ut1_utc_s);
        off += square([0, 1, 2].map(|i| sample.uvw_m[i] * scale - computed[i]));
        all += square(computed);
    }
    (off / all).sqrt()
}

/// Whether the lengths of (u, v, w) say another unit than seconds: the factor to metres, and its name. Lengths do not
/// depend on the axes of the station table.
fn uvw_scale(positions: &[[f64; 3]], samples: &[Sample], reference_hz: f64) -> Option<(f64, &'static str)> {
    let mut ratios: Vec<f64> = samples
        .iter()
        .filter_map(|s| difference(positions, s).map(|b| (square(s.uvw_m) / square(b)).sqrt()))
        .filter(|ratio| ratio.is_finite() && *ratio > 0.0)
        .collect();
    ratios.sort_by(f64::total_cmp);
    let ratio = *ratios.get(ratios.len() / 2)?;
    let near = |expected: f64| (ratio / expected - 1.0).abs() < 0.02;
    if near(reference_hz) {
        Some((1.0 / reference_hz, "wavelengths at the reference frequency"))
    } else if near(SPEED_OF_LIGHT) {
        Some((1.0 / SPEED_OF_LIGHT, "metres"))
    } else {
        None
    }
}
