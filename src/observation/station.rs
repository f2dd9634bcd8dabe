//! Stations: where they stand and how they are mounted.

use serde::Serialize;

/// How a station follows the sky. Numbers are those of the MNTSTA column of the FITS-IDI convention.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Mount {
    /// Alt-azimuth: the pattern turns on the sky with parallactic angle.
    AltAzimuth,
    /// Equatorial: the pattern keeps its position angle.
    Equatorial,
    /// In orbit.
    Orbiting,
    /// X–Y mount.
    XY,
    /// Any other number, kept as read.
    Other(i32),
}

impl Mount {
    /// From the MNTSTA number.
    pub fn from_code(code: i32) -> Mount {
        match code {
            0 => Mount::AltAzimuth,
            1 => Mount::Equatorial,
            2 => Mount::Orbiting,
            3 => Mount::XY,
            other => Mount::Other(other),
        }
    }

    /// The MNTSTA number.
    pub fn code(self) -> i32 {
        match self {
            Mount::AltAzimuth => 0,
            Mount::Equatorial => 1,
            Mount::Orbiting => 2,
            Mount::XY => 3,
            Mount::Other(code) => code,
        }
    }

    /// A word for people.
    pub fn name(self) -> &'static str {
        match self {
            Mount::AltAzimuth => "alt-azimuth",
            Mount::Equatorial => "equatorial",
            Mount::Orbiting => "orbiting",
            Mount::XY => "X-Y",
            Mount::Other(_) => "other",
        }
    }
}

/// One station.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Station {
    /// Name, as in the file.
    pub name: String,
    /// Earth-fixed geocentric position (X towards Greenwich, Z towards the north pole), metres.
    pub position_m: [f64; 3],
    /// Mount.
    pub mount: Mount,
    /// Dish diameter from the file, metres.
    pub diameter_m: Option<f64>,
    /// Position angle of feed X (or R) from the file, radians.
    pub feed_angle: f64,
}
