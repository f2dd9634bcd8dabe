//! Our two colour maps, straight lines between anchor colours.
//!
//! Both were laid out in OKLab (B. Ottosson 2020) so that lightness, which every eye and every printer sees, orders the
//! values: it rises evenly along `Rising` and falls evenly to both sides of zero in `TwoSided`. The hues go from blue
//! to amber and never set red against green.

use super::canvas::Rgb;
use interp::{InterpMode, interp};

/// Ink, deep blue, petrol, slate, stone, clay, apricot, straw, ivory.
const RISING: [Rgb; 9] = [
    [16, 16, 41],
    [14, 42, 82],
    [6, 73, 108],
    [42, 104, 123],
    [94, 132, 124],
    [172, 149, 110],
    [221, 173, 113],
    [246, 209, 141],
    [253, 246, 228],
];

/// Night blue to paper white at zero to burnt umber.
const TWO_SIDED: [Rgb; 9] = [
    [19, 51, 114],
    [43, 100, 168],
    [90, 152, 203],
    [162, 203, 227],
    [245, 243, 239],
    [222, 190, 154],
    [202, 125, 60],
    [163, 64, 0],
    [108, 12, 0],
];

/// A colour map.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum ColourMap {
    /// From dark (lowest) to light (highest): quantities that are not negative.
    Rising,
    /// Blue below zero, paper white at zero, amber to umber above: quantities of both signs.
    TwoSided,
}

impl ColourMap {
    /// The colour at `t`: 0 to 1 along `Rising`, -1 to 1 along `TwoSided`; beyond the ends the end colour.
    pub fn colour(self, t: f64) -> Rgb {
        let (anchors, t) = match self {
            ColourMap::Rising => (&RISING, t),
            ColourMap::TwoSided => (&TWO_SIDED, (t + 1.0) / 2.0),
        };
        let places: [f64; 9] = std::array::from_fn(|i| i as f64 / 8.0);
        std::array::from_fn(|channel| {
            let levels: [f64; 9] = std::array::from_fn(|i| f64::from(anchors[i][channel]));
            interp(&places, &levels, t.clamp(0.0, 1.0), &InterpMode::FirstLast).round() as u8
        })
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Lightness L of OKLab (Ottosson 2020), from sRGB.
    fn lightness(colour: Rgb) -> f64 {
        let [r, g, b] = colour.map(|c| {
            let v = f64::from(c) / 255.0;
            if v <= 0.04045 { v / 12.92 } else { ((v + 0.055) / 1.055).powf(2.4) }
        });
        let l = (0.4122214708 * r + 0.5363325363 * g + 0.0514459929 * b).cbrt();
        let m = (0.2119034982 * r + 0.6806995451 * g + 0.1073969566 * b).cbrt();
        let s = (0.0883024619 * r + 0.2817188376 * g + 0.6299787005 * b).cbrt();
        0.2104542553 * l + 0.7936177850 * m - 0.0040720468 * s
    }

    /// The order of values must be seen without hue: lightness rises all the way, nowhere off an even rise by more
    /// than 0.02 (own bound, about what the eye tells apart beside each other).
    #[test]
    fn rising_lightness_is_even() {
        let lights: Vec<f64> =
            (0..=100).map(|i| lightness(ColourMap::Rising.colour(f64::from(i) / 100.0))).collect();
        assert!(lights.windows(2).all(|w| w[1] > w[0]), "{lights:?}");
        let (first, last) = (lights[0], lights[100]);
        for (i, l) in lights.iter().enumerate() {
            let even = first + (last - first) * i as f64 / 100.0;
            assert!((l - even).abs() < 0.02, "{i}: {l} against {even}");
        }
    }

    /// Both sides of zero get darker alike: same lightness at t and -t to 0.02, falling away from zero.
    #[test]
    fn two_sided_lightness_mirrors() {
        let light = |t: f64| lightness(ColourMap::TwoSided.colour(t));
        for i in 0..100 {
            let (near, far) = (f64::from(i) / 100.0, f64::from(i + 1) / 100.0);
            assert!(light(far) < light(near) && light(-far) < light(-near), "{far}");
            assert!((light(far) - light(-far)).abs() < 0.02, "{far}: {} {}", light(far), light(-far));
        }
    }

    /// The signs stay apart for people without red or green cones: blue minus yellow, which they do see, differs in
    /// sign (the measure is B - (R+G)/2 of sRGB, a rule of thumb, no source).
    #[test]
    fn signs_differ_in_blue_against_yellow() {
        for i in 3..=10 {
            let t = f64::from(i) / 10.0;
            let opponent = |c: Rgb| f64::from(c[2]) - (f64::from(c[0]) + f64::from(c[1])) / 2.0;
            assert!(
                opponent(ColourMap::TwoSided.colour(-t)) > 20.0 && opponent(ColourMap::TwoSided.colour(t)) < -20.0
            );
        }
    }

    #[test]
    fn values_beyond_the_ends_keep_the_end_colour() {
        assert_eq!(ColourMap::Rising.colour(9.0), RISING[8]);
        assert_eq!(ColourMap::Rising.colour(-9.0), RISING[0]);
        assert_eq!(ColourMap::TwoSided.colour(-9.0), TWO_SIDED[0]);
        assert_eq!(ColourMap::TwoSided.colour(0.0), TWO_SIDED[4]);
    }
}
