//! What one pointing holds, gathered for a person in a single pass over its visibilities.
//!
//! Resolution: near its peak the point spread function of weights ω_k is 1 − 2π²(⟨u²⟩l² + 2⟨uv⟩lm + ⟨v²⟩m²), ⟨⟩ the
//! mean over visibilities weighted by ω, u and v in wavelengths. The Gaussian exp(−4 ln2 r²/θ²) of the same curvature
//! along a principal axis has θ = √(2 ln2)/(π √⟨u²⟩): that is the beam stated here, for natural weights. It is narrower
//! than a fit to the main lobe when the outermost baselines are few.

use super::{BlockSource, Observation, ObservationError, SPEED_OF_LIGHT, Site};
use crate::run::iso_utc;
use crate::sky::Direction;
use nalgebra::{Matrix2, SymmetricEigen, Vector3};
use serde::Serialize;
use std::collections::BTreeSet;
use std::f64::consts::{LN_2, PI};

/// Radius of the first null of a uniformly lit circular aperture, in λ/D: 3.8317059702/π (first zero of J₁).
const FIRST_NULL: f64 = 1.219_669_9;
/// Pixels in the finest fringe, 1/(longest baseline in wavelengths): twice the sampling theorem's two, so that a peak
/// between pixels is still seen. Common practice, no source.
const PIXELS_PER_FRINGE: f64 = 4.0;

/// One pointing, for people and programs. Angles in degrees or arcseconds, as named.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Summary {
    /// Where it was read from.
    pub origin: String,
    /// Name of the pointing.
    pub name: String,
    /// Name of the array.
    pub array: String,
    /// Phase centre: right ascension and declination, degrees.
    pub phase_centre_deg: [f64; 2],
    /// Aim: right ascension and declination, degrees.
    pub aim_deg: [f64; 2],
    /// First time, UTC, ISO 8601; `None` without rows.
    pub first_utc: Option<String>,
    /// Last time.
    pub last_utc: Option<String>,
    /// First and last time, Modified Julian Date (UTC).
    pub mjd_utc: Option<[f64; 2]>,
    /// Number of different times.
    pub times: usize,
    /// Median of the steps from one time to the next, seconds.
    pub interval_s: Option<f64>,
    /// Number of rows (station pair and time).
    pub rows: u64,
    /// Of these, rows of a station with itself: not imaged.
    pub autocorrelation_rows: u64,
    /// Number of channels of all bands.
    pub channels: usize,
    /// Lowest and highest channel centre, Hz.
    pub frequency_hz: Option<[f64; 2]>,
    /// Narrowest and widest channel, Hz.
    pub channel_width_hz: Option<[f64; 2]>,
    /// Correlation products.
    pub hands: Vec<String>,
    /// Visibilities of pairs of different stations with a positive weight, all hands.
    pub usable_visibilities: u64,
    /// Visibilities of pairs of different stations without.
    pub flagged_visibilities: u64,
    /// Of the usable ones, those of hands that image Stokes I.
    pub imaged_visibilities: u64,
    /// Shortest and longest baseline with a usable visibility, metres.
    pub baseline_m: Option<[f64; 2]>,
    /// Largest √(u² + v²) of a usable visibility, wavelengths.
    pub longest_uv_wavelengths: f64,
    /// Largest |w| of a usable visibility, wavelengths.
    pub largest_w_wavelengths: f64,
    /// Beam for natural weights: largest and smallest full width at half height, arcseconds (see the module text).
    pub beam_arcsec: Option<[f64; 2]>,
    /// Position angle of the beam's long axis, degrees from North through East.
    pub beam_angle_deg: Option<f64>,
    /// Mean position of the stations: longitude (East positive) and geodetic latitude, degrees.
    pub site_deg: Option<[f64; 2]>,
    /// Stations, in the order of the file.
    pub stations: Vec<StationSummary>,
    /// What the reader noticed, and what was noticed here.
    pub notes: Vec<String>,
}

/// One station.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct StationSummary {
    /// Name.
    pub name: String,
    /// Longitude, East positive, degrees.
    pub longitude_deg: f64,
    /// Geodetic latitude, degrees.
    pub latitude_deg: f64,
    /// Height above the ellipsoid, metres.
    pub height_m: f64,
    /// East, North, up of the mean of all stations, metres.
    pub east_north_up_m: [f64; 3],
    /// Mount.
    pub mount: &'static str,
    /// Dish diameter, if the file knows it, metres.
    pub diameter_m: Option<f64>,
    /// Usable visibilities that this station is part of.
    pub usable_visibilities: u64,
}

/// Sums over the rows.
struct Tally {
    moments: Matrix2<f64>,
    weight: f64,
    times: BTreeSet<u64>,
    shortest_m: f64,
    longest_m: f64,
}

impl Summary {
    /// Reads all visibilities of `source` once.
    ///
    /// # Errors
    /// When the file is damaged or cannot be read.
    pub fn gather(source: &mut dyn BlockSource) -> Result<Summary, ObservationError> {
        source.rewind()?;
        let observation = source.observation().clone();
        let mut summary = Summary::of_header(&observation);
        let mut tally = Tally {
            moments: Matrix2::zeros(),
            weight: 0.0,
            times: BTreeSet::new(),
            shortest_m: f64::INFINITY,
            longest_m: 0.0,
        };
        while let Some(block) = source.next_block()? {
            summary.add(&observation, &block, &mut tally);
        }
        summary.conclude(&tally);
        Ok(summary)
    }

    fn of_header(observation: &Observation) -> Summary {
        let degrees = |direction: Direction| <[f64; 2]>::from(direction.to_deg());
        let frequency_hz = range(&observation.frequencies_hz);
        let count = observation.stations.len();
        let sum: Vector3<f64> = observation.stations.iter().map(|s| Vector3::from(s.position_m)).sum();
        let mean = Site::at((sum / count.max(1) as f64).into());
        let stations: Vec<StationSummary> = observation
            .stations
            .iter()
            .map(|station| {
                let place = Site::at(station.position_m);
                StationSummary {
                    name: station.name.clone(),
                    longitude_deg: place.longitude.to_degrees(),
                    latitude_deg: place.latitude.to_degrees(),
                    height_m: place.height_m,
                    east_north_up_m: mean.to_local(station.position_m),
                    mount: station.mount.name(),
                    diameter_m: station.diameter_m,
                    usable_visibilities: 0,
                }
            })
            .collect();
        let mut notes = observation.notes.clone();
        if !observation.hands.iter().any(|hand| hand.carries_total_intensity()) {
            notes.push("no hand measures Stokes I (I, XX, YY, RR or LL): nothing here can be imaged".to_owned());
        }
        let off_ground: Vec<&str> = stations
            .iter()
            .filter(|s| s.height_m.is_nan() || s.height_m.abs() > 20_000.0)
            .map(|s| s.name.as_str())
            .collect();
        if !off_ground.is_empty() {
            notes.push(format!(
                "more than 20 km off the Earth's surface: {}; parallactic angles need Earth-fixed geocentric positions",
                off_ground.join(", ")
            ));
        }
        Summary {
            origin: observation.origin.clone(),
            name: observation.name.clone(),
            array: observation.array_name.clone(),
            phase_centre_deg: degrees(observation.phase_centre),
            aim_deg: degrees(observation.aim),
            first_utc: None,
            last_utc: None,
            mjd_utc: None,
            times: 0,
            interval_s: None,
            rows: 0,
            autocorrelation_rows: 0,
            channels: observation.frequencies_hz.len(),
            frequency_hz,
            channel_width_hz: range(&observation.widths_hz),
            hands: observation.hands.iter().map(|hand| hand.name().to_owned()).collect(),
            usable_visibilities: 0,
            flagged_visibilities: 0,
            imaged_visibilities: 0,
            baseline_m: None,
            longest_uv_wavelengths: 0.0,
            largest_w_wavelengths: 0.0,
            beam_arcsec: None,
            beam_angle_deg: None,
            site_deg: (count > 0).then(|| [mean.longitude.to_degrees(), mean.latitude.to_degrees()]),
            stations,
            notes,
        }
    }

    fn add(&mut self, observation: &Observation, block: &super::Block, tally: &mut Tally) {
        let per_wavelength: Vec<f64> = observation.frequencies_hz.iter().map(|hz| hz / SPEED_OF_LIGHT).collect();
        let images: Vec<bool> = observation.hands.iter().map(|hand| hand.carries_total_intensity()).collect();
        for row in 0..block.rows() {
            self.rows += 1;
            tally.times.insert(ordered(block.mjd_utc[row]));
            let (first, second) = (block.first[row], block.second[row]);
            if first == second {
                self.autocorrelation_rows += 1;
                continue;
            }
            let [u, v, w] = block.uvw_m[row];
            let (mut usable, mut squared, mut weight, mut highest) = (0u64, 0.0, 0.0, 0.0f64);
            for (channel, &k) in per_wavelength.iter().enumerate() {
                let start = block.index(row, channel);
                let weights = &block.weight[start..start + block.hands];
                let good = weights.iter().filter(|&&weight| weight > 0.0).count() as u64;
                if good > 0 {
                    usable += good;
                    highest = highest.max(k);
                }
                for (&hand_weight, _) in weights.iter().zip(&images).filter(|(w, images)| **w > 0.0 && **images) {
                    self.imaged_visibilities += 1;
                    weight += f64::from(hand_weight);
                    squared += f64::from(hand_weight) * k * k;
                }
            }
            self.usable_visibilities += usable;
            self.flagged_visibilities += (block.channels * block.hands) as u64 - usable;
            if usable == 0 {
                continue;
            }
            tally.weight += weight;
            tally.moments += Matrix2::new(u * u, u * v, u * v, v * v) * squared;
            let length = Vector3::new(u, v, w).norm();
            tally.shortest_m = tally.shortest_m.min(length);
            tally.longest_m = tally.longest_m.max(length);
            self.longest_uv_wavelengths = self.longest_uv_wavelengths.max(u.hypot(v) * highest);
            self.largest_w_wavelengths = self.largest_w_wavelengths.max(w.abs() * highest);
            for station in [first, second] {
                if let Some(station) = self.stations.get_mut(station as usize) {
                    station.usable_visibilities += usable;
                }
            }
        }
    }

    fn conclude(&mut self, tally: &Tally) {
        let times: Vec<f64> = tally.times.iter().map(|&bits| unordered(bits)).collect();
        self.times = times.len();
        if let (Some(&first), Some(&last)) = (times.first(), times.last()) {
            self.mjd_utc = Some([first, last]);
            self.first_utc = iso_utc(first);
            self.last_utc = iso_utc(last);
        }
        let mut steps: Vec<f64> = times.windows(2).map(|pair| (pair[1] - pair[0]) * 86_400.0).collect();
        steps.sort_by(f64::total_cmp);
        // dates in single precision, as many files have them, are good to some milliseconds
        self.interval_s = steps.get(steps.len() / 2).copied().map(|step| (step * 1e2).round() / 1e2);
        if tally.longest_m > 0.0 {
            self.baseline_m = Some([tally.shortest_m, tally.longest_m]);
        }
        if tally.weight > 0.0 {
            let eigen = SymmetricEigen::new(tally.moments / tally.weight);
            let (small, large) = if eigen.eigenvalues[0] <= eigen.eigenvalues[1] { (0, 1) } else { (1, 0) };
            let width = |axis: usize| {
                let moment = eigen.eigenvalues[axis];
                ((2.0 * LN_2).sqrt() / (PI * moment.sqrt())).to_degrees() * 3600.0
            };
            // on one line, or with one baseline, the beam has no end along the other axis
            if eigen.eigenvalues[small] > 1e-9 * eigen.eigenvalues[large] {
                self.beam_arcsec = Some([width(small), width(large)]);
                let axis = eigen.eigenvectors.column(small);
                self.beam_angle_deg = Some(axis[0].atan2(axis[1]).to_degrees().rem_euclid(180.0));
            }
        }
        if self.usable_visibilities == 0 {
            self.notes.push("no usable visibility: every weight is zero, negative or not finite".to_owned());
        }
    }

    /// Radius of the main lobe of the smallest dish at the lowest frequency, radians, as a uniformly lit aperture.
    fn main_lobe(&self) -> Option<f64> {
        let smallest = self.stations.iter().filter_map(|s| s.diameter_m).filter(|&d| d > 0.0).reduce(f64::min)?;
        self.frequency_hz.map(|[lowest, _]| FIRST_NULL * SPEED_OF_LIGHT / (lowest * smallest))
    }
}

/// An image that fits the visibilities: a starting point, not a rule.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct SuggestedImage {
    /// The middle of all aims: right ascension and declination, degrees.
    pub centre_deg: [f64; 2],
    /// Pixel side, arcseconds: a quarter of the finest fringe, rounded down to two digits.
    pub pixel_arcsec: f64,
    /// Width and height that hold the main lobe of the smallest dish at every aim; `None` when no file tells diameters.
    pub size_px: Option<[usize; 2]>,
}

/// Suggests one image for all pointings; `None` when there is no usable visibility.
pub fn suggest_image(pointings: &[Summary]) -> Option<SuggestedImage> {
    let longest = pointings.iter().map(|p| p.longest_uv_wavelengths).fold(0.0, f64::max);
    if longest <= 0.0 {
        return None;
    }
    let pixel_arcsec = round_down((1.0 / (PIXELS_PER_FRINGE * longest)).to_degrees() * 3600.0);
    let aims: Vec<Direction> = pointings.iter().map(|p| Direction::from_deg(p.aim_deg[0], p.aim_deg[1])).collect();
    let sum: Vector3<f64> = aims.iter().map(|aim| aim.unit_vector()).sum();
    // aims all around the sky have no middle; the first is as good as any
    let centre = if sum.norm() > 1e-6 { Direction::from_vector(&sum) } else { *aims.first()? };
    let lobes: Option<Vec<f64>> = pointings.iter().map(Summary::main_lobe).collect();
    let size_px = lobes.and_then(|lobes| {
        let frame = centre.frame();
        let mut half = [0.0f64; 2];
        for (&aim, lobe) in aims.iter().zip(lobes) {
            let [l, m, n] = frame.lmn(aim);
            if n <= 0.0 || lobe >= PI / 2.0 {
                return None;
            }
            half[0] = half[0].max(l.abs() + lobe.sin());
            half[1] = half[1].max(m.abs() + lobe.sin());
        }
        let pixel = (pixel_arcsec / 3600.0).to_radians();
        (half[0].hypot(half[1]) < 1.0).then(|| half.map(|half| even_smooth((2.0 * half / pixel).ceil() as usize)))
    });
    let (ra, dec) = centre.to_deg();
    Some(SuggestedImage { centre_deg: [ra, dec], pixel_arcsec, size_px })
}

/// Smallest and largest.
fn range(values: &[f64]) -> Option<[f64; 2]> {
    let low = values.iter().copied().reduce(f64::min)?;
    Some([low, values.iter().copied().fold(low, f64::max)])
}

/// Two digits, towards zero.
fn round_down(value: f64) -> f64 {
    let unit = 10f64.powf(value.log10().floor() - 1.0);
    let digits = (value / unit * (1.0 + 1e-12)).floor();
    // dividing by a whole power of ten keeps 0.29 from becoming 0.29000000000000004
    if unit < 1.0 { digits / (1.0 / unit).round() } else { digits * unit.round() }
}

/// The next even number that has no prime factor above 5: kind to transforms.
fn even_smooth(at_least: usize) -> usize {
    let smooth = |mut n: usize| {
        for factor in [2, 3, 5] {
            while n.is_multiple_of(factor) {
                n /= factor;
            }
        }
        n == 1
    };
    (at_least.max(2)..).find(|&n| n.is_multiple_of(2) && smooth(n)).unwrap_or(at_least)
}

/// A number as bits that sort as it does (all dates are positive or this keeps their order all the same).
fn ordered(value: f64) -> u64 {
    let bits = value.to_bits();
    if bits >> 63 == 1 { !bits } else { bits | 1 << 63 }
}

fn unordered(bits: u64) -> f64 {
    f64::from_bits(if bits >> 63 == 1 { bits & !(1 << 63) } else { !bits })
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::observation::{Block, Hand, MemorySource, Mount, Station};
    use num_complex::Complex32;

    /// Three stations on a line East-West and one North; rows are given their u, v, w by hand.
    fn source(uvw: &[[f64; 3]], weights: &[f32]) -> MemorySource {
        let site = Site::new(0.3, 0.8, 100.0).unwrap();
        let station = |(i, enu): (usize, &[f64; 3])| Station {
            name: format!("S{i}"),
            position_m: site.to_earth(*enu),
            mount: Mount::Equatorial,
            diameter_m: Some(10.0 + i as f64),
            feed_angle: 0.0,
        };
        let places = [[0.0, 0.0, 0.0], [100.0, 0.0, 0.0], [0.0, 100.0, 0.0], [-100.0, -100.0, 0.0]];
        let aim = Direction::from_deg(150.0, 40.0);
        let observation = Observation {
            origin: "invented.fits".to_owned(),
            name: "A".to_owned(),
            array_name: "ARRAY".to_owned(),
            phase_centre: aim,
            aim,
            stations: places.iter().enumerate().map(station).collect(),
            frequencies_hz: vec![SPEED_OF_LIGHT, 2.0 * SPEED_OF_LIGHT],
            widths_hz: vec![1e6, 2e6],
            hands: vec![Hand::XX, Hand::XY],
            ut1_utc_s: 0.0,
            notes: vec!["a note".to_owned()],
        };
        let rows = uvw.len();
        let block = Block {
            mjd_utc: (0..rows).map(|row| 61100.0 + row as f64 * 30.0 / 86_400.0).collect(),
            uvw_m: uvw.to_vec(),
            first: vec![0; rows],
            second: (0..rows).map(|row| (row % 3) as u32 + 1).collect(),
            channels: 2,
            hands: 2,
            data: vec![Complex32::new(1.0, 0.0); rows * 4],
            weight: weights.to_vec(),
        };
        MemorySource::new(observation, vec![block])
    }

    /// All figures by hand: wavelengths are 1 m and 0.5 m.
    #[test]
    fn figures_of_a_small_observation() {
        let weights = [1.0, 1.0, 1.0, 0.0, 1.0, 1.0, 0.0, 0.0];
        let mut source = source(&[[300.0, 0.0, 40.0], [0.0, 400.0, -30.0]], &weights);
        let summary = Summary::gather(&mut source).unwrap();
        assert_eq!((summary.rows, summary.times, summary.interval_s), (2, 2, Some(30.0)));
        assert_eq!((summary.usable_visibilities, summary.flagged_visibilities), (5, 3));
        assert_eq!(summary.imaged_visibilities, 3);
        // the second row has no usable visibility in the upper channel
        assert_eq!(summary.longest_uv_wavelengths, 600.0);
        assert_eq!(summary.largest_w_wavelengths, 80.0);
        assert_eq!(summary.first_utc.as_deref(), Some("2026-03-01T00:00:00Z"));
        let used: Vec<u64> = summary.stations.iter().map(|s| s.usable_visibilities).collect();
        assert_eq!(used, [5, 3, 2, 0]);
        // <u²> = (300² + 600²)/3, <v²> = 400²/3
        let width = |moment: f64| ((2.0 * LN_2).sqrt() / (PI * moment.sqrt())).to_degrees() * 3600.0;
        let [major, minor] = summary.beam_arcsec.unwrap();
        assert!((major / width(160_000.0 / 3.0) - 1.0).abs() < 1e-12, "{major}");
        assert!((minor / width(450_000.0 / 3.0) - 1.0).abs() < 1e-12, "{minor}");
        // long axis where the baselines are short: North-South baselines are the shorter
        assert!(summary.beam_angle_deg.unwrap().min(180.0 - summary.beam_angle_deg.unwrap()) < 1e-9);
        let [east, north, up] = summary.stations[1].east_north_up_m;
        assert!((east - 100.0).abs() < 1e-2 && north.abs() < 1e-2 && up.abs() < 1e-2, "{east} {north} {up}");
        assert_eq!(summary.notes, ["a note"]);
    }

    #[test]
    fn nothing_usable_is_said_and_nothing_suggested() {
        let mut source = source(&[[300.0, 0.0, 40.0]], &[0.0; 4]);
        let summary = Summary::gather(&mut source).unwrap();
        assert!(summary.notes[1].contains("no usable visibility"), "{:?}", summary.notes);
        assert_eq!(summary.beam_arcsec, None);
        assert_eq!(suggest_image(&[summary]), None);
        assert_eq!(suggest_image(&[]), None);
    }

    /// One row has no beam along its baseline's other axis.
    #[test]
    fn a_single_baseline_has_no_beam() {
        let mut source = source(&[[300.0, 100.0, 0.0]], &[1.0; 4]);
        assert_eq!(Summary::gather(&mut source).unwrap().beam_arcsec, None);
    }

    /// Finest fringe 1/600 rad = 343.77 arcsec, a quarter of it 85.94; main lobe 1.21967 · 1 m / 10 m.
    #[test]
    fn the_suggested_image_holds_the_main_lobe() {
        let mut source = source(&[[300.0, 0.0, 40.0], [0.0, 200.0, -30.0]], &[1.0; 8]);
        let summary = Summary::gather(&mut source).unwrap();
        let image = suggest_image(std::slice::from_ref(&summary)).unwrap();
        assert_eq!(image.pixel_arcsec, 85.0);
        let wanted = 2.0 * 0.121_966_99f64.sin() / (85.0f64 / 3600.0).to_radians();
        let [width, height] = image.size_px.unwrap();
        assert!(width == height && width as f64 >= wanted && (width as f64) < 1.1 * wanted, "{width} for {wanted}");
        let mut other = summary.clone();
        other.aim_deg[0] += 2.0;
        let both = suggest_image(&[summary, other]).unwrap();
        assert!((both.centre_deg[0] - 151.0).abs() < 1e-9, "{:?}", both.centre_deg);
        assert!(both.size_px.unwrap()[0] > width);
    }

    #[test]
    fn rounding_and_smooth_sizes() {
        for (value, want) in [(85.94, 85.0), (0.2999, 0.29), (3.0, 3.0), (1234.0, 1200.0), (0.00123, 0.0012)] {
            assert_eq!(round_down(value), want);
        }
        for (at_least, want) in [(1, 2), (7, 8), (401, 432), (4097, 4320)] {
            assert_eq!(even_smooth(at_least), want);
        }
        for value in [-2.0, -0.0, 0.0, 1e-300, 61100.25] {
            assert_eq!(unordered(ordered(value)).to_bits(), f64::to_bits(value));
        }
    }
}
