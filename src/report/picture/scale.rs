//! From values to colours and to the numbers beside the colour bar.

use super::PictureError;
use super::canvas::Rgb;
use super::colours::ColourMap;

/// How values are spread over the colours.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Stretch {
    /// Even steps.
    Linear,
    /// asinh(v / softening): even steps near zero, steps of a factor far from it.
    Asinh {
        /// Value where even steps turn into factors; positive.
        softening: f64,
    },
}

impl Stretch {
    /// The stretched value; rises with `value`, 0 at 0.
    pub fn apply(self, value: f64) -> f64 {
        match self {
            Stretch::Linear => value,
            Stretch::Asinh { softening } => (value / softening).asinh(),
        }
    }

    /// The value whose stretched value is `stretched`.
    pub fn undo(self, stretched: f64) -> f64 {
        match self {
            Stretch::Linear => stretched,
            Stretch::Asinh { softening } => softening * stretched.sinh(),
        }
    }
}

/// The range of values shown, their stretch and colours.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Scale {
    /// Value at the lower end of the colour bar.
    pub low: f64,
    /// Value at the upper end.
    pub high: f64,
    /// Stretch between them.
    pub stretch: Stretch,
    /// Colours.
    pub colours: ColourMap,
}

/// Peaks more than this many times the spread about the median call for asinh (own choice: below it a linear scale
/// still shows the noise).
const WIDE_RANGE: f64 = 60.0;

impl Scale {
    /// A scale from `low` to `high`; two-sided when `low` is negative.
    ///
    /// # Errors
    /// When the range is empty or not finite, or the softening is not positive.
    pub fn new(low: f64, high: f64, stretch: Stretch) -> Result<Scale, PictureError> {
        let softening = match stretch {
            Stretch::Linear => 1.0,
            Stretch::Asinh { softening } => softening,
        };
        let good = low.is_finite() && high.is_finite() && low < high && softening.is_finite() && softening > 0.0;
        if !good {
            return Err(PictureError::BadScale { low, high, softening });
        }
        let colours = if low < 0.0 { ColourMap::TwoSided } else { ColourMap::Rising };
        Ok(Scale { low, high, stretch, colours })
    }

    /// The scale for these values (NaN ignored): all of their range; two-sided when any is negative, then with asinh
    /// when peaks stand far above the spread. Without any usable value: 0 to 1.
    pub fn automatic(values: impl Iterator<Item = f64>) -> Scale {
        let mut kept: Vec<f64> = values.filter(|v| v.is_finite()).collect();
        let plain = |low: f64, high: f64, colours| Scale { low, high, stretch: Stretch::Linear, colours };
        let low = kept.iter().copied().fold(f64::INFINITY, f64::min);
        let high = kept.iter().copied().fold(f64::NEG_INFINITY, f64::max);
        if kept.is_empty() {
            return plain(0.0, 1.0, ColourMap::Rising);
        }
        if low == high {
            // One value everywhere: a range about it (about 0 to 1 when it is 0).
            return match low.partial_cmp(&0.0) {
                Some(std::cmp::Ordering::Greater) => plain(0.0, low, ColourMap::Rising),
                Some(std::cmp::Ordering::Less) => plain(low, 0.0, ColourMap::TwoSided),
                _ => plain(0.0, 1.0, ColourMap::Rising),
            };
        }
        if low >= 0.0 {
            return plain(low, high, ColourMap::Rising);
        }
        // The spread: 1.4826 times the median absolute value is the standard deviation of Gaussian noise about 0.
        kept.iter_mut().for_each(|v| *v = v.abs());
        let middle = kept.len() / 2;
        let spread = 1.4826 * *kept.select_nth_unstable_by(middle, f64::total_cmp).1;
        let stretch = if spread > 0.0 && high.max(-low) > WIDE_RANGE * spread {
            Stretch::Asinh { softening: 3.0 * spread }
        } else {
            Stretch::Linear
        };
        Scale { low, high, stretch, colours: ColourMap::TwoSided }
    }

    /// Place of a value along the colour bar, 0 at the lower end, 1 at the upper.
    pub fn place(&self, value: f64) -> f64 {
        let (low, high) = (self.stretch.apply(self.low), self.stretch.apply(self.high));
        (self.stretch.apply(value) - low) / (high - low)
    }

    /// The value at a place along the colour bar.
    pub fn value_at(&self, place: f64) -> f64 {
        let (low, high) = (self.stretch.apply(self.low), self.stretch.apply(self.high));
        self.stretch.undo(low + place * (high - low))
    }

    /// The colour of a value. On a two-sided scale equal distances from zero have equal strength.
    pub fn colour(&self, value: f64) -> Rgb {
        match self.colours {
            ColourMap::Rising => self.colours.colour(self.place(value)),
            ColourMap::TwoSided => {
                let longest = self.stretch.apply(self.low).abs().max(self.stretch.apply(self.high).abs());
                self.colours.colour(self.stretch.apply(value) / longest)
            }
        }
    }

    /// Round values for the colour bar, at least `gap` apart along it (a fraction of its length), rising.
    pub fn round_values(&self, gap: f64) -> Vec<f64> {
        let mut kept: Vec<f64> = match self.stretch {
            Stretch::Linear => {
                let step = round_step((self.high - self.low) * gap);
                let first = (self.low / step - 1e-9).ceil() as i64;
                let last = (self.high / step + 1e-9).floor() as i64;
                (first..=last).map(|i| i as f64 * step).collect()
            }
            Stretch::Asinh { .. } => self.round_factors(gap),
        };
        kept.sort_by(f64::total_cmp);
        kept
    }

    /// Zero, then powers of ten from the largest down, then their fives and twos, wherever there is room.
    fn round_factors(&self, gap: f64) -> Vec<f64> {
        let top = self.high.abs().max(self.low.abs()).log10().ceil() as i32;
        let mut kept: Vec<f64> = Vec::new();
        let candidates = std::iter::once(0.0).chain([1.0, 5.0, 2.0].into_iter().flat_map(|lead| {
            (top - 12..=top).rev().flat_map(move |power| [1.0, -1.0].map(|sign| sign * power_of_ten(power) * lead))
        }));
        for value in candidates {
            let inside = (self.low..=self.high).contains(&value);
            if inside && kept.iter().all(|k| (self.place(*k) - self.place(value)).abs() >= gap) {
                kept.push(value);
            }
        }
        kept
    }
}

fn power_of_ten(power: i32) -> f64 {
    // Division keeps 10^-3 the closest number to 0.001, which repeated multiplication does not.
    if power < 0 { 1.0 / 10f64.powi(-power) } else { 10f64.powi(power) }
}

/// The smallest of 1, 2, 5 times a power of ten that is not below `least`.
fn round_step(least: f64) -> f64 {
    let power = least.log10().floor() as i32;
    [1.0, 2.0, 5.0, 10.0]
        .into_iter()
        .map(|lead| if power < 0 { lead / 10f64.powi(-power) } else { lead * 10f64.powi(power) })
        .find(|step| *step >= least * (1.0 - 1e-12))
        .unwrap_or(least)
}

/// Unit and numbers of a colour bar, brought to readable size together.
#[derive(Debug, Clone, PartialEq)]
pub struct BarNumbers {
    /// The values marked, in the picture's unit.
    pub values: Vec<f64>,
    /// What to write at each.
    pub labels: Vec<String>,
    /// The unit the labels are in.
    pub unit: String,
}

impl BarNumbers {
    /// Round values of a scale with labels, for a quantity in `unit`. Jy takes a prefix (µJy, mJy), other units a power
    /// of ten, pure numbers stay plain while they are readable.
    pub fn of(scale: &Scale, unit: &str, gap: f64) -> BarNumbers {
        let values = scale.round_values(gap);
        let largest = values.iter().fold(0.0f64, |a, v| a.max(v.abs()));
        let smallest = values.iter().filter(|v| **v != 0.0).fold(f64::INFINITY, |a, v| a.min(v.abs()));
        let mut thousands = if largest > 0.0 { (largest.log10() / 3.0 + 1e-9).floor() as i32 } else { 0 };
        // A wide asinh bar: let the small numbers decide as long as the large ones keep to five digits.
        let by_smallest = ((smallest * 10.0).log10() / 3.0 + 1e-9).floor() as i32;
        if by_smallest < thousands && largest / 10f64.powi(3 * by_smallest) < 1e5 {
            thousands = by_smallest;
        }
        let prefix = match thousands {
            -4 => Some("p"),
            -3 => Some("n"),
            -2 => Some("µ"),
            -1 => Some("m"),
            0 => Some(""),
            1 => Some("k"),
            2 => Some("M"),
            _ => None,
        };
        let readable = unit.is_empty() && (1e-3..1e4).contains(&largest);
        let (thousands, unit) = match prefix {
            _ if readable || thousands == 0 => (0, unit.to_string()),
            // Not Jy^{−2}, where a prefix would be squared with it.
            Some(prefix) if unit == "Jy" || unit.starts_with("Jy/") => (thousands, format!("{prefix}{unit}")),
            _ if unit.is_empty() => (thousands, format!("10^{{{}}}", with_minus(&(3 * thousands).to_string()))),
            _ => (thousands, format!("10^{{{}}} {unit}", with_minus(&(3 * thousands).to_string()))),
        };
        let labels = values.iter().map(|v| label(*v / 10f64.powi(3 * thousands))).collect();
        BarNumbers { values, labels, unit }
    }
}

/// A number as people write it: no trailing zeros, a true minus sign.
fn label(value: f64) -> String {
    // Round values have at most a few digits; twelve decimals drop the rounding of the division.
    let text = format!("{value:.12}");
    let text = text.trim_end_matches('0').trim_end_matches('.');
    let text = if text.trim_start_matches('-').parse() == Ok(0.0) { "0" } else { text };
    with_minus(text)
}

fn with_minus(text: &str) -> String {
    text.replace('-', "−")
}

#[cfg(test)]
mod tests {
    use super::*;

    fn asinh(softening: f64) -> Stretch {
        Stretch::Asinh { softening }
    }

    #[test]
    fn places_and_values_are_inverse() {
        for scale in [Scale::new(-0.2, 3.0, asinh(0.01)).unwrap(), Scale::new(1e6, 4e6, Stretch::Linear).unwrap()] {
            assert!(scale.place(scale.low).abs() < 1e-12 && (scale.place(scale.high) - 1.0).abs() < 1e-12);
            for i in 0..=20 {
                let value = scale.value_at(f64::from(i) / 20.0);
                assert!((scale.place(value) - f64::from(i) / 20.0).abs() < 1e-9);
            }
        }
    }

    #[test]
    fn linear_bar_has_round_numbers_in_a_readable_unit() {
        let numbers = BarNumbers::of(&Scale::new(-0.0021, 0.0103, Stretch::Linear).unwrap(), "Jy/beam", 0.15);
        assert_eq!((numbers.labels.join(" "), numbers.unit.as_str()), ("−2 0 2 4 6 8 10".into(), "mJy/beam"));
        let numbers = BarNumbers::of(&Scale::new(0.0, 4.2e7, Stretch::Linear).unwrap(), "Jy^{−2}", 0.2);
        assert_eq!(numbers.labels.join(" "), "0 10 20 30 40");
        assert_eq!(numbers.unit, "10^{6} Jy^{−2}");
    }

    #[test]
    fn asinh_bar_marks_factors_of_ten_on_both_sides() {
        let scale = Scale::new(-0.05, 1.0, asinh(1e-3)).unwrap();
        let numbers = BarNumbers::of(&scale, "", 0.06);
        assert_eq!(numbers.labels.join(" "), "−0.05 −0.01 −0.001 0 0.001 0.01 0.1 1");
        for (value, text) in numbers.values.iter().zip(&numbers.labels) {
            assert_eq!(text.replace('−', "-").parse::<f64>().unwrap(), *value);
        }
    }

    #[test]
    fn automatic_scales() {
        assert_eq!(Scale::automatic([f64::NAN].into_iter()), Scale::automatic(std::iter::empty()));
        assert_eq!(Scale::automatic([2.0, 2.0].into_iter()).high, 2.0);
        assert_eq!(Scale::automatic([-2.0].into_iter()).colours, ColourMap::TwoSided);
        assert_eq!(Scale::automatic([0.5, 3.0].into_iter()).colours, ColourMap::Rising);
        assert_eq!(Scale::automatic([-1.0, 0.5, 0.2, 3.0].into_iter()).stretch, Stretch::Linear);
        let noisy = (0..1000).map(|i| f64::from(i % 7 - 3) * 1e-3).chain([5.0]);
        assert!(matches!(Scale::automatic(noisy).stretch, Stretch::Asinh { .. }));
    }

    #[test]
    fn impossible_scales_are_refused() {
        for (low, high, stretch) in [
            (1.0, 1.0, Stretch::Linear),
            (f64::NAN, 1.0, Stretch::Linear),
            (0.0, 1.0, asinh(0.0)),
            (2.0, 1.0, asinh(1.0)),
        ] {
            let text = Scale::new(low, high, stretch).unwrap_err().to_string();
            assert!(text.contains("colour scale"), "{text}");
        }
    }

    #[test]
    fn zero_is_paper_white_and_signs_are_balanced() {
        let scale = Scale::new(-1.0, 10.0, Stretch::Linear).unwrap();
        assert_eq!(scale.colour(0.0), ColourMap::TwoSided.colour(0.0));
        assert_eq!(scale.colour(-1.0), ColourMap::TwoSided.colour(-0.1));
    }
}
