//! Spectra on pixels: the sky as a polynomial in frequency, all its terms deconvolved together.
//!
//! I(x, ν) = (ν/ν₀)^α₀ Σ_t I_t(x) ξⁿ with n = t, ξ = (ν − ν₀)/Δ from −1 to 1 (Sault & Wieringa 1994, A&AS 108, 585; Rau &
//! Cornwell 2011, A&A 532, A71). The beams' own change with frequency is in the response, so the I_t are the sky's. With
//! N_t = Σ ω ξᵗ Re[A* V …] and W_s = Σ ω ξˢ |A|², a source at s makes N_t(x) = Σ_t' I_t' P_{t+t'}(x, s), and at its own pixel
//! P_{t+t'}(s, s) = W_{t+t'}(s). In units of the noise, r_t = N_t/√W_2t (for natural weights; for others both are scaled
//! as N₀ is) and b_t = I_t √W_2t,
//!
//! r_t(x) = Σ_t' p_tt'(x; s) b_t',  p_tt'(s; s) = h_tt' = W_{t+t'}/√(W_2t W_2t').
//!
//! Components are looked for in r₀ and take g h⁻¹ r of their pixel. Odd moments are made of weights that are not negative:
//! ξˢ = (1 + ξ) ξˢ⁻¹ − ξˢ⁻¹.

use super::local_psf::{LocalPsfs, Patch, Scaling};
use super::minor::{Found, Start};
use super::residual::Part;
use crate::observation::{Block, Watched};
use crate::response::ResponseError;
use crate::sky::ImageGeometry;
use nalgebra::{DMatrix, DVector};
use ndarray::Array2;

/// Added to the diagonal of h: with fewer channels than terms it is singular.
const RIDGE: f64 = 1e-6;

/// The polynomials that spectra are made of.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Basis {
    /// ν₀, Hz.
    pub reference_hz: f64,
    /// Δ: the largest distance of a channel from ν₀, Hz.
    pub half_hz: f64,
    /// Terms, the constant one counted.
    pub terms: usize,
}

impl Basis {
    /// For all channels of some pointings about a frequency.
    pub fn new(parts: &[Part], reference_hz: f64, terms: usize) -> Basis {
        let channels = parts.iter().flat_map(|part| &part.source.observation().frequencies_hz);
        let half_hz = channels.map(|hz| (hz - reference_hz).abs()).fold(0.0, f64::max);
        Basis { reference_hz, half_hz: if half_hz > 0.0 { half_hz } else { reference_hz }, terms }
    }

    /// ξ at a frequency.
    pub fn at(&self, hz: f64) -> f64 {
        (hz - self.reference_hz) / self.half_hz
    }

    /// ν₀/Δ: what turns I₁/I₀ to dln I/dln ν.
    pub fn per_log(&self) -> f64 {
        self.reference_hz / self.half_hz
    }
}

/// Multiplies weights by one factor a channel.
fn weigh(block: &mut Block, factors: &[f32]) {
    let hands = block.hands;
    for (cells, factor) in block.weight.chunks_exact_mut(hands).zip(factors.iter().cycle()) {
        cells.iter_mut().for_each(|weight| *weight *= factor);
    }
}

/// Multiplies data by one factor a channel.
pub(super) fn tilt(block: &mut Block, factors: &[f32]) {
    let hands = block.hands;
    for (cells, factor) in block.data.chunks_exact_mut(hands).zip(factors.iter().cycle()) {
        cells.iter_mut().for_each(|value| *value *= *factor);
    }
}

/// Moments of the weights, and the local point spread functions that belong to them.
pub struct Spectral {
    /// The polynomials.
    pub basis: Basis,
    /// W_s, s from 0 to twice the highest power, `[y][x]`.
    pub moments: Vec<Array2<f64>>,
    /// p_tt' by cell, for t ≤ t' in the order 00, 01, 11, 02, 12, 22.
    patches: Vec<Vec<Option<Patch>>>,
    /// What tells cells.
    cells: LocalPsfs,
}

/// Place of the pair (a, b) among the pairs.
fn pair(a: usize, b: usize) -> usize {
    let (low, high) = (a.min(b), a.max(b));
    high * (high + 1) / 2 + low
}

impl Spectral {
    /// Measures them, with as many passes as there are moments.
    ///
    /// # Errors
    /// When visibilities cannot be read.
    pub fn measure(
        parts: &mut [Part],
        geometry: &ImageGeometry,
        scaling: &Scaling,
        most_half: usize,
        basis: Basis,
        rows: &mut (dyn FnMut(u64) + Send),
    ) -> Result<Spectral, ResponseError> {
        let count = 2 * basis.terms - 1;
        let mut measured = Vec::with_capacity(count);
        for power in 0..count as i32 {
            let factors: Vec<Vec<f32>> = parts
                .iter()
                .map(|part| {
                    let channels = part.source.observation().frequencies_hz.iter();
                    let factor = |hz: &f64| {
                        let xi = basis.at(*hz);
                        if power % 2 == 0 { xi.powi(power) } else { (1.0 + xi) * xi.powi(power - 1) }
                    };
                    channels.map(|hz| factor(hz) as f32).collect()
                })
                .collect();
            let mut tilted: Vec<_> = parts
                .iter_mut()
                .zip(&factors)
                .map(|(part, factors)| {
                    let source = Watched::new(part.source, |block: &mut Block| {
                        weigh(block, factors);
                        Ok(())
                    });
                    (source, part.response, part.exact, part.aim)
                })
                .collect();
            let mut tilted: Vec<Part> = tilted
                .iter_mut()
                .map(|(source, response, exact, aim)| Part { source, response: *response, exact, aim: *aim })
                .collect();
            measured.push(LocalPsfs::measure(&mut tilted, geometry, scaling, most_half, count + 1, rows)?);
        }
        Ok(Spectral::of(measured, basis))
    }

    /// From the point spread functions of weights ω ξˢ (even s) and ω (1 + ξ) ξˢ⁻¹ (odd s).
    fn of(measured: Vec<LocalPsfs>, basis: Basis) -> Spectral {
        let moments = (0..measured.len())
            .map(|s| match s % 2 {
                0 => measured[s].normaliser.clone(),
                _ => &measured[s].normaliser - &measured[s - 1].normaliser,
            })
            .collect();
        let cells = measured[0].patches().len();
        let mut patches = Vec::new();
        for high in 0..basis.terms {
            for low in 0..=high {
                let s = low + high;
                let of_cell = |cell: usize| -> Option<Patch> {
                    let scale = (measured[2 * low].peaks[cell] * measured[2 * high].peaks[cell]).sqrt();
                    let patch = measured[s].patches()[cell].as_ref()?;
                    let share = |of: usize| if scale > 0.0 { measured[of].peaks[cell] / scale } else { 0.0 };
                    let mut out = Patch::zeros(patch.half);
                    let own = share(s) as f32;
                    out.values.iter_mut().zip(&patch.values).for_each(|(out, p)| *out = own * p);
                    if s % 2 == 1 {
                        let even = share(s - 1) as f32;
                        let below = measured[s - 1].patches()[cell].as_ref()?;
                        out.values.iter_mut().zip(&below.values).for_each(|(out, p)| *out -= even * p);
                    }
                    Some(out)
                };
                patches.push((0..cells).map(of_cell).collect());
            }
        }
        let cells = measured.into_iter().next().unwrap_or_else(|| LocalPsfs::uniform(1, 1, Patch::zeros((0, 0))));
        Spectral { basis, moments, patches, cells }
    }

    /// The point spread functions of the search image.
    pub fn plain(&self) -> &LocalPsfs {
        &self.cells
    }

    /// √(W_2t/W_0) of a pixel: how the noise of N_t goes with that of N_0.
    fn noise_ratio(&self, term: usize, at: [usize; 2]) -> f64 {
        (self.moments[2 * term][at] / self.moments[0][at]).max(0.0).sqrt()
    }

    /// N_t in units of its noise; 0 where blank.
    pub fn search_image(&self, term: usize, numerator: &Array2<f64>, scaling: &Scaling) -> Vec<f32> {
        numerator
            .indexed_iter()
            .map(|((y, x), n)| {
                let noise = scaling.noise[[y, x]] * self.noise_ratio(term, [y, x]);
                if noise > 0.0 { (n / noise) as f32 } else { 0.0 }
            })
            .collect()
    }

    /// Flux densities I_t of amplitudes b_t, in place.
    pub fn in_jy(&self, term: usize, amplitudes: &mut Array2<f64>, scaling: &Scaling) {
        for ((y, x), value) in amplitudes.indexed_iter_mut().filter(|(_, value)| **value != 0.0) {
            let per_jy = scaling.per_jy[[y, x]] * self.noise_ratio(term, [y, x]);
            *value = if per_jy > 0.0 { *value / per_jy } else { 0.0 };
        }
    }

    /// The matrix W_{t+t'} of a pixel.
    pub fn matrix(&self, at: [usize; 2]) -> DMatrix<f64> {
        DMatrix::from_fn(self.basis.terms, self.basis.terms, |a, b| self.moments[a + b][at])
    }

    /// h⁻¹ of a pixel.
    fn inverse(&self, at: [usize; 2]) -> Option<DMatrix<f64>> {
        let m = self.matrix(at);
        let h = DMatrix::from_fn(m.nrows(), m.ncols(), |a, b| {
            m[(a, b)] / (m[(a, a)] * m[(b, b)]).sqrt() + if a == b { RIDGE } else { 0.0 }
        });
        h.try_inverse().filter(|inverse| inverse.iter().all(|v| v.is_finite()))
    }
}

/// A minor cycle on all terms: components at peaks of the search image, the other terms' share solved at their pixels. On
/// pixels above the level at which it ends, or (`whole`) on all that are open. `further` are the images r₁, r₂ …; gives their
/// amplitudes b_t beside those of b₀.
pub fn minor_cycle(
    start: &Start,
    further: &[Vec<f32>],
    spectral: &Spectral,
    whole: bool,
) -> (Found, Vec<Array2<f64>>) {
    let terms = spectral.basis.terms;
    let shape = (start.height, start.width);
    let mut found = Found { amplitudes: Array2::zeros(shape), components: 0, moved: 0.0, expected: Vec::new() };
    let mut others = vec![Array2::<f64>::zeros(shape); terms - 1];
    let (up, down) = (&start.levels.up, &start.levels.down);
    let counts = |value: f32, at: usize, down: f32| {
        if value > up[at] {
            value
        } else if -value > down {
            -value
        } else {
            0.0
        }
    };
    let taking_part = |at: &usize| {
        let open = up[*at].is_finite() || down[*at].is_finite();
        open && (whole || f64::from(start.image[*at].abs()) > start.level)
    };
    let pixels: Vec<usize> = (0..start.image.len()).filter(taking_part).collect();
    let mut lower: Vec<f32> = pixels.iter().map(|&at| down[at]).collect();
    let mut values: Vec<Vec<f32>> = std::iter::once(start.image)
        .chain(further.iter().map(Vec::as_slice))
        .map(|image| pixels.iter().map(|&at| image[at]).collect())
        .collect();
    let mut inverses: std::collections::HashMap<usize, Option<DMatrix<f64>>> = std::collections::HashMap::new();
    while found.components < start.most {
        let mut peak = (0.0f32, 0);
        for (index, (&value, &at)) in values[0].iter().zip(&pixels).enumerate() {
            let count = counts(value, at, lower[index]);
            if count > peak.0 {
                peak = (count, index);
            }
        }
        let (height, index) = (f64::from(peak.0), peak.1);
        if height == 0.0 || height < start.level.max(start.misfit * found.moved) {
            break;
        }
        let at = pixels[index];
        let (x, y) = (at % start.width, at / start.width);
        let inverse = inverses.entry(at).or_insert_with(|| spectral.inverse([y, x]));
        let residual = DVector::from_fn(terms, |t, _| start.loop_gain * f64::from(values[t][index]));
        let mut amplitude = match inverse {
            Some(inverse) => &*inverse * residual,
            // a pixel that few channels see: the constant term alone
            None => DVector::from_fn(terms, |t, _| if t == 0 { residual[0] } else { 0.0 }),
        };
        if let Some(floor) = &start.floor {
            let stands = floor[[y, x]] + found.amplitudes[[y, x]];
            if amplitude[0] < -stands {
                amplitude *= if amplitude[0] < 0.0 { stands / -amplitude[0] } else { 0.0 };
            }
            lower[index] = if stands + amplitude[0] > 0.0 { up[at] } else { f32::INFINITY };
            if amplitude[0] == 0.0 {
                continue;
            }
        }
        let cell = spectral.cells.cell(x, y);
        let patches: Option<Vec<&Patch>> = spectral.patches.iter().map(|cells| cells[cell].as_ref()).collect();
        let Some(patches) = patches else { break };
        let amounts: Vec<f32> = amplitude.iter().map(|&b| b as f32).collect();
        for (index, &other) in pixels.iter().enumerate() {
            let (dx, dy) = ((other % start.width) as i64 - x as i64, (other / start.width) as i64 - y as i64);
            for (t, values) in values.iter_mut().enumerate() {
                let made: f32 = amounts.iter().enumerate().map(|(u, b)| b * patches[pair(t, u)].at(dx, dy)).sum();
                values[index] -= made;
            }
        }
        found.amplitudes[[y, x]] += amplitude[0];
        others.iter_mut().zip(amplitude.iter().skip(1)).for_each(|(image, b)| image[[y, x]] += b);
        found.components += 1;
        found.moved += start.loop_gain * height;
    }
    found.expected = pixels.iter().copied().zip(values[0].iter().copied()).collect();
    (found, others)
}

#[cfg(test)]
mod tests {
    use super::super::search::Levels;
    use super::*;

    /// Two terms whose point spread functions are one pixel wide: a source of b = (4, −1) with h₀₁ = 0.2 shows as r = h b, and
    /// a loop gain of 1 takes it whole in one component (by hand: h⁻¹ h b = b).
    #[test]
    fn one_component_takes_all_terms_of_a_pixel() {
        let cross = 0.2;
        let one = |v: f64| Patch { half: (0, 0), values: vec![v as f32] };
        let basis = Basis { reference_hz: 1e9, half_hz: 1e8, terms: 2 };
        let flat = |v: f64| Array2::from_elem((3, 4), v);
        let spectral = Spectral {
            basis,
            moments: vec![flat(4.0), flat(cross * 4.0 * 0.5), flat(1.0)],
            patches: vec![vec![Some(one(1.0))], vec![Some(one(cross))], vec![Some(one(1.0))]],
            cells: LocalPsfs::uniform(4, 3, one(1.0)),
        };
        let (mut r0, mut r1) = (vec![0.0f32; 12], vec![0.0f32; 12]);
        (r0[6], r1[6]) = (4.0 - cross as f32, 4.0 * cross as f32 - 1.0);
        let start = Start {
            width: 4,
            height: 3,
            image: &r0,
            levels: Levels { up: vec![0.5; 12], down: vec![0.5; 12] },
            psfs: &spectral.cells,
            loop_gain: 1.0,
            level: 0.0,
            misfit: 0.0,
            most: 5,
            floor: None,
        };
        let (found, others) = minor_cycle(&start, &[r1], &spectral, false);
        assert_eq!(found.components, 1);
        // bound: the ridge of 1e-6 over the smallest eigenvalue, 0.8, and single precision
        assert!((found.amplitudes[[1, 2]] - 4.0).abs() < 1e-5, "{}", found.amplitudes[[1, 2]]);
        assert!((others[0][[1, 2]] + 1.0).abs() < 1e-5, "{}", others[0][[1, 2]]);
        assert!(found.expected.iter().all(|(_, left)| left.abs() < 1e-5));
    }

    #[test]
    fn pairs_stand_in_order() {
        let order = [(0, 0), (0, 1), (1, 1), (0, 2), (1, 2), (2, 2)];
        for (at, (a, b)) in order.into_iter().enumerate() {
            assert_eq!((pair(a, b), pair(b, a)), (at, at));
        }
    }
}
