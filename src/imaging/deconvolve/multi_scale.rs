//! Minor cycles on points and Gaussians of several widths, after Cornwell (2008), IEEE J. Sel. Top. Signal Process. 2, 793.
//!
//! Components are m_α, Gaussians of unit sum and full width α (0: one pixel). With p the local point spread function of
//! the search image r and ∗ a convolution,
//!
//! r_α = r ∗ m_α,  p_αβ = p ∗ m_α ∗ m_β.
//!
//! p is also the covariance of the noise in r (natural weights), so r_α has the noise √p_αα(0) and
//! q_α = r_α/√p_αα(0) is signal to noise at every scale. Each step takes the place and scale with the highest
//! (1 − bias·α/α_max)·|q_α|, the amplitude g r_α/p_αα(0) that lowers the misfit most, times the loop gain, and takes
//! g r_α/p_αα(0) · p_αβ off every r_β. Two things differ from the paper, on purpose: its tapered parabolas are Gaussians
//! here (separable, and smooth where they end), and scales compete by signal to noise, so that one level of stopping
//! holds for all of them.

use super::local_psf::Patch;
use super::minor::{Found, Start};
use super::search::{Searched, Whole};
use ndarray::Array2;
use rayon::prelude::*;
use std::f64::consts::LN_2;

/// A Gaussian is cut at this many standard deviations: 3e-4 of its peak.
const CUT: f64 = 4.0;

/// The profile of a Gaussian of full width `width_px`, of unit sum; its square (outer product) is the component.
pub fn profile(width_px: f64) -> Vec<f64> {
    if width_px <= 0.0 {
        return vec![1.0];
    }
    let sigma = width_px / (8.0 * LN_2).sqrt();
    let half = (CUT * sigma).ceil() as i64;
    let values: Vec<f64> = (-half..=half).map(|d| (-0.5 * (d as f64 / sigma).powi(2)).exp()).collect();
    let sum: f64 = values.iter().sum();
    values.into_iter().map(|v| v / sum).collect()
}

/// Convolves rows, then columns, with a profile; 0 beyond the edges.
pub fn convolve(image: &[f32], width: usize, profile: &[f64]) -> Vec<f32> {
    if profile.len() == 1 {
        return image.to_vec();
    }
    let half = profile.len() / 2;
    let weights: Vec<f32> = profile.iter().map(|&v| v as f32).collect();
    let mut across = vec![0.0f32; image.len()];
    across.par_chunks_mut(width).zip(image.par_chunks(width)).for_each(|(out, row)| {
        for (k, &weight) in weights.iter().enumerate() {
            // out[x] += weight · row[x + k − half]
            let (from, to) = if k >= half { (k - half, 0) } else { (0, half - k) };
            if from < width && to < width {
                let count = width - from.max(to);
                out[to..to + count].iter_mut().zip(&row[from..from + count]).for_each(|(o, v)| *o += weight * v);
            }
        }
    });
    let height = image.len() / width;
    let mut out = vec![0.0f32; image.len()];
    out.par_chunks_mut(width).enumerate().for_each(|(y, out)| {
        for (k, &weight) in weights.iter().enumerate() {
            let Some(row) = (y + k).checked_sub(half).filter(|&row| row < height) else { continue };
            let from = &across[row * width..(row + 1) * width];
            out.iter_mut().zip(from).for_each(|(o, v)| *o += weight * v);
        }
    });
    out
}

/// p_αβ of one place: `cross[α][β]`.
struct Crossed {
    patches: Vec<Vec<Patch>>,
}

/// Number of patches of a place for so many scales.
pub fn copies(scales: usize) -> usize {
    scales * (scales + 1) / 2 * 2
}

/// The multi-scale minor cycle.
pub fn multi_scale(start: Start, scales_px: &[f64], bias: f64) -> Found {
    let (width, height) = (start.width, start.height);
    let widest = scales_px.iter().copied().fold(0.0, f64::max);
    let profiles: Vec<Vec<f64>> = scales_px.iter().map(|&scale| profile(scale)).collect();
    let crossed: Vec<Option<Crossed>> =
        start.psfs.patches().iter().map(|patch| patch.as_ref().map(|patch| cross(patch, &profiles))).collect();
    let mut found =
        Found { amplitudes: Array2::zeros((height, width)), components: 0, moved: 0.0, expected: Vec::new() };
    // noise of each scale, that of the first place seen standing for all: it only scales the competition
    let Some(first) = crossed.iter().flatten().next() else { return found };
    let noise: Vec<f32> =
        (0..profiles.len()).map(|scale| first.patches[scale][scale].at(0, 0).max(1e-12).sqrt()).collect();
    let preference: Vec<f64> =
        scales_px.iter().map(|&scale| if widest > 0.0 { 1.0 - bias * scale / widest } else { 1.0 }).collect();
    let mut images: Vec<Whole> = profiles
        .iter()
        .zip(&noise)
        .enumerate()
        .map(|(scale, (profile, noise))| {
            let mut image = convolve(start.image, width, profile);
            image.iter_mut().for_each(|value| *value /= noise);
            let mut levels = start.levels.clone();
            if start.floor.is_some() && scale > 0 {
                // a wide negative component could cross zero anywhere under it
                levels.down.fill(f32::INFINITY);
            }
            Whole::new(width, height, image, levels)
        })
        .collect();
    while found.components < start.most {
        let best = images
            .iter()
            .enumerate()
            .filter_map(|(scale, image)| image.peak().map(|peak| (scale, peak)))
            .max_by(|a, b| weigh(a, &preference).total_cmp(&weigh(b, &preference)));
        let Some((scale, peak)) = best else { break };
        if f64::from(peak.value.abs()) < start.level.max(start.misfit * found.moved) {
            break;
        }
        let (x, y) = (peak.x, peak.y);
        let Some(crossed) = &crossed[start.psfs.cell(x, y)] else { break };
        let own = f64::from(crossed.patches[scale][scale].at(0, 0)).max(1e-12);
        let mut amplitude = start.loop_gain * f64::from(peak.value * noise[scale]) / own;
        if scale == 0
            && let Some(floor) = &start.floor
        {
            let stands = floor[[y, x]] + found.amplitudes[[y, x]];
            amplitude = amplitude.max(-stands);
            let down = if stands + amplitude > 0.0 { start.levels.up[y * width + x] } else { f32::INFINITY };
            images[0].set_down(x, y, down);
            if amplitude == 0.0 {
                continue;
            }
        }
        for (other, image) in images.iter_mut().enumerate() {
            let amount = (amplitude / f64::from(noise[other])) as f32;
            image.subtract(x, y, amount, &crossed.patches[scale][other]);
        }
        deposit(&mut found.amplitudes, (x, y), amplitude, &profiles[scale]);
        found.components += 1;
        found.moved += amplitude.abs() * f64::from(crossed.patches[scale][0].at(0, 0)).abs();
    }
    let levels = &start.levels;
    let open = |at: usize| levels.up[at].is_finite() || levels.down[at].is_finite();
    if let Some(first) = images.into_iter().next() {
        // the first scale is the narrowest; its image is the search image when that is a point
        if scales_px.first() == Some(&0.0) {
            let expected = first.into_image().into_iter().enumerate().filter(|&(at, _)| open(at));
            found.expected = expected.map(|(at, value)| (at, value * noise[0])).collect();
        }
    }
    found
}

fn weigh((scale, peak): &(usize, super::search::Peak), preference: &[f64]) -> f64 {
    preference[*scale] * f64::from(peak.value.abs())
}

fn cross(patch: &Patch, profiles: &[Vec<f64>]) -> Crossed {
    let columns = 2 * patch.half.0 + 1;
    let once: Vec<Vec<f32>> = profiles.iter().map(|profile| convolve(&patch.values, columns, profile)).collect();
    let patches = once
        .iter()
        .map(|once| {
            profiles
                .iter()
                .map(|profile| Patch { half: patch.half, values: convolve(once, columns, profile) })
                .collect()
        })
        .collect();
    Crossed { patches }
}

/// Adds amplitude · m to an image; what falls beyond the edge goes to the nearest pixel of it, so that flux is kept.
fn deposit(image: &mut Array2<f64>, place: (usize, usize), amplitude: f64, profile: &[f64]) {
    let (height, width) = image.dim();
    let half = (profile.len() / 2) as i64;
    let inside = |v: i64, n: usize| v.clamp(0, n as i64 - 1) as usize;
    for (j, wy) in profile.iter().enumerate() {
        let y = inside(place.1 as i64 + j as i64 - half, height);
        for (i, wx) in profile.iter().enumerate() {
            image[[y, inside(place.0 as i64 + i as i64 - half, width)]] += amplitude * wy * wx;
        }
    }
}

#[cfg(test)]
mod tests {
    use super::super::local_psf::LocalPsfs;
    use super::super::search::Levels;
    use super::*;

    /// Against the definition, with edges; rounding of f32 sums of up to 50 terms.
    #[test]
    fn convolution_is_the_double_sum() {
        let (width, height) = (23, 17);
        let image: Vec<f32> = (0..width * height).map(|i| ((i * 7919) % 101) as f32 - 50.0).collect();
        for scale in [0.0, 1.5, 6.0, 30.0] {
            let profile = profile(scale);
            assert!((profile.iter().sum::<f64>() - 1.0).abs() < 1e-14);
            let half = (profile.len() / 2) as i64;
            let got = convolve(&image, width, &profile);
            for y in 0..height as i64 {
                for x in 0..width as i64 {
                    let mut want = 0.0;
                    for (j, wy) in profile.iter().enumerate() {
                        for (i, wx) in profile.iter().enumerate() {
                            let (sx, sy) = (x + i as i64 - half, y + j as i64 - half);
                            if (0..width as i64).contains(&sx) && (0..height as i64).contains(&sy) {
                                want += wy * wx * f64::from(image[(sy * width as i64 + sx) as usize]);
                            }
                        }
                    }
                    let got = f64::from(got[(y * width as i64 + x) as usize]);
                    assert!((got - want).abs() < 2e-4, "scale {scale} at {x}, {y}: {got} for {want}");
                }
            }
        }
    }

    /// A Gaussian of one of the scales under a point spread function that is a point: one step of gain 1 takes all of it
    /// with one component of that scale, at its flux. (Bound 1e-3: the Gaussians are cut at 4 standard deviations.)
    #[test]
    fn a_gaussian_is_one_component() {
        let (size, scales) = (81, [0.0, 4.0, 9.0]);
        let wide = profile(9.0);
        let half = wide.len() / 2;
        let mut image = vec![0.0f32; size * size];
        for (j, wy) in wide.iter().enumerate() {
            for (i, wx) in wide.iter().enumerate() {
                image[(40 + j - half) * size + 40 + i - half] = (1000.0 * wy * wx) as f32;
            }
        }
        let psfs = LocalPsfs::uniform(size, size, Patch::from_fn((80, 80), |dx, dy| f64::from(dx == 0 && dy == 0)));
        let levels = Levels { up: vec![0.0; size * size], down: vec![0.0; size * size] };
        let start = Start {
            width: size,
            height: size,
            image: &image,
            levels,
            psfs: &psfs,
            loop_gain: 1.0,
            level: 1e-2,
            misfit: 0.0,
            most: 1,
            floor: None,
        };
        let found = multi_scale(start, &scales, 0.0);
        assert!((found.amplitudes.sum() - 1000.0).abs() < 1.0, "{}", found.amplitudes.sum());
        let left = found.expected.iter().map(|(_, v)| v.abs()).fold(0.0, f32::max);
        let peak = image.iter().copied().fold(0.0, f32::max);
        assert!(left < 1e-3 * peak, "{left} of {peak}");
    }

    /// Flux that falls beyond the edge stays in the image.
    #[test]
    fn deposits_keep_their_flux() {
        let mut image = Array2::zeros((9, 5));
        deposit(&mut image, (0, 8), 2.0, &profile(7.0));
        assert!((image.sum() - 2.0).abs() < 1e-12);
    }
}
