//! Places on the Earth: geodetic positions (WGS84) and local East, North, up.

use erfa::Ellipsoid;
use erfa::aliases::{eraGc2gd, eraGd2gc};
use nalgebra::{Matrix3, Vector3};

/// A place on the Earth, and the local axes there: East, North, and up along the geodetic vertical.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Site {
    /// Longitude, East positive, radians.
    pub longitude: f64,
    /// Geodetic latitude, radians.
    pub latitude: f64,
    /// Height above the ellipsoid, metres.
    pub height_m: f64,
    origin: Vector3<f64>,
    /// Rows: East, North, up; columns: Earth-fixed x, y, z.
    axes: Matrix3<f64>,
}

impl Site {
    /// From longitude (East positive) and geodetic latitude in radians, height in metres; `None` when they are no place.
    pub fn new(longitude: f64, latitude: f64, height_m: f64) -> Option<Site> {
        let finite = longitude.is_finite() && latitude.is_finite() && height_m.is_finite();
        let origin = eraGd2gc(Ellipsoid::WGS84, longitude, latitude, height_m).ok().filter(|_| finite)?;
        Some(Site::with_origin(longitude, latitude, height_m, origin))
    }

    /// From an Earth-fixed geocentric position in metres.
    pub fn at(position_m: [f64; 3]) -> Site {
        let [longitude, latitude, height_m] = eraGc2gd(Ellipsoid::WGS84, position_m);
        Site::with_origin(longitude, latitude, height_m, position_m)
    }

    fn with_origin(longitude: f64, latitude: f64, height_m: f64, origin: [f64; 3]) -> Site {
        let (sin_lon, cos_lon) = longitude.sin_cos();
        let (sin_lat, cos_lat) = latitude.sin_cos();
        let east = [-sin_lon, cos_lon, 0.0];
        let north = [-sin_lat * cos_lon, -sin_lat * sin_lon, cos_lat];
        let up = [cos_lat * cos_lon, cos_lat * sin_lon, sin_lat];
        let axes = Matrix3::from_fn(|row, column| [east, north, up][row][column]);
        Site { longitude, latitude, height_m, origin: Vector3::from(origin), axes }
    }

    /// The Earth-fixed position of a place (East, North, up) metres from here.
    pub fn to_earth(&self, east_north_up_m: [f64; 3]) -> [f64; 3] {
        (self.origin + self.axes.transpose() * Vector3::from(east_north_up_m)).into()
    }

    /// (East, North, up) metres from here of an Earth-fixed position.
    pub fn to_local(&self, position_m: [f64; 3]) -> [f64; 3] {
        (self.axes * (Vector3::from(position_m) - self.origin)).into()
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn close(got: [f64; 3], want: [f64; 3]) {
        for (got, want) in got.into_iter().zip(want) {
            assert!((got - want).abs() < 2e-8, "{got} against {want}");
        }
    }

    /// Outside values: astropy 8.0.2, EarthLocation.from_geodetic(21.4, -30.7, 1050), and East, North, up vectors built
    /// from their definition in numpy. Bound: 20 rounding errors of a coordinate.
    #[test]
    fn known_place() {
        let site = Site::new(21.4f64.to_radians(), -30.7f64.to_radians(), 1050.0).unwrap();
        close(site.to_earth([0.0; 3]), [5111449.40173265, 2003155.1161955642, -3237875.4285377385]);
        let station = [5111531.99995856, 2003294.89103274, -3237718.77437096];
        close(site.to_earth([100.0, 200.0, 30.0]), station);
        close(site.to_local(station), [100.0, 200.0, 30.0]);
        let back = Site::at(site.to_earth([0.0; 3]));
        assert!((back.latitude - site.latitude).abs() < 1e-14 && (back.height_m - 1050.0).abs() < 1e-7);
    }

    #[test]
    fn no_place() {
        assert_eq!(Site::new(f64::NAN, 0.0, 0.0), None);
    }
}
