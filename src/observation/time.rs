//! Sidereal time and parallactic angle, through ERFA (IAU 2006/2000A precession, nutation and sidereal time).

use super::Observation;
use crate::sky::{Direction, TangentFrame};
use erfa::aliases::{eraGc2gd, eraGst06, eraPnm06a};
use nalgebra::{Matrix3, Vector3};

/// Modified Julian Date zero, as a Julian Date.
const MJD_ZERO: f64 = 2_400_000.5;
/// TT − UTC in seconds since 2017. Another epoch's value, a minute off at most, moves the angles here by less than
/// 1e-9 rad: it enters precession and nutation only.
const TT_MINUS_UTC_S: f64 = 69.184;
const SECONDS_PER_DAY: f64 = 86_400.0;

/// The matrix from ICRS axes to Earth-fixed axes. Polar motion (below 0.5 arcsec) and aberration (below 21 arcsec in
/// direction, alike for all of a field) are left out.
fn icrs_to_earth(mjd_utc: f64, ut1_utc_s: f64) -> Matrix3<f64> {
    let (ut1, tt) = (mjd_utc + ut1_utc_s / SECONDS_PER_DAY, mjd_utc + TT_MINUS_UTC_S / SECONDS_PER_DAY);
    let to_date = eraPnm06a(MJD_ZERO, tt);
    let (s, c) = eraGst06(MJD_ZERO, ut1, MJD_ZERO, tt, to_date).sin_cos();
    Matrix3::new(c, s, 0.0, -s, c, 0.0, 0.0, 0.0, 1.0) * Matrix3::from_fn(|i, j| to_date[i][j])
}

/// The geodetic (WGS84) vertical of an Earth-fixed position, in Earth-fixed axes.
fn vertical(position_m: [f64; 3]) -> Vector3<f64> {
    let [longitude, latitude, _height] = eraGc2gd(erfa::Ellipsoid::WGS84, position_m);
    let (sin_lat, cos_lat) = latitude.sin_cos();
    Vector3::new(cos_lat * longitude.cos(), cos_lat * longitude.sin(), sin_lat)
}

/// Position angle of `zenith` (ICRS axes) seen from the centre of `frame`, from North through East.
fn position_angle(frame: &TangentFrame, zenith: &Vector3<f64>) -> f64 {
    let seen = frame.axes * zenith;
    if seen.x == 0.0 && seen.y == 0.0 { 0.0 } else { seen.x.atan2(seen.y) }
}

/// Parallactic angle, radians: the position angle of the zenith at `aim`, measured from ICRS North through East.
///
/// With hour angle H and declination δ of date this is atan2(sin H, tan φ cos δ − sin δ cos H), plus the small angle
/// (0.1° after twenty years) between North of date and the North of ICRS images, in which patterns must turn.
pub fn parallactic_angle(position_m: [f64; 3], aim: Direction, mjd_utc: f64, ut1_utc_s: f64) -> f64 {
    let zenith = icrs_to_earth(mjd_utc, ut1_utc_s).transpose() * vertical(position_m);
    position_angle(&aim.frame(), &zenith)
}

/// Local hour angle and declination of date, radians, of an ICRS direction. Hour angle lies in (−π, π].
pub fn hour_angle_declination(
    position_m: [f64; 3],
    direction: Direction,
    mjd_utc: f64,
    ut1_utc_s: f64,
) -> (f64, f64) {
    let seen = icrs_to_earth(mjd_utc, ut1_utc_s) * direction.unit_vector();
    let longitude = position_m[1].atan2(position_m[0]);
    let greenwich = -seen.y.atan2(seen.x);
    let local = (greenwich + longitude).rem_euclid(std::f64::consts::TAU);
    let hour_angle = if local > std::f64::consts::PI { local - std::f64::consts::TAU } else { local };
    // not asin: rounding may carry z past 1, and asin has no digits near a pole
    (hour_angle, seen.z.atan2(seen.x.hypot(seen.y)))
}

/// (u, v, w) in metres of an Earth-fixed baseline, in the tangent frame of an ICRS direction.
pub fn baseline_uvw(baseline_m: [f64; 3], frame: &TangentFrame, mjd_utc: f64, ut1_utc_s: f64) -> [f64; 3] {
    let to_icrs = icrs_to_earth(mjd_utc, ut1_utc_s).transpose();
    (frame.axes * (to_icrs * Vector3::from(baseline_m))).into()
}

/// Parallactic angles of all stations of an observation, for its aim.
#[derive(Debug, Clone)]
pub struct ParallacticAngles {
    verticals: Vec<Vector3<f64>>,
    frame: TangentFrame,
    ut1_utc_s: f64,
}

impl ParallacticAngles {
    /// Prepares for the stations and aim of `observation`.
    pub fn new(observation: &Observation) -> Self {
        ParallacticAngles {
            verticals: observation.stations.iter().map(|s| vertical(s.position_m)).collect(),
            frame: observation.aim.frame(),
            ut1_utc_s: observation.ut1_utc_s,
        }
    }

    /// The angles at a time, radians, one per station.
    pub fn at(&self, mjd_utc: f64) -> Vec<f64> {
        let to_icrs = icrs_to_earth(mjd_utc, self.ut1_utc_s).transpose();
        self.verticals.iter().map(|up| position_angle(&self.frame, &(to_icrs * up))).collect()
    }

    /// Elevations of the aim above the horizon (geodetic vertical, no refraction) at a time, radians, one per station.
    pub fn elevations_at(&self, mjd_utc: f64) -> Vec<f64> {
        let aim = icrs_to_earth(mjd_utc, self.ut1_utc_s) * self.frame.axes.row(2).transpose();
        self.verticals.iter().map(|up| up.dot(&aim).atan2(up.cross(&aim).norm())).collect()
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Close to the pole of date declination keeps its digits and never becomes NaN. Bound: rounding of three rotations.
    #[test]
    fn declination_holds_at_the_pole_of_date() {
        let mjd = 58_849.0;
        let rows = eraPnm06a(MJD_ZERO, mjd + TT_MINUS_UTC_S / SECONDS_PER_DAY);
        let to_date = Matrix3::from_fn(|i, j| rows[i][j]);
        for (step, from_pole) in [0.0, 1e-12, 1e-9, 1e-7, 1e-4].into_iter().enumerate() {
            for hemisphere in [1.0, -1.0] {
                let (sin, cos) = (step as f64).sin_cos();
                let of_date = Vector3::new(
                    f64::sin(from_pole) * cos,
                    f64::sin(from_pole) * sin,
                    hemisphere * f64::cos(from_pole),
                );
                let direction = Direction::from_vector(&(to_date.transpose() * of_date));
                let (_, declination) = hour_angle_declination([6.4e6, 0.0, 0.0], direction, mjd, 0.0);
                let want = hemisphere * (std::f64::consts::FRAC_PI_2 - from_pole);
                assert!((declination - want).abs() <= 1e-15, "{from_pole:e} from the pole: {declination}");
            }
        }
    }
}
