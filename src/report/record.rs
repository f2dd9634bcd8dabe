//! What a run did, as plain data: written as `run.json`, shown by the report page and the closing summary.
//!
//! Every number carries its unit in its name. A number that was not measured is absent (`null`), never zero.

use super::measured::Measured;
use crate::sky::ImageGeometry;
use serde::{Deserialize, Serialize};
use sha2::{Digest, Sha256};
use std::io::Read;
use std::path::Path;

/// Everything a run leaves for the reader besides the images.
#[derive(Debug, Clone, PartialEq, Default, Serialize, Deserialize)]
pub struct RunRecord {
    /// Title from the run file.
    pub title: String,
    /// The command, for example `image`.
    pub command: String,
    /// The run file as given.
    pub run_file: String,
    /// When the run began, UTC, `YYYY-MM-DDThh:mm:ss`.
    pub started_utc: String,
    /// Threads used.
    pub threads: usize,
    /// Versions of what computed.
    pub versions: Versions,
    /// Files read, with checksums.
    pub inputs: Vec<InputFile>,
    /// Settings after defaults were filled in.
    pub settings: serde_json::Value,
    /// The image made; `None` when the command makes none.
    pub image: Option<ImageFigures>,
    /// Pointings in the order of the run file.
    pub pointings: Vec<PointingRecord>,
    /// Stations by beam and mount.
    pub stations: Vec<StationGroup>,
    /// Promised against measured accuracy of the sums; `None` when it was not measured.
    pub accuracy: Option<Accuracy>,
    /// What the kernel builder did; `None` for exact sums.
    pub kernels: Option<KernelFigures>,
    /// Fitted beam; `None` when it could not be fitted (a warning says why).
    pub beam: Option<BeamFigures>,
    /// Imaging weights and what they cost.
    pub weighting: Option<WeightingFigures>,
    /// Noise figures from the weight map.
    pub noise: Option<Noise>,
    /// What deconvolution did; `None` when there was none.
    #[serde(default)]
    pub deconvolution: Option<super::DeconvolutionFigures>,
    /// What combining fields amounted to; `None` when none were combined.
    #[serde(default)]
    pub combined: Option<super::CombinedFigures>,
    /// What measuring amounted to; `None` when no sources were measured.
    #[serde(default)]
    pub measured: Option<Measured>,
    /// Where the time went.
    pub timings: Vec<StageTime>,
    /// Files written.
    pub products: Vec<Product>,
    /// What the reader must know before trusting the images.
    pub warnings: Vec<String>,
    /// What the figures cannot tell.
    pub limits: Vec<String>,
}

/// A file that was read.
#[derive(Debug, Clone, PartialEq, Eq, Default, Serialize, Deserialize)]
pub struct InputFile {
    /// Path as written in the run file.
    pub path: String,
    /// What it served for, for example `visibilities`.
    pub role: String,
    /// Size, bytes.
    pub bytes: u64,
    /// SHA-256 of its content, 64 hexadecimal digits.
    pub sha256: String,
}

impl InputFile {
    /// Size and checksum of a file, read once in blocks.
    ///
    /// # Errors
    /// When the file cannot be read.
    pub fn measure(path: &Path, role: &str) -> std::io::Result<InputFile> {
        let mut file = std::fs::File::open(path)?;
        let mut digest = Sha256::new();
        let mut block = vec![0; 1 << 20];
        let mut bytes = 0;
        loop {
            let count = match file.read(&mut block) {
                Ok(0) => break,
                Ok(count) => count,
                Err(e) if e.kind() == std::io::ErrorKind::Interrupted => continue,
                Err(e) => return Err(e),
            };
            digest.update(&block[..count]);
            bytes += count as u64;
        }
        let sha256 = digest.finalize().iter().map(|byte| format!("{byte:02x}")).collect();
        Ok(InputFile { path: path.display().to_string(), role: role.to_string(), bytes, sha256 })
    }
}

/// The pixel grid of the products.
#[derive(Debug, Clone, PartialEq, Default, Serialize, Deserialize)]
pub struct ImageFigures {
    /// Right ascension of the centre (ICRS), degrees.
    pub centre_ra_deg: f64,
    /// Declination of the centre (ICRS), degrees.
    pub centre_dec_deg: f64,
    /// Columns.
    pub width_px: usize,
    /// Rows.
    pub height_px: usize,
    /// Pixel side at the centre, arcseconds.
    pub pixel_arcsec: f64,
    /// Projection, `SIN`.
    pub projection: String,
    /// Share of pixels that are not blank, 0 to 1.
    pub filled_fraction: Option<f64>,
    /// Frequency that the image stands for, Hz.
    pub reference_hz: Option<f64>,
}

impl ImageFigures {
    /// The figures of a geometry; share and frequency are left open.
    pub fn of(geometry: &ImageGeometry) -> ImageFigures {
        let (ra, dec) = geometry.centre.to_deg();
        ImageFigures {
            centre_ra_deg: ra,
            centre_dec_deg: dec,
            width_px: geometry.width,
            height_px: geometry.height,
            pixel_arcsec: geometry.pixel.to_degrees() * 3600.0,
            projection: "SIN".to_string(),
            filled_fraction: None,
            reference_hz: None,
        }
    }
}

/// One pointing.
#[derive(Debug, Clone, PartialEq, Default, Serialize, Deserialize)]
pub struct PointingRecord {
    /// Name.
    pub name: String,
    /// Right ascension of the aim (ICRS), degrees.
    pub aim_ra_deg: f64,
    /// Declination of the aim (ICRS), degrees.
    pub aim_dec_deg: f64,
    /// Stations with data.
    pub stations: usize,
    /// Visibilities that went into the sums.
    pub visibilities_used: u64,
    /// Usable visibilities that ranges or tapers of `[weighting]` exclude.
    #[serde(default)]
    pub visibilities_excluded: u64,
    /// Visibilities left out (weight not positive, or value or weight not finite).
    pub visibilities_flagged: u64,
    /// Columns of this pointing's window on the pixel grid.
    pub window_width_px: usize,
    /// Rows of the window.
    pub window_height_px: usize,
}

/// Stations that share beam and mount.
#[derive(Debug, Clone, PartialEq, Default, Serialize, Deserialize)]
pub struct StationGroup {
    /// Name of the beam.
    pub beam: String,
    /// Its shape and sizes in words.
    pub description: String,
    /// Mount, for example `alt-azimuth`.
    pub mount: String,
    /// Names of the stations.
    pub stations: Vec<String>,
    /// Largest pointing offset among them, arcminutes.
    pub largest_pointing_offset_arcmin: Option<f64>,
}

/// Promised against measured accuracy.
#[derive(Debug, Clone, PartialEq, Default, Serialize, Deserialize)]
pub struct Accuracy {
    /// Promised relative error (L2 over the field) of the sums.
    pub promised: f64,
    /// Measured relative L2 error of the numerator N.
    pub measured_numerator: f64,
    /// Measured relative L2 error of the normaliser W.
    pub measured_normaliser: f64,
    /// Visibilities in the sample compared.
    pub sample_visibilities: u64,
    /// Pixels in the sample compared.
    pub sample_pixels: u64,
    /// Whether both measured errors are within the promise.
    pub kept: bool,
}

impl Accuracy {
    /// The record of a measurement; `kept` is false when an error is above the promise or not a number.
    pub fn new(
        promised: f64,
        measured_numerator: f64,
        measured_normaliser: f64,
        sample_visibilities: u64,
        sample_pixels: u64,
    ) -> Accuracy {
        let kept = measured_numerator <= promised && measured_normaliser <= promised;
        Accuracy { promised, measured_numerator, measured_normaliser, sample_visibilities, sample_pixels, kept }
    }

    /// The larger of the two measured errors; NaN when one is.
    pub fn worst(&self) -> f64 {
        if self.measured_numerator.is_nan() || self.measured_normaliser.is_nan() {
            return f64::NAN;
        }
        self.measured_numerator.max(self.measured_normaliser)
    }
}

/// What the kernel builder and its cache report.
#[derive(Debug, Clone, PartialEq, Default, Serialize, Deserialize)]
pub struct KernelFigures {
    /// Combinations of station pair, channel group, parallactic-angle step and w layer asked for.
    pub members: u64,
    /// Kernels built for them.
    pub distinct: u64,
    /// Terms of one kernel, at most.
    pub terms: u64,
    /// Largest difference between a member's beam product and its kernel's, relative.
    pub largest_difference: f64,
    /// The share of the error allotted to such differences.
    pub bound: f64,
    /// Memory of the kernels, bytes.
    pub memory_bytes: u64,
    /// Time to build them, seconds.
    pub build_seconds: f64,
    /// Window that spreads visibilities on the grid.
    #[serde(default)]
    pub window: String,
    /// Its support, cells; the widest of all pointings.
    #[serde(default)]
    pub window_support: u64,
    /// Length of the transforms over that of the images, at least.
    #[serde(default)]
    pub padding: f64,
    /// What the window lets through of a source outside the padded field, at most, relative to the source.
    #[serde(default)]
    pub aliasing: f64,
}

/// The fitted beam.
#[derive(Debug, Clone, PartialEq, Default, Serialize, Deserialize)]
pub struct BeamFigures {
    /// Full width at half maximum of the major axis, arcseconds.
    pub major_arcsec: f64,
    /// Full width at half maximum of the minor axis, arcseconds.
    pub minor_arcsec: f64,
    /// Position angle, North through East, degrees.
    pub position_angle_deg: f64,
    /// Largest difference between point spread function and fit on its main lobe, as a fraction of the peak.
    pub largest_misfit: f64,
}

impl From<&crate::imaging::beam_fit::FittedBeam> for BeamFigures {
    fn from(beam: &crate::imaging::beam_fit::FittedBeam) -> Self {
        BeamFigures {
            major_arcsec: beam.major.to_degrees() * 3600.0,
            minor_arcsec: beam.minor.to_degrees() * 3600.0,
            position_angle_deg: beam.position_angle.to_degrees(),
            largest_misfit: beam.largest_misfit,
        }
    }
}

/// Imaging weights and what they cost.
#[derive(Debug, Clone, PartialEq, Default, Serialize, Deserialize)]
pub struct WeightingFigures {
    /// Scheme, tapers and ranges, in words.
    pub scheme: String,
    /// Noise relative to natural weights of all usable visibilities, √(Σ ω²/w · Σ w) / Σ ω over them as if every beam were 1:
    /// 1 for natural.
    pub relative_noise: f64,
    /// The same where the point spread function is (the image centre unless it is blank), with the beams: of the weight map
    /// against W of natural weights there.
    #[serde(default)]
    pub relative_noise_at_centre: Option<f64>,
    /// Largest value of the point spread function in the plain annulus from 1.2 to 10 fitted widths around its peak, or as far
    /// as the image goes, relative to the peak. A side lobe nearer than that is not seen, and a shoulder of the main lobe
    /// that reaches further is. `None` without a fitted beam.
    pub highest_side_lobe: Option<f64>,
    /// Most negative one there.
    pub lowest_side_lobe: Option<f64>,
}

impl WeightingFigures {
    /// From the price (`None`: natural weights), the noise relative to natural weights at the place of the point spread
    /// function, and side lobes measured on it.
    pub fn new(
        weighting: &crate::run::Weighting,
        price: Option<crate::imaging::Price>,
        at_centre: Option<f64>,
        lobes: Option<crate::imaging::SideLobes>,
    ) -> Self {
        WeightingFigures {
            scheme: weighting.describe(),
            relative_noise: price.map_or(1.0, |price| price.relative_noise()),
            relative_noise_at_centre: if price.is_none() { Some(1.0) } else { at_centre },
            highest_side_lobe: lobes.map(|lobes| lobes.highest),
            lowest_side_lobe: lobes.map(|lobes| lobes.lowest),
        }
    }

    /// Price and side lobes for the HISTORY of products, in ASCII.
    pub fn history(&self) -> Vec<String> {
        let mut lines = Vec::new();
        if self.relative_noise != 1.0 {
            let all = self.relative_noise;
            let mut noise = format!("noise {all:.4} times that of natural weights over all visibilities");
            if let Some(there) = self.relative_noise_at_centre {
                noise += &format!(", {there:.4} where psf.fits has its peak");
            }
            lines.push(noise);
        }
        if let (Some(high), Some(low)) = (self.highest_side_lobe, self.lowest_side_lobe) {
            lines.push(format!(
                "point spread function from 1.2 to 10 beam widths: highest {high:.4}, lowest {low:.4} of the peak"
            ));
        }
        lines
    }
}

/// Noise figures from the weight map: thermal noise as the weights of the data state it.
#[derive(Debug, Clone, PartialEq, Default, Serialize, Deserialize)]
pub struct Noise {
    /// Lowest noise of the flat-sky image, Jy/beam.
    pub lowest_jy_per_beam: f64,
    /// Where it is, right ascension (ICRS), degrees.
    pub lowest_at_ra_deg: f64,
    /// Where it is, declination (ICRS), degrees.
    pub lowest_at_dec_deg: f64,
    /// Median noise over the pixels that are not blank, Jy/beam.
    pub median_jy_per_beam: Option<f64>,
}

/// Time of a stage.
#[derive(Debug, Clone, PartialEq, Default, Serialize, Deserialize)]
pub struct StageTime {
    /// Name of the stage.
    pub stage: String,
    /// Wall time, seconds.
    pub seconds: f64,
}

/// A file that was written.
#[derive(Debug, Clone, PartialEq, Eq, Default, Serialize, Deserialize)]
pub struct Product {
    /// Path relative to the output folder.
    pub path: String,
    /// What it holds, in one line.
    pub what: String,
}

/// Versions of what computed.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize)]
pub struct Versions {
    /// Version of evensky.
    pub evensky: String,
    /// Version of the compiler, when known.
    pub rustc: Option<String>,
}

impl Default for Versions {
    fn default() -> Self {
        Versions { evensky: env!("CARGO_PKG_VERSION").to_string(), rustc: None }
    }
}
