//! Spectral index and curvature on the restored sky, with their errors.
//!
//! The terms of the flat sky are S_t = Σ_s I_t(s) g(x − s) + [H⁻¹ N]_t of the residual, H_tt' = W_{t+t'}. With a_t = S_t/S₀
//! (ν₀/Δ)ᵗ and y = ln(ν/ν₀), ln I = ln S₀ + a₁ y + (a₂ + a₁/2 − a₁²/2) y² + …, so that of
//! I ∝ (ν/ν₀)^(α + β ln(ν/ν₀)) the index is α = α₀ + a₁ and the curvature β = a₂ + a₁/2 − a₁²/2. Errors follow from the covariance
//! of H⁻¹ N, which is H⁻¹ for natural weights and is scaled for others as the weight map is.

use super::Outcome;
use super::local_psf::Scaling;
use super::model::Model;
use super::restore::restored_model;
use super::settings::Settings;
use super::spectral::Spectral;
use crate::imaging::beam_fit::FittedBeam;
use crate::sky::{Component, ImageGeometry};
use nalgebra::{DMatrix, DVector};
use ndarray::Array2;

/// Signal to noise of the restored sky below which nothing is said of its spectrum.
pub const LOWEST_SIGNAL: f64 = 5.0;

/// Maps of the spectrum; NaN where the sky is blank or fainter than [`LOWEST_SIGNAL`] times its noise.
#[derive(Debug, Clone)]
pub struct Spectrum {
    /// Spectral index α at ν₀, I ∝ ν^α.
    pub index: Array2<f64>,
    /// Its standard error from thermal noise.
    pub index_error: Array2<f64>,
    /// Curvature β, with three terms.
    pub curvature: Option<Array2<f64>>,
    /// Its standard error.
    pub curvature_error: Option<Array2<f64>>,
}

/// The spectrum of what a deconvolution with frequency terms found; `None` without terms.
pub fn spectrum(
    outcome: &Outcome,
    scaling: &Scaling,
    geometry: &ImageGeometry,
    beam: &FittedBeam,
    settings: &Settings,
) -> Option<Spectrum> {
    let spectral = outcome.spectral.as_ref()?;
    let terms = spectral.basis.terms;
    let per_log = spectral.basis.per_log();
    let restored: Vec<Array2<f64>> = (0..terms)
        .map(|t| {
            let of_term = term_of(&outcome.model, t, settings, per_log);
            restored_model(&of_term, geometry, beam, settings.reference_hz)
        })
        .collect();
    let blank = || Array2::from_elem((geometry.height, geometry.width), f64::NAN);
    let mut out = Spectrum {
        index: blank(),
        index_error: blank(),
        curvature: (terms > 2).then(blank),
        curvature_error: (terms > 2).then(blank),
    };
    for ((y, x), &noise) in scaling.noise.indexed_iter() {
        let at = [y, x];
        if noise <= 0.0 {
            continue;
        }
        let Some((sky, covariance)) = solved(outcome, spectral, at) else { continue };
        // other weights than natural: the noise of N is t, not √W
        let excess = noise.powi(2) / scaling.normaliser[at];
        let sky: Vec<f64> = sky.iter().zip(&restored).map(|(residual, image)| residual + image[at]).collect();
        let error = |gradient: &[f64]| -> f64 {
            let g = DVector::from_column_slice(gradient);
            (excess * (g.transpose() * &covariance * &g)[(0, 0)]).sqrt()
        };
        let mut first = vec![0.0; terms];
        first[0] = 1.0;
        if sky[0].is_nan() || sky[0] < LOWEST_SIGNAL * error(&first) {
            continue;
        }
        let a1 = per_log * sky[1] / sky[0];
        let mut gradient = vec![0.0; terms];
        (gradient[0], gradient[1]) = (-a1 / sky[0], per_log / sky[0]);
        out.index[at] = settings.spectral_index + a1;
        out.index_error[at] = error(&gradient);
        if let (Some(curvature), Some(curvature_error)) = (&mut out.curvature, &mut out.curvature_error) {
            let a2 = per_log.powi(2) * sky[2] / sky[0];
            curvature[at] = a2 + 0.5 * a1 - 0.5 * a1 * a1;
            gradient[2] = per_log.powi(2) / sky[0];
            gradient[1] = (0.5 - a1) * per_log / sky[0];
            gradient[0] = -(a2 + (0.5 - a1) * a1) / sky[0];
            curvature_error[at] = error(&gradient);
        }
    }
    Some(out)
}

/// H⁻¹ N of the residual at a pixel, and H⁻¹.
fn solved(outcome: &Outcome, spectral: &Spectral, at: [usize; 2]) -> Option<(DVector<f64>, DMatrix<f64>)> {
    let inverse = spectral.matrix(at).try_inverse().filter(|m| m.iter().all(|v| v.is_finite()))?;
    let numerators = std::iter::once(&outcome.numerator).chain(&outcome.further);
    let n = DVector::from_iterator(spectral.basis.terms, numerators.map(|image| image[at]));
    Some((&inverse * n, inverse))
}

/// One term of a model: its pixels, and what point sources with spectra of their own have of it (to second order).
fn term_of(model: &Model, term: usize, settings: &Settings, per_log: f64) -> Model {
    let pixels = if term == 0 { model.pixels.clone() } else { model.terms[term - 1].clone() };
    let points = model
        .points
        .iter()
        .map(|point| {
            let steeper = point.spectral_index - settings.spectral_index;
            let share = match term {
                0 => 1.0,
                1 => steeper / per_log,
                _ => 0.5 * steeper * (steeper - 1.0) / per_log.powi(2),
            };
            Component {
                flux_jy: share * point.flux_at(settings.reference_hz),
                reference_hz: settings.reference_hz,
                spectral_index: 0.0,
                ..point.clone()
            }
        })
        .collect();
    Model { pixels, points, terms: Vec::new() }
}
