//! World coordinates from a header: the celestial axes of an image (Greisen & Calabretta 2002, A&A 395, 1061;
//! Calabretta & Greisen 2002, A&A 395, 1077).
//!
//! Understood: right ascension and declination in either order on any two axes, all other axes of length 1; zenithal
//! projections SIN (slant too), TAN, ARC, STG, ZEA, and NCP as the slant SIN it is (Calabretta & Greisen 2002, §6.1.2);
//! CDi_j, or CDELTi with PCi_j or CROTAi; LONPOLE, also as PVi_3 of the longitude axis. ICRS, and FK5 of equinox 2000: the
//! two agree to some tens of milliarcseconds, and are taken as one. Everything else is refused by keyword.

use super::{FitsProblem, Hdu, Header};
use crate::sky::{CelestialWcs, Direction, Zenithal};
use nalgebra::Matrix2;

/// What the axes of an image say.
#[derive(Debug, Clone, PartialEq)]
pub struct CelestialAxes {
    /// Where the pixels lie. Its first pixel axis is the celestial axis of the lower number.
    pub wcs: CelestialWcs,
    /// Pixels along the celestial axis of the lower number, which runs fastest in the data.
    pub width: usize,
    /// Pixels along the other.
    pub height: usize,
    /// Frequency, Hz: of an axis FREQ, or RESTFRQ; `None` when neither is there.
    pub frequency_hz: Option<f64>,
    /// Whether positions are FK5 of equinox 2000 by the header, taken as ICRS.
    pub fk5: bool,
}

/// Reads the celestial axes of an image.
///
/// # Errors
/// When there are none, or a keyword says something that is not understood.
pub fn celestial_axes(hdu: &Hdu) -> Result<CelestialAxes, FitsProblem> {
    let header = &hdu.header;
    let axes = hdu.axes.len();
    let types: Vec<String> =
        (1..=axes).map(|i| Ok(header.text(&format!("CTYPE{i}"))?.unwrap_or_default())).collect::<Result<_, _>>()?;
    let find = |stem: &str| types.iter().position(|name| name.starts_with(stem)).map(|at| at + 1);
    let (Some(lon), Some(lat)) = (find("RA--"), find("DEC-")) else {
        return Err(no_axes(header, &types));
    };
    for axis in (1..=axes).filter(|&i| i != lon && i != lat) {
        if hdu.axes[axis - 1] != 1 {
            return Err(header.complain(
                &format!("NAXIS{axis}"),
                "1: besides right ascension and declination only axes of one pixel are understood; cut out one plane",
            ));
        }
    }
    for axis in [lon, lat] {
        let unit = header.text(&format!("CUNIT{axis}"))?.unwrap_or_default();
        if !["", "deg", "degree", "degrees"].contains(&unit.trim().to_lowercase().as_str()) {
            return Err(header.complain(&format!("CUNIT{axis}"), "deg"));
        }
    }
    let fk5 = reference_system(header)?;
    let need = |key: String| {
        header.float(&key)?.filter(|v| v.is_finite()).ok_or_else(|| header.complain(&key, "a number (degrees)"))
    };
    let (ra, dec) = (need(format!("CRVAL{lon}"))?, need(format!("CRVAL{lat}"))?);
    if !(-90.0..=90.0).contains(&dec) {
        return Err(header.complain(&format!("CRVAL{lat}"), "a declination from -90 to 90"));
    }
    let projection = projection(header, &types, lon, lat, dec)?;
    let pole = native_pole(header, lon, dec)?;
    let matrix = matrix(header, axes, lon, lat)?;
    let (first, second) = (lon.min(lat), lon.max(lat));
    // CRPIX is 0 where it is absent; pixels of FITS are counted from 1
    let pixel = |axis: usize| Ok(header.float(&format!("CRPIX{axis}"))?.unwrap_or(0.0) - 1.0);
    let reference_pixel = [pixel(first)?, pixel(second)?];
    let wcs =
        CelestialWcs::new(projection, Direction::from_deg(ra, dec), reference_pixel, matrix, pole.to_radians())
            .ok_or_else(|| {
                header.complain(&format!("CDELT{lon}"), "a matrix of CDELT, PC, CD or CROTA that has an inverse")
            })?;
    let length = |axis: usize| usize::try_from(hdu.axes[axis - 1]).unwrap_or(usize::MAX);
    stokes(header, &types)?;
    Ok(CelestialAxes {
        wcs,
        width: length(first),
        height: length(second),
        frequency_hz: frequency(header, &types)?,
        fk5,
    })
}

fn no_axes(header: &Header, types: &[String]) -> FitsProblem {
    let (key, expected) =
        ("CTYPE1", "celestial axes, RA---xxx and DEC--xxx with xxx one of SIN, TAN, ARC, STG, ZEA");
    if header.get(key).is_some() {
        let found = types.iter().map(|t| format!("{t:?}")).collect::<Vec<_>>().join(", ");
        let (hdu, keyword) = (header.label().to_string(), "CTYPEn".to_string());
        return FitsProblem::BadValue { hdu, keyword, found, expected: expected.to_string() };
    }
    header.complain(key, expected)
}

/// Whether it is FK5 of 2000; ICRS otherwise.
fn reference_system(header: &Header) -> Result<bool, FitsProblem> {
    let system = header.text("RADESYS")?.or(header.text("RADECSYS")?).map(|s| s.trim().to_uppercase());
    let equinox_key = if header.get("EQUINOX").is_some() { "EQUINOX" } else { "EPOCH" };
    let equinox = header.float(equinox_key)?;
    let expected = "ICRS, or FK5 with EQUINOX 2000; convert the image first";
    match system.as_deref() {
        Some("ICRS") => Ok(false),
        // without RADESYS the equinox decides; without either it is ICRS (Calabretta & Greisen 2002, §3.1)
        None | Some("") if equinox.is_none() => Ok(false),
        None | Some("") | Some("FK5") => match equinox {
            None | Some(2000.0) => Ok(true),
            Some(_) => Err(header.complain(equinox_key, "2000 (J2000); convert the image first")),
        },
        Some(_) => {
            Err(header.complain(if header.get("RADESYS").is_some() { "RADESYS" } else { "RADECSYS" }, expected))
        }
    }
}

fn projection(
    header: &Header,
    types: &[String],
    lon: usize,
    lat: usize,
    dec_deg: f64,
) -> Result<Zenithal, FitsProblem> {
    let (of_lon, of_lat) = (algorithm(&types[lon - 1]), algorithm(&types[lat - 1]));
    if of_lon != of_lat {
        return Err(header.complain(&format!("CTYPE{lat}"), &format!("the projection of CTYPE{lon}, {of_lon:?}")));
    }
    let parameter = |number: usize| header.float(&format!("PV{lat}_{number}"));
    // native coordinates of the reference point other than the pole, or an offset of it
    for (number, usual) in [(0, 0.0), (1, 0.0), (2, 90.0)] {
        let key = format!("PV{lon}_{number}");
        if header.float(&key)?.is_some_and(|value| value != usual) {
            return Err(
                header.complain(&key, &format!("{usual}: another native reference point is not understood"))
            );
        }
    }
    match of_lon {
        "SIN" => Ok(Zenithal::Sin { xi: parameter(1)?.unwrap_or(0.0), eta: parameter(2)?.unwrap_or(0.0) }),
        "NCP" if dec_deg != 0.0 => Ok(Zenithal::Sin { xi: 0.0, eta: 1.0 / dec_deg.to_radians().tan() }),
        "TAN" => Ok(Zenithal::Tan),
        "ARC" => Ok(Zenithal::Arc),
        "STG" => Ok(Zenithal::Stg),
        "ZEA" => Ok(Zenithal::Zea),
        _ => Err(header.complain(
            &format!("CTYPE{lon}"),
            "a zenithal projection without distortions: SIN, TAN, ARC, STG or ZEA; reproject the image first",
        )),
    }
}

/// `SIN` of `RA---SIN`; the whole rest when something follows, such as a distortion.
fn algorithm(name: &str) -> &str {
    name.get(5..).unwrap_or_default().trim_end()
}

/// φp, degrees.
fn native_pole(header: &Header, lon: usize, dec_deg: f64) -> Result<f64, FitsProblem> {
    let given = header.float(&format!("PV{lon}_3"))?.or(header.float("LONPOLE")?);
    // Calabretta & Greisen (2002), §2.4: 0 when the reference point is at or beyond the native one's latitude, 90° here
    Ok(given.unwrap_or(if dec_deg >= 90.0 { 0.0 } else { 180.0 }))
}

/// (x, y) in radians for a step of one pixel along the first and second celestial axis (columns).
fn matrix(header: &Header, axes: usize, lon: usize, lat: usize) -> Result<Matrix2<f64>, FitsProblem> {
    let any = |stem: &str| {
        header.keywords().any(|(name, _)| {
            name.strip_prefix(stem).is_some_and(|rest| {
                let (i, j) = rest.split_once('_').unwrap_or((rest, "1"));
                [i, j].iter().all(|n| !n.is_empty() && n.bytes().all(|b| b.is_ascii_digit()))
            })
        })
    };
    let step = |axis: usize| -> Result<f64, FitsProblem> {
        let key = format!("CDELT{axis}");
        match header.float(&key)? {
            Some(value) if value.is_finite() && value != 0.0 => Ok(value),
            _ => Err(header.complain(&key, "the pixel in degrees, not 0 (or CDi_j)")),
        }
    };
    let element = |stem: &str, i: usize, j: usize, usual: f64| -> Result<f64, FitsProblem> {
        Ok(header.float(&format!("{stem}{i}_{j}"))?.unwrap_or(usual))
    };
    let (first, second) = (lon.min(lat), lon.max(lat));
    let linear = if any("CD") { Some("CD") } else { any("PC").then_some("PC") };
    if let Some(stem) = linear {
        if header.keywords().any(|(name, _)| name.starts_with("PC00")) {
            return Err(header.complain("PC001001", "PCi_j in today's form"));
        }
        // an axis of one pixel that leans on the sky would move it by (1 − CRPIX) of its steps
        for other in (1..=axes).filter(|&j| j != lon && j != lat) {
            for axis in [lon, lat] {
                if element(stem, axis, other, 0.0)? != 0.0 {
                    let expected = "0: a celestial axis that depends on another one is not understood";
                    return Err(header.complain(&format!("{stem}{axis}_{other}"), expected));
                }
            }
        }
    }
    let rows = match linear {
        Some("CD") => [lon, lat].map(|i| Ok([element("CD", i, first, 0.0)?, element("CD", i, second, 0.0)?])),
        Some(_) => [lon, lat].map(|i| {
            let one = |j| if i == j { 1.0 } else { 0.0 };
            let step = step(i)?;
            Ok([step * element("PC", i, first, one(first))?, step * element("PC", i, second, one(second))?])
        }),
        None => {
            // the rotation of the latitude axis (Greisen & Calabretta 2002, §6.1)
            let turned = header.float(&format!("CROTA{lon}"))?.unwrap_or(0.0);
            if turned != 0.0 && header.float(&format!("CROTA{lat}"))? != Some(turned) {
                return Err(
                    header.complain(&format!("CROTA{lon}"), "the rotation as CROTA of the declination axis")
                );
            }
            let (sin, cos) = header.float(&format!("CROTA{lat}"))?.unwrap_or(0.0).to_radians().sin_cos();
            let (along, up) = (step(lon)?, step(lat)?);
            let (of_lon, of_lat) = ([along * cos, along * sin], [-up * sin, up * cos]);
            let columns = if lon < lat { [of_lon, of_lat] } else { [of_lat, of_lon] };
            [0, 1].map(|row| Ok::<_, FitsProblem>([columns[0][row], columns[1][row]]))
        }
    };
    let [x, y] = rows;
    let (x, y) = (x?, y?);
    Ok(Matrix2::new(x[0], x[1], y[0], y[1]).map(f64::to_radians))
}

/// The value of an axis of one pixel at that pixel.
fn single(header: &Header, axis: usize) -> Result<Option<f64>, FitsProblem> {
    let Some(value) = header.float(&format!("CRVAL{axis}"))? else { return Ok(None) };
    let step = header.float(&format!("CDELT{axis}"))?.or(header.float(&format!("CD{axis}_{axis}"))?).unwrap_or(0.0);
    let reference = header.float(&format!("CRPIX{axis}"))?.unwrap_or(1.0);
    Ok(Some(value + (1.0 - reference) * step))
}

fn frequency(header: &Header, types: &[String]) -> Result<Option<f64>, FitsProblem> {
    let axis = types.iter().position(|name| name.trim() == "FREQ").map(|at| at + 1);
    let found = match axis {
        Some(axis) => (format!("CRVAL{axis}"), single(header, axis)?),
        None if header.get("RESTFRQ").is_some() => ("RESTFRQ".to_string(), header.float("RESTFRQ")?),
        None => ("RESTFREQ".to_string(), header.float("RESTFREQ")?),
    };
    match found {
        (_, None) => Ok(None),
        (_, Some(hz)) if hz.is_finite() && hz > 0.0 => Ok(Some(hz)),
        (key, Some(_)) => Err(header.complain(&key, "a positive frequency in Hz")),
    }
}

/// Only Stokes I, or no word about it.
fn stokes(header: &Header, types: &[String]) -> Result<(), FitsProblem> {
    let Some(axis) = types.iter().position(|name| name.trim() == "STOKES").map(|at| at + 1) else { return Ok(()) };
    match single(header, axis)? {
        None | Some(1.0) => Ok(()),
        Some(_) => Err(header.complain(&format!("CRVAL{axis}"), "1 (Stokes I)")),
    }
}
