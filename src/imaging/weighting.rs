//! Imaging weights ω in place of inverse variances w: uniform and robust weights, tapers, ranges of u, v.
//!
//! With D(u, v) the sum of w in a cell of the u, v plane (a visibility counts at u, v and at −u, −v, for the sky is real):
//!
//! - uniform: ω = w / D
//! - robust (Briggs 1995, PhD thesis, New Mexico Institute of Mining and Technology): ω = w / (1 + f² D) with
//!   f² = (5 · 10^−R)² / (Σ_cells D² / 2Σ_k w_k). Both halves of the plane stand above and below, hence the 2: the ratio
//!   is that of Σ W_k² and Σ w_i over one half.
//! - tapers and ranges multiply ω by a function of the distance ρ = √(u² + v²)
//!
//! and all ω are then scaled so that their sum is that of the w. What ranges and tapers exclude does not count in D: the
//! density is that of what is imaged. u and v are those about the image centre, so that the pointings of a mosaic share one
//! plane; the density is that of all pointings together unless asked otherwise, since one sum makes the mosaic: what one
//! pointing samples densely another need not sample again where both see the sky.

mod density;
#[cfg(test)]
mod tests;
mod weighted;

pub use weighted::Weighted;

use crate::observation::{Block, BlockSource, Observation, ObservationError};
use crate::response::{Recentre, wavelengths_per_metre};
use crate::run::{DensityOf, Scheme, Weighting};
use crate::sky::ImageGeometry;
use density::{Density, MOST_CELLS};
use std::f64::consts::{LN_2, PI};
use std::sync::Arc;
use thiserror::Error;

/// Tapers below this exclude: what is left would not survive single precision beside other factors.
const LEAST_TAPER: f64 = 1e-30;

/// What multiplies the weights of one pointing.
#[derive(Debug, Clone)]
pub struct Weigher {
    weighting: Weighting,
    recentre: Recentre,
    frequencies_hz: Vec<f64>,
    hands: Vec<usize>,
    /// Sides of a cell of the density, wavelengths.
    cell: (f64, f64),
    density: Arc<Density>,
    /// f² of robust weights.
    robust: f64,
    scale: f64,
}

/// Where a visibility lies about the image centre.
#[derive(Debug, Clone, Copy)]
struct Place {
    /// u, wavelengths.
    u: f64,
    /// v, wavelengths.
    v: f64,
    /// √(u² + v²) in metres.
    length_m: f64,
}

impl Place {
    fn new(uvw_m: [f64; 3], hz: f64) -> Place {
        let k = wavelengths_per_metre(hz);
        Place { u: uvw_m[0] * k, v: uvw_m[1] * k, length_m: uvw_m[0].hypot(uvw_m[1]) }
    }
}

/// What the total-intensity hands of a row and channel amount to.
#[derive(Debug, Clone, Copy)]
struct Sample {
    place: Place,
    hz: f64,
    /// Sum of their inverse variances.
    weight: f64,
    /// Hands that have any.
    count: u64,
}

/// What a pointing gives to the sums.
#[derive(Debug, Clone, Copy, PartialEq, Default)]
pub struct Share {
    /// Visibilities of total intensity in the sums.
    pub used: u64,
    /// Usable ones that ranges or tapers exclude.
    pub excluded: u64,
    /// Σ ω, Jy⁻².
    pub weight: f64,
    /// Σ ω ν, Hz Jy⁻².
    pub weight_hz: f64,
}

/// What weights cost.
#[derive(Debug, Clone, Copy, PartialEq, Default)]
pub struct Price {
    /// Σ w, over all usable visibilities, whatever is excluded.
    pub natural: f64,
    /// Σ ω.
    pub imaging: f64,
    /// Σ ω²/w.
    pub squares: f64,
}

impl Price {
    /// Noise relative to that of natural weights of all usable visibilities: √(Σ ω²/w · Σ w) / Σ ω, at least 1.
    pub fn relative_noise(&self) -> f64 {
        (self.squares * self.natural).sqrt() / self.imaging
    }
}

/// Why imaging weights cannot be had.
#[derive(Debug, Error)]
pub enum WeighingError {
    /// The visibilities cannot be read.
    #[error(transparent)]
    Observation(#[from] ObservationError),
    /// The density would take too much memory.
    #[error(
        "weighting.cell_wavelengths: cells of {} × {} wavelengths; the visibilities fill more than {most} of them; expected at \
         most that many, for the sake of memory: take larger cells{}",
        sides.0, sides.1, if *each { ", or density = \"all\"" } else { "" }
    )]
    Cells {
        /// Sides of a cell, wavelengths.
        sides: (f64, f64),
        /// Cells allowed, half of the plane counted.
        most: usize,
        /// Whether each pointing has a density of its own.
        each: bool,
    },
}

impl Weigher {
    /// For an observation, with no density yet.
    pub(super) fn new(weighting: Weighting, observation: &Observation, geometry: &ImageGeometry) -> Weigher {
        let side =
            |pixels: usize| weighting.cell_wavelengths.unwrap_or_else(|| (pixels as f64 * geometry.pixel).recip());
        Weigher {
            weighting,
            recentre: Recentre::new(&observation.phase_centre.frame(), &geometry.frame()),
            frequencies_hz: observation.frequencies_hz.clone(),
            hands: observation.total_intensity(),
            cell: (side(geometry.width), side(geometry.height)),
            density: Arc::default(),
            robust: 0.0,
            scale: 1.0,
        }
    }

    /// Inverse variances within the ranges of this one; `None` where it has no range.
    pub(super) fn ranges(&self) -> Option<Weigher> {
        let weighting = self.weighting.ranges()?;
        Some(Weigher { weighting, density: Arc::default(), robust: 0.0, scale: 1.0, ..self.clone() })
    }

    /// Calls `each` with every (row, channel) that has any weight.
    fn each(&self, block: &Block, mut each: impl FnMut(Sample)) {
        for row in 0..block.rows() {
            let turned = self.recentre.turn(block.uvw_m[row]).uvw_m;
            for (channel, &hz) in self.frequencies_hz.iter().enumerate() {
                let at = block.index(row, channel);
                let (mut weight, mut count) = (0.0, 0);
                for &hand in &self.hands {
                    let of_hand = f64::from(block.weight[at + hand]);
                    weight += of_hand;
                    count += u64::from(of_hand > 0.0);
                }
                if weight > 0.0 {
                    each(Sample { place: Place::new(turned, hz), hz, weight, count });
                }
            }
        }
    }

    /// What ranges and tapers multiply by; 0 excludes.
    fn taper(&self, place: Place) -> f64 {
        let w = &self.weighting;
        let distance = place.u.hypot(place.v);
        let outside = |range: Option<[f64; 2]>, at: f64| range.is_some_and(|[from, to]| !(from..=to).contains(&at));
        if outside(w.uv_range_wavelengths, distance) || outside(w.uv_range_m, place.length_m) {
            return 0.0;
        }
        let outer =
            w.outer_taper_arcsec.map_or(1.0, |arcsec| gaussian_taper((arcsec / 3600.0).to_radians(), distance));
        let cosine = w.outer_cosine_wavelengths.map_or(1.0, |[from, to]| {
            let along = ((distance - from) / (to - from)).clamp(0.0, 1.0);
            0.5 * (1.0 + (PI * along).cos())
        });
        let inner = w.inner_taper_wavelengths.map_or(1.0, |scale| -(-0.5 * (distance / scale).powi(2)).exp_m1());
        let taper = outer * cosine * inner;
        if taper >= LEAST_TAPER { taper } else { 0.0 }
    }

    /// ω/w.
    fn factor(&self, place: Place) -> f64 {
        let taper = self.taper(place);
        if taper == 0.0 {
            return 0.0;
        }
        let density = || self.density.at(place.u, place.v, self.cell);
        let by_density = match self.weighting.scheme {
            Scheme::Natural => 1.0,
            Scheme::Uniform => {
                let density = density();
                if density > 0.0 { density.recip() } else { 0.0 }
            }
            Scheme::Robust => (1.0 + self.robust * density()).recip(),
        };
        self.scale * by_density * taper
    }

    /// Multiplies the weights of a block by ω/w.
    pub(super) fn apply(&self, block: &mut Block) {
        for row in 0..block.rows() {
            let turned = self.recentre.turn(block.uvw_m[row]).uvw_m;
            for (channel, &hz) in self.frequencies_hz.iter().enumerate() {
                let at = block.index(row, channel);
                let factor = self.factor(Place::new(turned, hz)) as f32;
                block.weight[at..at + block.hands].iter_mut().for_each(|weight| *weight *= factor);
            }
        }
    }
}

/// What a Gaussian convolved with the sky, of full width `width` (radians) at half maximum, multiplies at a distance in
/// wavelengths: its transform exp(−π² θ² ρ² / (4 ln 2)).
fn gaussian_taper(width: f64, distance: f64) -> f64 {
    (-(PI * width * distance).powi(2) / (4.0 * LN_2)).exp()
}

/// Cells that the densities of an image may have: a limit of memory, wider where the image itself takes more. Cells of the
/// default size within the reach of its pixels, half of the plane, are half as many as pixels.
pub(super) fn most_cells(geometry: &ImageGeometry) -> usize {
    MOST_CELLS.max(geometry.width.saturating_mul(geometry.height))
}

/// Fills in densities and scales of the weighers of all pointings, in as few passes as it takes; what it costs, and what
/// each gives to the sums.
///
/// # Errors
/// When visibilities cannot be read, or fill more than `most_cells` cells in all.
pub(super) fn weigh(
    weighers: &mut [Weigher],
    sources: &mut [&mut dyn BlockSource],
    most_cells: usize,
    mut rows: impl FnMut(u64),
) -> Result<(Price, Vec<Share>), WeighingError> {
    let Some(weighting) = weighers.first().map(|weigher| weigher.weighting) else {
        return Ok((Price::default(), Vec::new()));
    };
    if weighting.scheme != Scheme::Natural {
        let mut densities: Vec<Density> = Vec::new();
        let mut full = 0;
        for (weigher, source) in weighers.iter().zip(sources.iter_mut()) {
            if densities.is_empty() || weighting.density == DensityOf::Pointing {
                full += densities.last().map_or(0, Density::cells);
                densities.push(Density::default());
            }
            let Some(density) = densities.last_mut() else { continue };
            source.rewind()?;
            let mut kept = None;
            while let Some(block) = source.lend_block(&mut kept)? {
                rows(block.rows() as u64);
                let mut fits = true;
                weigher.each(block, |sample| {
                    let Place { u, v, .. } = sample.place;
                    if fits && weigher.taper(sample.place) > 0.0 {
                        density.add(u, v, weigher.cell, sample.weight);
                        fits = full + density.cells() <= most_cells;
                    }
                });
                if !fits {
                    let each = weighting.density == DensityOf::Pointing && weighers.len() > 1;
                    return Err(WeighingError::Cells { sides: weigher.cell, most: most_cells, each });
                }
            }
        }
        let densities: Vec<Arc<Density>> = densities.into_iter().map(Arc::new).collect();
        for (index, weigher) in weighers.iter_mut().enumerate() {
            let density = densities.get(index).or(densities.first()).cloned().unwrap_or_default();
            weigher.robust = density.robust(weighting.robustness);
            weigher.density = density;
        }
    }
    let mut price = Price::default();
    let mut shares = Vec::with_capacity(weighers.len());
    for (weigher, source) in weighers.iter().zip(sources.iter_mut()) {
        let mut share = Share::default();
        source.rewind()?;
        let mut kept = None;
        while let Some(block) = source.lend_block(&mut kept)? {
            rows(block.rows() as u64);
            weigher.each(block, |sample| {
                let factor = weigher.factor(sample.place);
                let imaging = sample.weight * factor;
                price.natural += sample.weight;
                price.imaging += imaging;
                price.squares += imaging * factor;
                share.weight += imaging;
                share.weight_hz += imaging * sample.hz;
                *(if factor > 0.0 { &mut share.used } else { &mut share.excluded }) += sample.count;
            });
        }
        shares.push(share);
    }
    let scale = if price.imaging > 0.0 { price.natural / price.imaging } else { 1.0 };
    weighers.iter_mut().for_each(|weigher| weigher.scale = scale);
    for share in &mut shares {
        share.weight *= scale;
        share.weight_hz *= scale;
    }
    let price = Price { imaging: price.imaging * scale, squares: price.squares * scale * scale, ..price };
    Ok((price, shares))
}
