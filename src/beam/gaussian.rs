//! A Gaussian beam: its width proportional to wavelength, or measured at several frequencies.

use super::{Extent, Pattern, PatternError};
use interp::{InterpMode, interp};
use num_complex::Complex64;
use std::f64::consts::LN_2;

/// g = exp(−2 ln2 (x²/θx² + y²/θy²)), θx = θ √a, θy = θ/√a, θ the full width at half *power*.
///
/// Of a width measured at one frequency, θ·ν is constant. Of widths measured at several, θ·ν is interpolated linearly
/// between neighbours and held at the outermost values beyond them: exact wherever θ ∝ 1/ν, whatever the spacing.
#[derive(Debug, Clone, PartialEq)]
pub struct Gaussian {
    /// Frequencies of the measured widths, Hz, ascending.
    at_hz: Vec<f64>,
    /// θ·ν at each of them, rad Hz.
    width_hz: Vec<f64>,
    axis_ratio: f64,
}

impl Gaussian {
    /// A pattern of full half-power width `half_power` (radians) at `at_hz`, and axis ratio θx/θy.
    ///
    /// # Errors
    /// When a parameter is not a positive finite number.
    pub fn new(half_power: f64, at_hz: f64, axis_ratio: f64) -> Result<Self, PatternError> {
        Self::measured(&[(at_hz, half_power)], axis_ratio)
    }

    /// A pattern of the full half-power widths (radians) that were measured at frequencies (Hz), given as
    /// (frequency, width) in ascending order, and axis ratio θx/θy.
    ///
    /// # Errors
    /// When there are none, a parameter is not a positive finite number, or the frequencies do not ascend.
    pub fn measured(widths: &[(f64, f64)], axis_ratio: f64) -> Result<Self, PatternError> {
        let positive = |v: f64| v.is_finite() && v > 0.0;
        PatternError::unless(!widths.is_empty(), "half_power_deg", f64::NAN, "at least one width")?;
        let mut last_hz = 0.0;
        for &(hz, half_power) in widths {
            let degrees = half_power.to_degrees();
            PatternError::unless(positive(degrees), "half_power_deg", degrees, "a positive angle")?;
            PatternError::unless(positive(hz), "at_hz", hz, "a positive frequency")?;
            PatternError::unless(hz > last_hz, "at_hz", hz, "a frequency above the one before it")?;
            last_hz = hz;
        }
        PatternError::unless(positive(axis_ratio), "axis_ratio", axis_ratio, "a positive ratio")?;
        Ok(Gaussian {
            at_hz: widths.iter().map(|&(hz, _)| hz).collect(),
            width_hz: widths.iter().map(|&(hz, half_power)| half_power * hz).collect(),
            axis_ratio,
        })
    }

    fn width(&self, hz: f64) -> f64 {
        // one measured width needs no look-up: this is called for every run of points
        let width_hz = match self.width_hz[..] {
            [only] => only,
            _ => interp(&self.at_hz, &self.width_hz, hz, &InterpMode::FirstLast),
        };
        width_hz / hz
    }

    /// The largest width at `hz` or any frequency above.
    fn widest_from(&self, hz: f64) -> f64 {
        // between measured frequencies θ is a constant plus a multiple of 1/ν, so monotonic: its largest is at `hz` or
        // at one of them
        let above = self.at_hz.iter().filter(|&&at| at > hz).map(|&at| self.width(at));
        above.fold(self.width(hz), f64::max)
    }
}

impl Pattern for Gaussian {
    fn voltages(&self, points: &[[f64; 2]], hz: f64, _feed: usize, out: &mut [Complex64]) {
        let width = self.width(hz);
        let base = -2.0 * LN_2 / (width * width);
        let (kx, ky) = (base / self.axis_ratio, base * self.axis_ratio);
        for (out, &[x, y]) in out.iter_mut().zip(points) {
            *out = Complex64::new((kx * x * x + ky * y * y).exp(), 0.0);
        }
    }

    fn feeds_alike(&self) -> bool {
        true
    }

    fn round(&self) -> bool {
        self.axis_ratio == 1.0
    }

    fn extent(&self, level: f64, hz: f64) -> Extent {
        if level >= 1.0 {
            return Extent::Radius(0.0);
        }
        let widest = self.widest_from(hz) * self.axis_ratio.max(1.0 / self.axis_ratio).sqrt();
        Extent::Radius(widest * (-level.ln() / (2.0 * LN_2)).sqrt())
    }

    fn half_power_width(&self, hz: f64) -> Option<f64> {
        Some(self.width(hz))
    }

    fn describe(&self) -> String {
        let ratio = if self.round() { String::new() } else { format!(", axis ratio {}", self.axis_ratio) };
        let measured: Vec<String> = self
            .at_hz
            .iter()
            .map(|&hz| format!("{:.4}° at half power at {:.4} GHz", self.width(hz).to_degrees(), hz / 1e9))
            .collect();
        format!("gaussian, {}{ratio}", measured.join(", "))
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn close(got: f64, want: f64) {
        assert!((got / want - 1.0).abs() < 1e-14, "{got} against {want}");
    }

    /// By hand: θν is 1.2 rad GHz at 1 GHz and 1.3 rad GHz at 2 GHz, so 1.25 rad GHz half way between.
    #[test]
    fn measured_widths_are_interpolated_in_width_times_frequency() {
        let beam = Gaussian::measured(&[(1e9, 1.2), (2e9, 0.65)], 1.0).unwrap();
        close(beam.width(1e9), 1.2);
        close(beam.width(1.5e9), 1.25 / 1.5);
        close(beam.width(2e9), 0.65);
        close(beam.width(0.5e9), 2.4);
        close(beam.width(4e9), 0.325);
        close(beam.voltage(0.3, 0.4, 2e9, 0).re.powi(2), (-4.0 * LN_2 * (0.5 / 0.65f64).powi(2)).exp());
    }

    /// A width ∝ 1/ν is the same beam whether measured once or thrice.
    #[test]
    fn measuring_a_proportional_width_again_changes_nothing() {
        let once = Gaussian::new(0.03, 1.4e9, 1.1).unwrap();
        let thrice = Gaussian::measured(&[(1e9, 0.042), (1.4e9, 0.03), (2.8e9, 0.015)], 1.1).unwrap();
        for hz in [0.3e9, 1e9, 1.1e9, 1.4e9, 2.0e9, 2.8e9, 9e9] {
            close(thrice.width(hz), once.width(hz));
        }
    }

    /// The extent holds for all frequencies above, also for a beam that widens with frequency.
    #[test]
    fn the_extent_covers_every_higher_frequency() {
        let beam = Gaussian::measured(&[(1e9, 0.02), (1.1e9, 0.05), (2e9, 0.01)], 1.7).unwrap();
        let Extent::Radius(radius) = beam.extent(1e-3, 1e9) else { panic!("a Gaussian ends") };
        for step in 0..200 {
            let hz = 1e9 + 1e7 * f64::from(step);
            let largest = beam.voltage(radius, 0.0, hz, 0).re.max(beam.voltage(0.0, radius, hz, 0).re);
            assert!(largest <= 1e-3 * (1.0 + 1e-9), "{largest} at {hz}");
        }
    }

    #[test]
    fn impossible_widths_are_refused() {
        assert!(Gaussian::measured(&[], 1.0).is_err());
        for (at_hz, width, ratio) in [(0.0, 1.0, 1.0), (1.0, -1.0, 1.0), (1.0, f64::NAN, 1.0), (1.0, 1.0, 0.0)] {
            assert!(Gaussian::new(width, at_hz, ratio).is_err(), "{at_hz} {width} {ratio}");
        }
        assert_eq!(Gaussian::measured(&[(2e9, 1.0), (1e9, 2.0)], 1.0).unwrap_err().parameter, "at_hz");
    }
}
