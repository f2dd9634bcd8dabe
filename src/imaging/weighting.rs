//! Imaging weights ω in place of inverse variances w: uniform and robust weights, tapers, ranges of u, v.
//!
//! With D(u, v) the sum of w in a cell of the u, v plane (a visibility counts at u, v and at −u, −v, for the sky is real):
//!
//! - uniform: ω = w / D
//! - robust (Briggs 1995, PhD thesis, New Mexico Institute of Mining and Technology, eq. 3.3): ω = w / (1 + f² D) with
//!   f² = (5 · 10^−R)² Σ_k w_k / Σ_cells D²
//! - tapers and ranges multiply ω by a function of the distance ρ = √(u² + v²)
//!
//! and all ω are then scaled so that their sum is that of the w. u and v are those about the image centre, so that the
//! pointings of a mosaic share one plane; the density is that of all pointings together unless asked otherwise, since
//! one sum makes the mosaic: what one pointing samples densely another need not sample again where both see the sky.

use crate::observation::{Block, BlockSource, Observation, ObservationError};
use crate::response::{Recentre, wavelengths_per_metre};
use crate::run::{DensityOf, Scheme, Weighting};
use crate::sky::ImageGeometry;
use std::collections::HashMap;
use std::f64::consts::{LN_2, PI};
use std::sync::Arc;

/// What multiplies the weights of one pointing.
#[derive(Debug, Clone)]
pub struct Weigher {
    weighting: Weighting,
    recentre: Recentre,
    wavelengths_per_metre: Vec<f64>,
    hands: Vec<usize>,
    /// Sides of a cell of the density, wavelengths.
    cell: (f64, f64),
    density: Arc<Density>,
    /// f² of robust weights.
    robust: f64,
    scale: f64,
}

/// Sum of inverse variances in every filled cell.
#[derive(Debug, Clone, Default)]
struct Density {
    cells: HashMap<(i32, i32), f64>,
    /// Sum of all, each visibility counted once.
    total: f64,
}

/// What weights cost.
#[derive(Debug, Clone, Copy, PartialEq, Default)]
pub struct Price {
    /// Σ w, Σ ω and Σ ω²/w.
    pub natural: f64,
    /// See `natural`.
    pub imaging: f64,
    /// See `natural`.
    pub squares: f64,
}

impl Price {
    /// Noise relative to that of natural weights: √(Σ ω²/w · Σ w) / Σ ω, at least 1.
    pub fn relative_noise(&self) -> f64 {
        (self.squares * self.natural).sqrt() / self.imaging
    }
}

impl Weigher {
    /// For an observation, with no density yet.
    pub(super) fn new(weighting: Weighting, observation: &Observation, geometry: &ImageGeometry) -> Weigher {
        let side =
            |pixels: usize| weighting.cell_wavelengths.unwrap_or_else(|| (pixels as f64 * geometry.pixel).recip());
        Weigher {
            weighting,
            recentre: Recentre::new(&observation.phase_centre.frame(), &geometry.frame()),
            wavelengths_per_metre: observation.frequencies_hz.iter().map(|&hz| wavelengths_per_metre(hz)).collect(),
            hands: observation.total_intensity(),
            cell: (side(geometry.width), side(geometry.height)),
            density: Arc::default(),
            robust: 0.0,
            scale: 1.0,
        }
    }

    fn cell_of(&self, u: f64, v: f64) -> (i32, i32) {
        ((u / self.cell.0).round() as i32, (v / self.cell.1).round() as i32)
    }

    /// Calls `each` with u, v in wavelengths and the summed weight of every (row, channel) that has any.
    fn each(&self, block: &Block, mut each: impl FnMut(f64, f64, f64)) {
        for row in 0..block.rows() {
            let [u, v, _] = self.recentre.turn(block.uvw_m[row]).uvw_m;
            for (channel, k) in self.wavelengths_per_metre.iter().enumerate() {
                let at = block.index(row, channel);
                let weight: f64 = self.hands.iter().map(|&hand| f64::from(block.weight[at + hand])).sum();
                if weight > 0.0 {
                    each(u * k, v * k, weight);
                }
            }
        }
    }

    /// ω/w at u, v in wavelengths.
    fn factor(&self, u: f64, v: f64) -> f64 {
        let w = &self.weighting;
        let distance = u.hypot(v);
        if w.uv_range_wavelengths.is_some_and(|[from, to]| !(from..=to).contains(&distance)) {
            return 0.0;
        }
        let density = || self.density.cells.get(&self.cell_of(u, v)).copied().unwrap_or(0.0);
        let by_density = match w.scheme {
            Scheme::Natural => 1.0,
            Scheme::Uniform => {
                let density = density();
                if density > 0.0 { density.recip() } else { 0.0 }
            }
            Scheme::Robust => (1.0 + self.robust * density()).recip(),
        };
        let taper =
            w.outer_taper_arcsec.map_or(1.0, |arcsec| gaussian_taper((arcsec / 3600.0).to_radians(), distance));
        let cosine = w.outer_cosine_wavelengths.map_or(1.0, |[from, to]| {
            let along = ((distance - from) / (to - from)).clamp(0.0, 1.0);
            0.5 * (1.0 + (PI * along).cos())
        });
        let inner = w.inner_taper_wavelengths.map_or(1.0, |scale| -(-0.5 * (distance / scale).powi(2)).exp_m1());
        self.scale * by_density * taper * cosine * inner
    }

    /// Multiplies the weights of a block by ω/w.
    pub(super) fn apply(&self, block: &mut Block) {
        for row in 0..block.rows() {
            let [u, v, _] = self.recentre.turn(block.uvw_m[row]).uvw_m;
            for (channel, k) in self.wavelengths_per_metre.iter().enumerate() {
                let at = block.index(row, channel);
                let factor = self.factor(u * k, v * k) as f32;
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

/// Fills in densities and scales of the weighers of all pointings, in as few passes as it takes; what it costs.
///
/// # Errors
/// When visibilities cannot be read.
pub(super) fn weigh(
    weighers: &mut [Weigher],
    sources: &mut [&mut dyn BlockSource],
    mut rows: impl FnMut(u64),
) -> Result<Price, ObservationError> {
    let Some(weighting) = weighers.first().map(|weigher| weigher.weighting) else { return Ok(Price::default()) };
    if weighting.scheme != Scheme::Natural {
        let mut densities: Vec<Density> = Vec::new();
        for (weigher, source) in weighers.iter().zip(sources.iter_mut()) {
            if densities.is_empty() || weighting.density == DensityOf::Pointing {
                densities.push(Density::default());
            }
            let Some(density) = densities.last_mut() else { continue };
            source.rewind()?;
            let mut kept = None;
            while let Some(block) = source.lend_block(&mut kept)? {
                rows(block.rows() as u64);
                weigher.each(block, |u, v, weight| {
                    let (x, y) = weigher.cell_of(u, v);
                    *density.cells.entry((x, y)).or_default() += weight;
                    *density.cells.entry((-x, -y)).or_default() += weight;
                    density.total += weight;
                });
            }
        }
        let densities: Vec<Arc<Density>> = densities.into_iter().map(Arc::new).collect();
        for (index, weigher) in weighers.iter_mut().enumerate() {
            let density = densities.get(index).or(densities.first()).cloned().unwrap_or_default();
            // sums over a map go in no fixed order: sorted, so that runs repeat to the last bit
            let mut squares: Vec<f64> = density.cells.values().map(|d| d * d).collect();
            squares.sort_by(f64::total_cmp);
            let squares: f64 = squares.iter().sum();
            if squares > 0.0 {
                // both halves of the plane, as in the density
                let mean = squares / (2.0 * density.total);
                weigher.robust = (5.0 * 10f64.powf(-weigher.weighting.robustness)).powi(2) / mean;
            }
            weigher.density = density;
        }
    }
    let mut price = Price::default();
    for (weigher, source) in weighers.iter().zip(sources.iter_mut()) {
        source.rewind()?;
        let mut kept = None;
        while let Some(block) = source.lend_block(&mut kept)? {
            rows(block.rows() as u64);
            weigher.each(block, |u, v, weight| {
                let factor = weigher.factor(u, v);
                price.natural += weight;
                price.imaging += weight * factor;
                price.squares += weight * factor * factor;
            });
        }
    }
    let scale = if price.imaging > 0.0 { price.natural / price.imaging } else { 1.0 };
    weighers.iter_mut().for_each(|weigher| weigher.scale = scale);
    Ok(Price { natural: price.natural, imaging: price.imaging * scale, squares: price.squares * scale * scale })
}

/// The visibilities of a pointing, with imaging weights where there are any.
pub struct Weighted {
    inner: Box<dyn BlockSource>,
    weigher: Option<Weigher>,
    scale: f32,
}

impl Weighted {
    /// With the weights of the source, times `scale`.
    pub fn new(inner: Box<dyn BlockSource>, scale: f64) -> Weighted {
        Weighted { inner, weigher: None, scale: scale as f32 }
    }

    /// Takes imaging weights, or gives them up for inverse variances again; tells those it had.
    pub fn weigh_by(&mut self, weigher: Option<Weigher>) -> Option<Weigher> {
        std::mem::replace(&mut self.weigher, weigher)
    }

    pub(super) fn weigher(&self) -> Option<&Weigher> {
        self.weigher.as_ref()
    }
}

impl AsMut<dyn BlockSource> for Weighted {
    fn as_mut(&mut self) -> &mut (dyn BlockSource + 'static) {
        self
    }
}

impl BlockSource for Weighted {
    fn observation(&self) -> &Observation {
        self.inner.observation()
    }

    fn rewind(&mut self) -> Result<(), ObservationError> {
        self.inner.rewind()
    }

    fn next_block(&mut self) -> Result<Option<Block>, ObservationError> {
        let Some(mut block) = self.inner.next_block()? else { return Ok(None) };
        if self.scale != 1.0 {
            block.weight.iter_mut().for_each(|weight| *weight *= self.scale);
        }
        if let Some(weigher) = &self.weigher {
            weigher.apply(&mut block);
        }
        Ok(Some(block))
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::observation::{Hand, MemorySource, Mount, Schedule, Station};
    use crate::sky::Direction;
    use rand::{Rng, SeedableRng};

    fn scene() -> (Observation, Block, ImageGeometry) {
        let centre = Direction::from_deg(40.0, 35.0);
        let mut place = rand_chacha::ChaCha8Rng::seed_from_u64(3);
        let stations = (0..6)
            .map(|i| Station {
                name: format!("S{i}"),
                position_m: [3.8e6, -1.4e5, 5.1e6].map(|at: f64| at + 900.0 * place.random::<f64>()),
                mount: Mount::AltAzimuth,
                diameter_m: None,
                feed_angle: 0.0,
            })
            .collect();
        let schedule = Schedule {
            array_name: "TEST".into(),
            stations,
            mjd_utc: (0..6).map(|t| 59_000.3 + 0.02 * f64::from(t)).collect(),
            frequencies_hz: vec![1.3e9, 1.32e9],
            width_hz: 1e6,
            hands: vec![Hand::XX, Hand::YY],
            weight: 1.0,
        };
        let (observation, mut block) = schedule.pointing("p", centre);
        let mut rng = rand_chacha::ChaCha8Rng::seed_from_u64(4);
        block
            .weight
            .iter_mut()
            .for_each(|w| *w = if rng.random::<f32>() < 0.1 { 0.0 } else { 0.5 + rng.random::<f32>() });
        (observation, block, ImageGeometry::new(centre, 64, 64, 1e-3).unwrap())
    }

    fn weights(weighting: Weighting) -> (Block, Block, Price, Weigher) {
        let (observation, block, geometry) = scene();
        let mut source = Weighted::new(Box::new(MemorySource::new(observation.clone(), vec![block.clone()])), 1.0);
        let mut weighers = vec![Weigher::new(weighting, &observation, &geometry)];
        let price = weigh(&mut weighers, &mut [&mut source as &mut dyn BlockSource], |_| ()).unwrap();
        source.weigh_by(weighers.pop());
        source.rewind().unwrap();
        let weighted = source.next_block().unwrap().unwrap();
        (block, weighted, price, source.weigher().unwrap().clone())
    }

    /// Largest relative difference of weights from those of another scheme.
    fn difference(a: &Block, b: &Block) -> f64 {
        let pairs = a.weight.iter().zip(&b.weight).filter(|(_, b)| **b > 0.0);
        pairs.map(|(a, b)| (f64::from(*a) / f64::from(*b) - 1.0).abs()).fold(0.0, f64::max)
    }

    /// R = 5 and −5 change ω by f² D = 25 · 10^∓10 D/⟨D⟩ against natural and uniform. Bound: 1e-5, with rounding to f32.
    #[test]
    fn robust_ends_are_natural_and_uniform() {
        let robust =
            |robustness| weights(Weighting { scheme: Scheme::Robust, robustness, ..Weighting::default() }).1;
        let (natural, ..) = weights(Weighting::default());
        let (_, uniform, ..) = weights(Weighting { scheme: Scheme::Uniform, ..Weighting::default() });
        let (high, low) = (difference(&robust(5.0), &natural), difference(&robust(-5.0), &uniform));
        assert!(high <= 1e-5 && low <= 1e-5, "{high:e} from natural, {low:e} from uniform");
        // f² = 1
        let middle = robust(5f64.log10());
        assert!(difference(&middle, &natural) > 0.1 && difference(&middle, &uniform) > 0.1);
    }

    /// Uniform weights: every filled cell has the same sum of ω. By hand over the cells.
    #[test]
    fn uniform_cells_count_alike() {
        let (_, weighted, price, weigher) = weights(Weighting { scheme: Scheme::Uniform, ..Weighting::default() });
        let mut cells: HashMap<(i32, i32), f64> = HashMap::new();
        weigher.each(&weighted, |u, v, weight| {
            let (x, y) = weigher.cell_of(u, v);
            *cells.entry((x, y)).or_default() += weight;
            *cells.entry((-x, -y)).or_default() += weight;
        });
        let (low, high) = cells.values().fold((f64::INFINITY, 0.0f64), |(l, h), &d| (l.min(d), h.max(d)));
        assert!(cells.len() > 50 && high / low - 1.0 < 1e-5, "{} cells, {low} to {high}", cells.len());
        assert!(price.relative_noise() > 1.05);
    }

    /// The closed form of the price, term by term in double precision from the weights themselves.
    #[test]
    fn the_price_is_its_closed_form_and_the_sum_is_kept() {
        for scheme in [Scheme::Natural, Scheme::Uniform, Scheme::Robust] {
            let asked = Weighting { scheme, outer_taper_arcsec: Some(30.0), ..Weighting::default() };
            let (block, weighted, price, _) = weights(asked);
            let (mut w, mut o, mut s) = (0.0, 0.0, 0.0);
            for (&natural, &imaging) in block.weight.iter().zip(&weighted.weight) {
                let (natural, imaging) = (f64::from(natural), f64::from(imaging));
                assert_eq!(natural == 0.0, imaging == 0.0, "what is not used stays so");
                if natural > 0.0 {
                    w += natural;
                    o += imaging;
                    s += imaging * imaging / natural;
                }
            }
            assert!((o / w - 1.0).abs() < 1e-5);
            assert!((price.relative_noise() / ((s * w).sqrt() / o) - 1.0).abs() < 1e-5);
        }
    }

    #[test]
    fn tapers_and_ranges_go_by_their_formulas() {
        let taper = |w: Weighting, distance: f64| {
            let (observation, _, geometry) = scene();
            Weigher::new(w, &observation, &geometry).factor(0.6 * distance, 0.8 * distance)
        };
        let natural = Weighting::default();
        let inner = Weighting { inner_taper_wavelengths: Some(100.0), ..natural };
        assert!((taper(inner, 100.0) - 0.393_469_340_287_366_6).abs() < 1e-12, "1 − exp(−1/2)");
        let cosine = Weighting { outer_cosine_wavelengths: Some([100.0, 300.0]), ..natural };
        assert_eq!([taper(cosine, 50.0), taper(cosine, 400.0)], [1.0, 0.0]);
        assert!((taper(cosine, 200.0) - 0.5).abs() < 1e-12 && (taper(cosine, 150.0) - 0.853_553_39).abs() < 1e-8);
        let range = Weighting { uv_range_wavelengths: Some([100.0, 300.0]), ..natural };
        assert_eq!([99.0, 101.0, 299.0, 301.0].map(|d| taper(range, d)), [0.0, 1.0, 1.0, 0.0]);
        // a Gaussian of width θ is half in the image where its transform is exp(−(π θ ρ)²/(4 ln 2)): by quadrature
        let width = 20f64.to_radians() / 3600.0;
        let (mut sum, mut norm) = (0.0, 0.0);
        let distance = 7000.0;
        for i in -4000..=4000 {
            let x = f64::from(i) * width / 500.0;
            let value = (-4.0 * LN_2 * (x / width).powi(2)).exp();
            sum += value * (2.0 * PI * x * distance).cos();
            norm += value;
        }
        let outer = Weighting { outer_taper_arcsec: Some(20.0), ..natural };
        assert!((taper(outer, distance) - sum / norm).abs() < 1e-12);
    }
}
