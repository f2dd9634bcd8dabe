//! Invented images of single fields, with known sources and noise, on many kinds of pixels.
#![allow(dead_code)]

use evensky::fits::{FitsFile, Header, Value, celestial_axes, write_image_f64};
use evensky::run::{At, Depth, FieldEntry};
use evensky::sky::{CelestialWcs, Direction};
use nalgebra::{Matrix2, Vector2};
use ndarray::Array2;
use rand::SeedableRng;
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, StandardNormal};
use std::path::{Path, PathBuf};

/// An image of one field, without its pixels.
#[derive(Clone)]
pub struct Sheet {
    pub projection: &'static str,
    pub centre_deg: [f64; 2],
    pub size: [usize; 2],
    /// CDELT of right ascension and declination, arcseconds.
    pub step_arcsec: [f64; 2],
    pub rotation_deg: f64,
    /// CRPIX, counted from 1.
    pub reference: [f64; 2],
    /// Declination on the first axis.
    pub swapped: bool,
    /// BMAJ, BMIN in arcseconds, BPA in degrees.
    pub beam: [f64; 3],
    pub hz: f64,
    /// Keywords set last; `Undefined` takes one away.
    pub more: Vec<(&'static str, Value)>,
}

impl Default for Sheet {
    fn default() -> Self {
        Sheet {
            projection: "SIN",
            centre_deg: [152.6, 41.8],
            size: [120, 110],
            step_arcsec: [-10.0, 10.0],
            rotation_deg: 0.0,
            reference: [60.0, 56.0],
            swapped: false,
            beam: [48.0, 36.0, 25.0],
            hz: 1.4e9,
            more: Vec::new(),
        }
    }
}

impl Sheet {
    pub fn header(&self) -> Header {
        let (lon, lat) = if self.swapped { (2, 1) } else { (1, 2) };
        let mut keys: Vec<(String, Value)> = Vec::new();
        let mut put = |key: String, value: Value| keys.push((key, value));
        put("BUNIT".into(), Value::from("Jy/beam"));
        put(format!("CTYPE{lon}"), Value::from(format!("RA---{}", self.projection)));
        put(format!("CTYPE{lat}"), Value::from(format!("DEC--{}", self.projection)));
        put(format!("CRVAL{lon}"), Value::from(self.centre_deg[0]));
        put(format!("CRVAL{lat}"), Value::from(self.centre_deg[1]));
        put("CRPIX1".into(), Value::from(self.reference[0]));
        put("CRPIX2".into(), Value::from(self.reference[1]));
        put(format!("CDELT{lon}"), Value::from(self.step_arcsec[0] / 3600.0));
        put(format!("CDELT{lat}"), Value::from(self.step_arcsec[1] / 3600.0));
        if self.rotation_deg != 0.0 {
            put(format!("CROTA{lat}"), Value::from(self.rotation_deg));
        }
        put("RADESYS".into(), Value::from("ICRS"));
        put("RESTFRQ".into(), Value::from(self.hz));
        put("MJD-OBS".into(), Value::from(59_321.5));
        put("TIMESYS".into(), Value::from("UTC"));
        put("BMAJ".into(), Value::from(self.beam[0] / 3600.0));
        put("BMIN".into(), Value::from(self.beam[1] / 3600.0));
        put("BPA".into(), Value::from(self.beam[2]));
        let mut header = Header::new();
        let taken = |key: &str| self.more.iter().any(|(k, v)| *k == key && *v == Value::Undefined);
        for (key, value) in keys.into_iter().filter(|(key, _)| !taken(key)) {
            header.set(&key, value, "");
        }
        for (key, value) in self.more.iter().filter(|(_, value)| *value != Value::Undefined) {
            header.set(key, value.clone(), "");
        }
        header
    }

    /// Writes `pixels` (`[second axis][first axis]`) under this header.
    pub fn write(&self, path: &Path, pixels: &Array2<f64>) {
        assert_eq!(pixels.dim(), (self.size[1], self.size[0]));
        let values: Vec<f64> = pixels.iter().copied().collect();
        write_image_f64(path, &self.header(), &self.size, &values).unwrap();
    }

    /// Its world coordinates, as the program reads them.
    pub fn wcs(&self) -> CelestialWcs {
        let folder = tempfile::tempdir().unwrap();
        let path = folder.path().join("wcs.fits");
        self.write(&path, &self.empty());
        celestial_axes(&FitsFile::open(&path).unwrap().hdus()[0]).unwrap().wcs
    }

    pub fn empty(&self) -> Array2<f64> {
        Array2::zeros((self.size[1], self.size[0]))
    }

    /// Covariance of the beam in square pixels: BMAJ along (sin BPA, cos BPA) in (East, North).
    pub fn beam_px(&self) -> Matrix2<f64> {
        let inverse = self.wcs().axes().try_inverse().unwrap();
        let sigma = |arcsec: f64| (arcsec / 3600.0).to_radians() / (8.0 * 2f64.ln()).sqrt();
        let (sin, cos) = self.beam[2].to_radians().sin_cos();
        let along = Vector2::new(sin, cos) * sigma(self.beam[0]);
        let across = Vector2::new(cos, -sin) * sigma(self.beam[1]);
        let (along, across) = (inverse * along, inverse * across);
        along * along.transpose() + across * across.transpose()
    }

    /// Point sources (direction, Jy) seen with the beam.
    pub fn sources(&self, sources: &[(Direction, f64)]) -> Array2<f64> {
        let (wcs, inverse) = (self.wcs(), self.beam_px().try_inverse().unwrap());
        let mut image = self.empty();
        for &(direction, jy) in sources {
            let [x, y] = wcs.pixel_of(direction).expect("a place on the sky of the field");
            image.indexed_iter_mut().for_each(|((row, column), value)| {
                *value += jy * gaussian(&inverse, column as f64 - x, row as f64 - y);
            });
        }
        image
    }

    /// Noise of standard deviation `sigma` whose correlation is the beam: white noise seen with a Gaussian of half its
    /// covariance.
    pub fn noise(&self, sigma: f64, seed: u64) -> Array2<f64> {
        let inverse = (self.beam_px() / 2.0).try_inverse().unwrap();
        let reach = 12i64;
        let stamp: Vec<(i64, i64, f64)> = (-reach..=reach)
            .flat_map(|y| (-reach..=reach).map(move |x| (x, y)))
            .map(|(x, y)| (x, y, gaussian(&inverse, x as f64, y as f64)))
            .filter(|entry| entry.2 > 1e-5)
            .collect();
        let norm = sigma / stamp.iter().map(|entry| entry.2 * entry.2).sum::<f64>().sqrt();
        let mut random = ChaCha8Rng::seed_from_u64(seed);
        let (width, height) = (self.size[0] + 2 * reach as usize, self.size[1] + 2 * reach as usize);
        let white: Array2<f64> = Array2::from_shape_fn((height, width), |_| StandardNormal.sample(&mut random));
        Array2::from_shape_fn((self.size[1], self.size[0]), |(y, x)| {
            let at = |dx: i64, dy: i64| white[[(y as i64 + reach + dy) as usize, (x as i64 + reach + dx) as usize]];
            norm * stamp.iter().map(|&(dx, dy, weight)| weight * at(dx, dy)).sum::<f64>()
        })
    }
}

pub fn gaussian(inverse: &Matrix2<f64>, x: f64, y: f64) -> f64 {
    let at = Vector2::new(x, y);
    (-0.5 * at.dot(&(inverse * at))).exp()
}

fn at(path: PathBuf) -> At<PathBuf> {
    At { value: path, line: 1 }
}

/// An entry as the fields file would give it.
pub fn entry(image: PathBuf, depth: Depth) -> FieldEntry {
    FieldEntry { line: 1, key: "field".into(), image: at(image), depth }
}

pub fn weight(path: PathBuf) -> Depth {
    Depth::Weight(at(path))
}

pub fn noise(path: PathBuf) -> Depth {
    Depth::Noise(at(path))
}
