//! What measuring amounted to, for `run.json`, the page and the summary.

use crate::measure::Source;
use serde::{Deserialize, Serialize};

/// Sources that the record holds; `sources.csv` has them all.
const MOST_ROWS: usize = 200;

/// What measuring amounted to.
#[derive(Debug, Clone, PartialEq, Default, Serialize, Deserialize)]
pub struct Measured {
    /// Where flux densities come from, in words.
    pub how: String,
    /// Sources in the list.
    pub sources: usize,
    /// Of these, with a flux density.
    pub with_flux: usize,
    /// Candidates left out because the visibilities do not confirm them.
    pub unconfirmed: usize,
    /// Σ ω|v − model|² of the joint fit over the degrees of freedom: 1 when sources, beams and weights are right.
    pub reduced_misfit: Option<f64>,
    /// Times the visibilities were read.
    pub passes: usize,
    /// The brightest sources.
    pub brightest: Vec<SourceRow>,
}

/// One source, in the units of the tables.
#[derive(Debug, Clone, PartialEq, Default, Serialize, Deserialize)]
pub struct SourceRow {
    /// Name.
    pub name: String,
    /// Right ascension (ICRS), degrees.
    pub ra_deg: f64,
    /// Declination (ICRS), degrees.
    pub dec_deg: f64,
    /// Integrated flux density at the reference frequency, Jy.
    pub flux_jy: Option<f64>,
    /// Its error, Jy.
    pub flux_error_jy: Option<f64>,
    /// Response there.
    pub response: Option<f64>,
    /// Pointings that see it.
    pub pointings: usize,
    /// Spectral index.
    pub spectral_index: f64,
    /// Its error where it was fitted.
    pub spectral_index_error: Option<f64>,
    /// What to know about it.
    pub remarks: String,
}

impl Measured {
    /// The figures of a list, without those of a joint fit.
    pub fn of(sources: &[Source], how: &str) -> Measured {
        let mut order: Vec<&Source> = sources.iter().collect();
        let flux = |source: &Source| source.flux_jy.unwrap_or(f64::NEG_INFINITY);
        order.sort_by(|a, b| flux(b).total_cmp(&flux(a)));
        Measured {
            how: how.to_owned(),
            sources: sources.len(),
            with_flux: sources.iter().filter(|s| s.flux_jy.is_some()).count(),
            brightest: order.into_iter().take(MOST_ROWS).map(SourceRow::from).collect(),
            ..Measured::default()
        }
    }
}

impl From<&Source> for SourceRow {
    fn from(source: &Source) -> Self {
        let (ra_deg, dec_deg) = source.direction.to_deg();
        SourceRow {
            name: source.name.clone(),
            ra_deg,
            dec_deg,
            flux_jy: source.flux_jy,
            flux_error_jy: source.flux_error_jy,
            response: source.response,
            pointings: source.pointings,
            spectral_index: source.spectral_index,
            spectral_index_error: source.spectral_index_error,
            remarks: source.remarks.join("; "),
        }
    }
}

/// A flux density with its error, such as `123.4 ± 1.2 mJy`: the error to two digits.
pub(super) fn flux_with_error(flux: f64, error: f64) -> String {
    let (by, unit) = match flux.abs().max(error) {
        v if v >= 1.0 => (1.0, "Jy"),
        v if v >= 1e-3 => (1e3, "mJy"),
        v if v >= 1e-6 => (1e6, "µJy"),
        _ => (1e9, "nJy"),
    };
    let (flux, error) = (flux * by, error * by);
    if !(flux.is_finite() && error.is_finite() && error > 0.0) {
        return "not measured".to_owned();
    }
    let decimals = (1 - error.log10().floor() as i32).max(0) as usize;
    format!("{flux:.decimals$} ± {error:.decimals$} {unit}").replace('-', "−")
}

/// The line of the closing summary.
pub(super) fn measured_line(measured: &Measured) -> String {
    let plural = if measured.sources == 1 { "" } else { "s" };
    let mut line = format!("{} source{plural}, {}", measured.sources, measured.how);
    if let Some(first) = measured.brightest.first()
        && let (Some(flux), Some(error)) = (first.flux_jy, first.flux_error_jy)
    {
        line += &format!("; brightest {} with {}", first.name, flux_with_error(flux, error));
    }
    if let Some(misfit) = measured.reduced_misfit {
        line += &format!("; misfit {misfit:.3} of the thermal noise's");
    }
    line
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn fluxes_for_people() {
        assert_eq!(flux_with_error(0.68714, 0.000_91), "687.14 ± 0.91 mJy");
        assert_eq!(flux_with_error(12.5, 0.25), "12.50 ± 0.25 Jy");
        assert_eq!(flux_with_error(-2.1e-4, 3.4e-4), "−210 ± 340 µJy");
        assert_eq!(flux_with_error(1.0, f64::INFINITY), "not measured");
    }
}
