//! Steps and labels of right ascension (hours, minutes, seconds of time) and declination (degrees, minutes, seconds).

/// A step between lines: a whole number of small units, so that labels are exact.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Step {
    kind: Kind,
    /// Length of the step in units of 10^-`decimals` seconds.
    units: i64,
    /// Decimals of the seconds; 0 for whole ones.
    decimals: u32,
}

#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum Kind {
    Time,
    Arc,
}

const fn time(units: i64, decimals: u32) -> Step {
    Step { kind: Kind::Time, units, decimals }
}

const fn arc(units: i64, decimals: u32) -> Step {
    Step { kind: Kind::Arc, units, decimals }
}

/// Steps of right ascension, rising.
pub const RA_STEPS: &[Step] = &[
    time(1, 5),
    time(2, 5),
    time(5, 5),
    time(1, 4),
    time(2, 4),
    time(5, 4),
    time(1, 3),
    time(2, 3),
    time(5, 3),
    time(1, 2),
    time(2, 2),
    time(5, 2),
    time(1, 1),
    time(2, 1),
    time(5, 1),
    time(1, 0),
    time(2, 0),
    time(5, 0),
    time(10, 0),
    time(20, 0),
    time(30, 0),
    time(60, 0),
    time(120, 0),
    time(300, 0),
    time(600, 0),
    time(1200, 0),
    time(1800, 0),
    time(3600, 0),
    time(2 * 3600, 0),
    time(3 * 3600, 0),
    time(4 * 3600, 0),
    time(6 * 3600, 0),
    time(12 * 3600, 0),
];

/// Steps of declination, rising.
pub const DEC_STEPS: &[Step] = &[
    arc(1, 4),
    arc(2, 4),
    arc(5, 4),
    arc(1, 3),
    arc(2, 3),
    arc(5, 3),
    arc(1, 2),
    arc(2, 2),
    arc(5, 2),
    arc(1, 1),
    arc(2, 1),
    arc(5, 1),
    arc(1, 0),
    arc(2, 0),
    arc(5, 0),
    arc(10, 0),
    arc(20, 0),
    arc(30, 0),
    arc(60, 0),
    arc(120, 0),
    arc(300, 0),
    arc(600, 0),
    arc(1200, 0),
    arc(1800, 0),
    arc(3600, 0),
    arc(2 * 3600, 0),
    arc(5 * 3600, 0),
    arc(10 * 3600, 0),
    arc(15 * 3600, 0),
    arc(30 * 3600, 0),
];

impl Step {
    /// Length of the step, radians.
    pub fn radians(self) -> f64 {
        let seconds = self.units as f64 / 10f64.powi(self.decimals as i32);
        let degrees = match self.kind {
            Kind::Time => seconds / 240.0,
            Kind::Arc => seconds / 3600.0,
        };
        degrees.to_radians()
    }

    /// Whether this is a step of so many whole hours of right ascension.
    pub fn is_hours(self, hours: i64) -> bool {
        self.kind == Kind::Time && self.decimals == 0 && self.units == hours * 3600
    }

    /// Whether the step fits a whole number of times between equator and pole.
    pub fn divides_right_angle(self) -> bool {
        (90 * 3600 * 10i64.pow(self.decimals)) % self.units == 0
    }

    /// The label of the `count`-th line: `10^{h}24^{m}30^{s}` or `+41°48′30″`, as fine as the step asks. Hours run
    /// from 0 to 23.
    pub fn label(self, count: i64) -> String {
        let per_second = 10i64.pow(self.decimals);
        let mut total = count * self.units;
        if self.kind == Kind::Time {
            total = total.rem_euclid(86_400 * per_second);
        }
        let (size, fraction) = ((total.abs() / per_second), total.abs() % per_second);
        let (whole, minutes, seconds) = (size / 3600, size / 60 % 60, size % 60);
        let decimals = if self.decimals > 0 {
            format!(".{fraction:0width$}", width = self.decimals as usize)
        } else {
            String::new()
        };
        let second_steps = self.units % (60 * per_second) != 0;
        let minute_steps = self.units % (3600 * per_second) != 0;
        match self.kind {
            Kind::Time if second_steps => format!("{whole}^{{h}}{minutes:02}^{{m}}{seconds:02}{decimals}^{{s}}"),
            Kind::Time if minute_steps => format!("{whole}^{{h}}{minutes:02}^{{m}}"),
            Kind::Time => format!("{whole}^{{h}}"),
            Kind::Arc => {
                let sign = match total {
                    0 => "",
                    1.. => "+",
                    _ => "−",
                };
                if second_steps {
                    format!("{sign}{whole}°{minutes:02}′{seconds:02}{decimals}″")
                } else if minute_steps {
                    format!("{sign}{whole}°{minutes:02}′")
                } else {
                    format!("{sign}{whole}°")
                }
            }
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn labels_of_known_lines() {
        assert_eq!(time(30, 0).label(2 * 60 + 1), "1^{h}00^{m}30^{s}");
        assert_eq!(time(5, 1).label(-1), "23^{h}59^{m}59.5^{s}");
        assert_eq!(time(600, 0).label(61), "10^{h}10^{m}");
        assert_eq!(time(7200, 0).label(12), "0^{h}");
        assert_eq!(arc(1800, 0).label(-1), "−0°30′");
        assert_eq!(arc(1, 2).label(12_345), "+0°02′03.45″");
        assert_eq!(arc(10 * 3600, 0).label(0), "0°");
        assert_eq!(arc(30, 0).label(-10_801), "−90°00′30″");
    }

    #[test]
    fn steps_rise() {
        for steps in [RA_STEPS, DEC_STEPS] {
            assert!(steps.windows(2).all(|w| w[1].radians() > w[0].radians()));
        }
    }
}
