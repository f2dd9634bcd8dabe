//! Visibilities of sources of 1 Jy, one column a source: the matrix M of the measurement equation v = M S, exactly.
//!
//! Whoever fits flux densities to visibilities, or asks what a wrong beam does to them, needs M itself and not its product
//! with one sky. It has as many rows as there are visibilities, so it is handed out in pieces, one (time, channel) at a
//! time, rows of weight 0 left out:
//!
//! > M_ks = A_k(s) exp(−2πi (u l + v m + w (n − 1))) exp(−2π² (u' C_ll u' + 2 u' C_lm v' + v' C_mm v'))
//!
//! The last factor is that of a Gaussian source of covariance C over (l, m), u' = u − w l/n and v' = v − w m/n being the
//! derivatives of the phase at its place; the beam is taken not to change across it. The spectrum is a factor beside, so
//! that derivatives by the spectral index need no second M.

use super::Exact;
use super::rows::{Intensity, cis_turns, rows_by_time, wavelengths_per_metre};
use crate::observation::Block;
use crate::sky::Direction;
use num_complex::{Complex32, Complex64};
use rayon::prelude::*;
use std::f64::consts::PI;

/// A source of 1 Jy.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct UnitSource {
    /// Where it is.
    pub direction: Direction,
    /// Covariance of its Gaussian shape over (l, m) of the image, `[ll, lm, mm]`, radians²; zeros for a point.
    pub shape: [f64; 3],
    /// Frequency at which it has 1 Jy, Hz.
    pub reference_hz: f64,
    /// Spectral index α of S ∝ ν^α.
    pub spectral_index: f64,
}

impl UnitSource {
    /// A point source.
    pub fn point(direction: Direction, reference_hz: f64, spectral_index: f64) -> Self {
        UnitSource { direction, shape: [0.0; 3], reference_hz, spectral_index }
    }

    /// Its flux density at a frequency, in units of that at the reference frequency.
    pub fn spectrum(&self, hz: f64) -> f64 {
        if self.spectral_index == 0.0 { 1.0 } else { (hz / self.reference_hz).powf(self.spectral_index) }
    }
}

/// Rows of a block at one time.
#[derive(Debug, Clone)]
pub struct TimeRows {
    /// Modified Julian Date, UTC.
    pub mjd_utc: f64,
    /// Indices of rows.
    pub rows: Vec<usize>,
}

impl TimeRows {
    /// The rows of a block, time by time.
    pub fn of(block: &Block) -> Vec<TimeRows> {
        rows_by_time(block).into_iter().map(|(mjd_utc, rows)| TimeRows { mjd_utc, rows }).collect()
    }
}

/// Sources as one pointing's sums need them; see [`Exact::unit_sources`].
pub struct UnitSources {
    points: Vec<super::exact::Point>,
    shapes: Vec<[f64; 3]>,
    sources: Vec<UnitSource>,
}

impl UnitSources {
    /// How many.
    pub fn len(&self) -> usize {
        self.sources.len()
    }

    /// Whether there are none.
    pub fn is_empty(&self) -> bool {
        self.sources.is_empty()
    }
}

/// Some rows of M, of one channel at one time, with the data and weights that belong to them.
#[derive(Debug, Clone, Default)]
pub struct Columns {
    /// Frequency, Hz.
    pub hz: f64,
    /// The spectra at this frequency, one factor a source.
    pub spectra: Vec<f64>,
    /// Visibilities of sources of 1 Jy at this frequency, `[sample][source]`: M without the spectrum.
    pub model: Vec<Complex64>,
    /// |A|² of the same, `[sample][source]`.
    pub beam_power: Vec<f64>,
    /// (u', v') in wavelengths, `[sample][source]`: the derivatives of M by the place of a source are −2πi u' M and −2πi v' M
    /// (the beam is taken not to change over such small ways).
    pub phase_slopes: Vec<[f64; 2]>,
    /// Data: mean over the hands that see the same beam product, weighted, Jy. One for each sample.
    pub data: Vec<Complex64>,
    /// Sum of the weights of those hands, Jy⁻².
    pub weight: Vec<f64>,
    /// The row of the block that each sample comes from.
    pub row: Vec<usize>,
    /// Which group of hands, in the order of the response.
    group: Vec<usize>,
}

impl Exact {
    /// Channels of its visibilities.
    pub fn channels(&self) -> usize {
        self.frequencies_hz.len()
    }

    /// Puts sources in this pointing's frame.
    pub fn unit_sources(&self, sources: &[UnitSource]) -> UnitSources {
        UnitSources {
            points: sources.iter().map(|s| self.point(s.direction)).collect(),
            shapes: sources.iter().map(|s| s.shape).collect(),
            sources: sources.to_vec(),
        }
    }

    /// Takes the model M S off the data of a block, wherever weights are positive; `flux_jy` has one value a source.
    pub fn subtract(&self, sources: &UnitSources, flux_jy: &[f64], block: &mut Block) {
        if sources.is_empty() {
            return;
        }
        let times = TimeRows::of(block);
        let tasks: Vec<(usize, usize)> =
            (0..times.len()).flat_map(|time| (0..self.channels()).map(move |channel| (time, channel))).collect();
        let models: Vec<Vec<(usize, usize, Complex64)>> = tasks
            .par_iter()
            .map(|&(time, channel)| {
                let columns = self.columns(sources, block, &times[time], channel);
                let strengths: Vec<f64> = flux_jy.iter().zip(&columns.spectra).map(|(f, s)| f * s).collect();
                let sum = |row: &[Complex64]| row.iter().zip(&strengths).map(|(m, s)| m * s).sum();
                let samples = columns.row.iter().zip(&columns.group).zip(columns.model.chunks_exact(flux_jy.len()));
                samples.map(|((&row, &group), model)| (block.index(row, channel), group, sum(model))).collect()
            })
            .collect();
        for (at, group, value) in models.into_iter().flatten() {
            for &hand in &self.intensity.groups()[group].1 {
                let data = &mut block.data[at + hand];
                let left = Complex64::new(f64::from(data.re), f64::from(data.im)) - value;
                *data = Complex32::new(left.re as f32, left.im as f32);
            }
        }
    }

    /// The rows of M at one time and channel. All of M is the union over [`TimeRows::of`] and [`Exact::channels`]; the
    /// pieces are independent of each other.
    pub fn columns(&self, sources: &UnitSources, block: &Block, at: &TimeRows, channel: usize) -> Columns {
        let hz = self.frequencies_hz[channel];
        let voltages = self.station_voltages(&self.beams.angles_at(at.mjd_utc), hz, &sources.points);
        let k = wavelengths_per_metre(hz);
        let mut out =
            Columns { hz, spectra: sources.sources.iter().map(|s| s.spectrum(hz)).collect(), ..Columns::default() };
        for &row in &at.rows {
            let turned = self.recentre.turn(block.uvw_m[row]);
            let [u, v, w] = turned.uvw_m;
            let (p, q) = (block.first[row] as usize, block.second[row] as usize);
            for (group, (seen, hands)) in self.intensity.groups().iter().enumerate() {
                let (value, weight) = Intensity::weighted(block, block.index(row, channel), hands);
                if weight == 0.0 {
                    continue;
                }
                for (index, (point, shape)) in sources.points.iter().zip(&sources.shapes).enumerate() {
                    let a = self.product(&voltages, *seen, p, q, index);
                    let [l, m, n1] = point.lmn1;
                    let fringe = cis_turns(-k * (turned.shift_m + u * l + v * m + w * n1));
                    let n = 1.0 + n1;
                    let (ul, vm) = (k * (u - w * l / n), k * (v - w * m / n));
                    let envelope = if *shape == [0.0; 3] {
                        1.0
                    } else {
                        let spread = shape[0] * ul * ul + 2.0 * shape[1] * ul * vm + shape[2] * vm * vm;
                        (-2.0 * PI * PI * spread).exp()
                    };
                    out.model.push(a * fringe * envelope);
                    out.beam_power.push(a.norm_sqr());
                    out.phase_slopes.push([ul, vm]);
                }
                out.data.push(value / weight);
                out.weight.push(weight);
                out.row.push(row);
                out.group.push(group);
            }
        }
        out
    }
}
