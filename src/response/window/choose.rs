//! How much a window aliases, and which window of a kind aliases little enough.

use super::kaiser_bessel::check_oversampling;
use super::{KaiserBessel, MAX_TAPS, Nearest, Spheroidal, Window, WindowError};
use num_complex::Complex64;
use serde::Serialize;
use std::f64::consts::{PI, TAU};

/// Aliasing of a window on one axis over the field used, |x| ≤ 1/(2σ), relative to the response at the same place.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Aliasing {
    /// Largest, over the field and all fractional positions of a visibility.
    pub worst: f64,
    /// Root mean square over fractional positions, at the worst place of the field.
    pub rms: f64,
}

impl Aliasing {
    /// Largest error when both axes alias at their worst.
    pub fn both_axes(&self) -> f64 {
        (1.0 + self.worst).powi(2) - 1.0
    }
}

/// Measures the aliasing of `window` with padding σ = L/field.
///
/// A visibility at fraction f, spread on its W cells and transformed back, gives at x the sum
/// Σ_d value(d) exp(2πi d x) over its taps, where transform(x) is wanted; by Poisson's sum the difference is
/// Σ_{j≠0} transform(x + j) exp(2πi j f). The tap sum is what a program does, and it is finite where the sum over aliases
/// of a window with a step at its edge converges only with its phases; so it is the tap sum that is measured.
///
/// # Errors
/// When σ is not above 1 and at most 8.
pub fn aliasing(window: &dyn Window, oversampling: f64) -> Result<Aliasing, WindowError> {
    check_oversampling(oversampling)?;
    // a fraction 1 − f mirrors f, so half of them are enough
    let (places, fractions) = (48, 48);
    let support = window.support();
    // cosine-spaced, with both ends: the worst is nearly always at the field's edge or centre
    let xs: Vec<f64> =
        (0..=places).map(|i| 0.25 / oversampling * (1.0 - (PI * f64::from(i) / f64::from(places)).cos())).collect();
    let wanted: Vec<f64> = xs.iter().map(|&x| window.transform(x)).collect();
    let mut squares = vec![0.0; xs.len()];
    let mut worst = 0.0_f64;
    for step in 0..=fractions {
        let start = 0.5 * f64::from(step) / f64::from(fractions) - 0.5 * support as f64;
        let share = if step == 0 || step == fractions { 0.5 } else { 1.0 } / f64::from(fractions);
        let taps: Vec<f64> = (0..support).map(|tap| window.value(tap as f64 + start)).collect();
        for ((&x, &wanted), square) in xs.iter().zip(&wanted).zip(&mut squares) {
            let turn = Complex64::cis(TAU * x);
            // Horner in exp(2πi x), last tap first; the phase of the first tap at the end
            let sum = taps.iter().rev().fold(Complex64::ZERO, |sum, &tap| sum * turn + tap);
            let error = ((sum * Complex64::cis(TAU * x * start) - wanted) / wanted).norm();
            worst = if error <= worst { worst } else { error };
            *square += share * error * error;
        }
    }
    let rms = squares.into_iter().fold(0.0, |largest, s| if s <= largest { largest } else { s }).sqrt();
    Ok(Aliasing { worst, rms })
}

/// Kinds of windows.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Hash, Default, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Kind {
    /// Kaiser–Bessel: as narrow as any for a given aliasing on a padded field.
    #[default]
    KaiserBessel,
    /// Prolate spheroidal functions.
    Spheroidal,
    /// The nearest cell only.
    Nearest,
}

impl Kind {
    /// The name in run files and records.
    pub fn name(self) -> &'static str {
        match self {
            Kind::KaiserBessel => "kaiser-bessel",
            Kind::Spheroidal => "spheroidal",
            Kind::Nearest => "nearest",
        }
    }
}

/// A window and what it reaches.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Choice {
    /// Its kind.
    pub kind: Kind,
    /// Support W in cells.
    pub support: usize,
    /// Shape: β of a Kaiser–Bessel window, the weighting exponent of a spheroidal one, 0 for the nearest cell.
    pub shape: f64,
    /// Aliasing on one axis.
    pub aliasing: Aliasing,
}

impl Choice {
    /// The window.
    ///
    /// # Errors
    /// Never for a choice made here; for one made by hand as [`KaiserBessel::new`].
    pub fn window(&self) -> Result<Box<dyn Window>, WindowError> {
        Ok(match self.kind {
            Kind::KaiserBessel => Box::new(KaiserBessel::new(self.support, self.shape)?),
            Kind::Spheroidal => Box::new(Spheroidal::new(self.support, self.shape as u32)?),
            Kind::Nearest => Box::new(Nearest),
        })
    }
}

/// The Kaiser–Bessel window of `support` cells whose worst-case aliasing with padding σ = L/field is smallest.
///
/// # Errors
/// When the support is not from 1 to 16 or σ not above 1 and at most 8.
pub fn best_kaiser_bessel(support: usize, oversampling: f64) -> Result<Choice, WindowError> {
    WindowError::check_support(support)?;
    check_oversampling(oversampling)?;
    // Aliasing falls with β while the pedestal at the window's edge shrinks, then rises as the main lobe widens into the
    // first alias, near π W (1 − 1/(2σ)). Side lobes moving across the field put ripples on that valley, so it is
    // scanned before it is refined.
    let touching = PI * support as f64 * (1.0 - 0.5 / oversampling);
    let error_at =
        |beta: f64| Ok::<_, WindowError>(aliasing(&KaiserBessel::new(support, beta)?, oversampling)?.worst);
    let step = 0.005 * touching;
    let beatty = KaiserBessel::beatty(support, oversampling).ok().map(|window| window.beta());
    let (mut beta, mut error) = (touching, f64::INFINITY);
    for trial in (0..=68).map(|i| 0.68 * touching + f64::from(i) * step).chain(beatty) {
        let at_trial = error_at(trial)?;
        if at_trial < error {
            (beta, error) = (trial, at_trial);
        }
    }
    let mut reach = step;
    while reach > 1e-4 * touching {
        reach *= 0.5;
        for trial in [beta - reach, beta + reach] {
            let at_trial = error_at(trial)?;
            if at_trial < error {
                (beta, error) = (trial, at_trial);
            }
        }
    }
    let aliasing = aliasing(&KaiserBessel::new(support, beta)?, oversampling)?;
    Ok(Choice { kind: Kind::KaiserBessel, support, shape: beta, aliasing })
}

/// The narrowest Kaiser–Bessel window whose worst-case aliasing on one axis is at most `tolerance`, with padding
/// σ = L/field. For both axes together ask for half of what is wanted.
///
/// # Errors
/// When `tolerance` is not positive, σ not above 1 and at most 8, or 16 cells are not enough; then with the best in reach.
pub fn choose(tolerance: f64, oversampling: f64) -> Result<Choice, WindowError> {
    WindowError::unless(tolerance > 0.0, "tolerance", tolerance, "a positive relative error")?;
    check_oversampling(oversampling)?;
    let mut reachable = f64::INFINITY;
    for support in 1..=MAX_TAPS {
        // Searching is dear, and the best shape is at most 1.6 times better than Beatty's (docs/accuracy.md): supports that
        // are further off than twice that are passed over.
        if let Ok(beatty) = KaiserBessel::beatty(support, oversampling)
            && support < MAX_TAPS
            && aliasing(&beatty, oversampling)?.worst > 3.2 * tolerance
        {
            continue;
        }
        let choice = best_kaiser_bessel(support, oversampling)?;
        if choice.aliasing.worst <= tolerance {
            return Ok(choice);
        }
        reachable = reachable.min(choice.aliasing.worst);
    }
    Err(WindowError::Unreachable { asked: tolerance, oversampling, reachable })
}

/// As [`choose`], among the windows of a kind. The nearest cell has nothing to choose: it is given with what it reaches, whatever
/// was asked for.
///
/// # Errors
/// As [`choose`].
pub fn choose_kind(kind: Kind, tolerance: f64, oversampling: f64) -> Result<Choice, WindowError> {
    match kind {
        Kind::KaiserBessel => choose(tolerance, oversampling),
        Kind::Nearest => Ok(Choice { kind, support: 1, shape: 0.0, aliasing: aliasing(&Nearest, oversampling)? }),
        Kind::Spheroidal => {
            WindowError::unless(tolerance > 0.0, "tolerance", tolerance, "a positive relative error")?;
            let mut reachable = f64::INFINITY;
            for support in 2..=MAX_TAPS {
                for alpha in 0..=1 {
                    let aliasing = aliasing(&Spheroidal::new(support, alpha)?, oversampling)?;
                    if aliasing.worst <= tolerance {
                        return Ok(Choice { kind, support, shape: f64::from(alpha), aliasing });
                    }
                    reachable = reachable.min(aliasing.worst);
                }
            }
            Err(WindowError::Unreachable { asked: tolerance, oversampling, reachable })
        }
    }
}

#[cfg(test)]
mod tests {
    use super::super::{Nearest, Spheroidal};
    use super::*;

    /// The tap sum against the aliases themselves, Σ_{j≠0} transform(x + j) exp(2πi j f), for windows without a step at the
    /// edge, where a few terms of that sum are enough.
    #[test]
    fn measured_aliasing_is_the_sum_of_aliases() {
        for (support, oversampling) in [(4, 2.0), (5, 1.5), (6, 1.25)] {
            let window = Spheroidal::new(support, 1).unwrap();
            let got = aliasing(&window, oversampling).unwrap();
            let (mut worst, mut rms) = (0.0_f64, 0.0_f64);
            for place in 0..=60 {
                let x = 0.5 / oversampling * f64::from(place) / 60.0;
                let ratio = |j: i32| window.transform(x + f64::from(j)) / window.transform(x);
                let aliases: Vec<(i32, f64)> = (-150..=150).filter(|&j| j != 0).map(|j| (j, ratio(j))).collect();
                rms = rms.max(aliases.iter().map(|(_, r)| r * r).sum::<f64>().sqrt());
                for step in 0..64 {
                    let turn = TAU * f64::from(step) / 64.0;
                    let sum: Complex64 =
                        aliases.iter().map(|&(j, r)| r * Complex64::cis(turn * f64::from(j))).sum();
                    worst = worst.max(sum.norm());
                }
            }
            // both sides sample the maximum on grids of their own
            assert!((got.worst / worst - 1.0).abs() <= 0.02, "W = {support}: {got:?} against {worst:e}");
            assert!((got.rms / rms - 1.0).abs() <= 0.01, "W = {support}: {got:?} against {rms:e}");
        }
    }

    /// Nearest cell: Σ_{j≠0} sinc²(x+j) = 1 − sinc²(x), so the rms is √(1/sinc²(x) − 1) at the edge of the field.
    #[test]
    fn nearest_cell_follows_its_closed_form() {
        for oversampling in [1.25, 2.0, 4.0] {
            let edge = Nearest.transform(0.5 / oversampling);
            let want = (1.0 / (edge * edge) - 1.0).sqrt();
            let got = aliasing(&Nearest, oversampling).unwrap().rms;
            assert!((got / want - 1.0).abs() <= 1e-3, "{got} against {want}");
        }
    }

    #[test]
    fn the_best_shape_is_never_worse_than_beattys() {
        for oversampling in [1.25, 1.5, 2.0] {
            for support in 2..=9 {
                let best = best_kaiser_bessel(support, oversampling).unwrap();
                let beatty = KaiserBessel::beatty(support, oversampling).unwrap();
                let theirs = aliasing(&beatty, oversampling).unwrap().worst;
                assert!(
                    best.aliasing.worst <= theirs,
                    "W = {support}, σ = {oversampling}: {best:?} against {theirs:e} at β = {}",
                    beatty.beta()
                );
            }
        }
    }

    #[test]
    fn chosen_windows_keep_the_tolerance_and_are_the_narrowest() {
        for oversampling in [1.25, 1.5, 2.0] {
            for exponent in [1, 3, 4, 6, 7] {
                let tolerance = 10.0_f64.powi(-exponent);
                let choice = choose(tolerance, oversampling).unwrap();
                assert!(choice.aliasing.worst <= tolerance && choice.aliasing.rms <= choice.aliasing.worst);
                assert!(choice.aliasing.both_axes() <= 2.1 * tolerance);
                let narrower = best_kaiser_bessel((choice.support - 1).max(1), oversampling).unwrap();
                assert!(choice.support == 1 || narrower.aliasing.worst > tolerance);
            }
        }
    }

    #[test]
    fn windows_of_every_kind_keep_the_tolerance_or_say_so() {
        for oversampling in [1.5, 2.0] {
            for tolerance in [1e-2, 1e-4, 1e-6] {
                let choice = choose_kind(Kind::Spheroidal, tolerance, oversampling).unwrap();
                let window = choice.window().unwrap();
                assert!(aliasing(window.as_ref(), oversampling).unwrap().worst <= tolerance);
                assert_eq!((window.support(), choice.kind), (choice.support, Kind::Spheroidal));
            }
        }
        assert!(matches!(choose_kind(Kind::Spheroidal, 1e-14, 1.5), Err(WindowError::Unreachable { .. })));
        let nearest = choose_kind(Kind::Nearest, 1e-4, 2.0).unwrap();
        assert_eq!((nearest.support, nearest.window().unwrap().support()), (1, 1));
        assert!(nearest.aliasing.worst > 0.1, "the nearest cell does not keep 1e-4, and does not claim to");
    }

    #[test]
    fn says_what_can_be_reached() {
        let refused = choose(1e-12, 1.25).unwrap_err();
        assert!(
            matches!(refused, WindowError::Unreachable { reachable, .. } if (1e-10..1e-8).contains(&reachable)),
            "{refused}"
        );
        for (tolerance, oversampling) in [(0.0, 2.0), (-1.0, 2.0), (f64::NAN, 2.0), (1e-3, 1.0), (1e-3, f64::NAN)] {
            assert!(matches!(choose(tolerance, oversampling), Err(WindowError::Parameter { .. })));
        }
    }
}
