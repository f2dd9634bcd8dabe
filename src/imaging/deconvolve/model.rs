//! The model sky: flux on pixel centres, and point sources anywhere.

use crate::sky::{Component, Direction, ImageGeometry};
use ndarray::Array2;
use std::io::Write;

/// A component this near to a pixel's centre, in pixels, is on it. (The phase error on the longest baseline of an image
/// of two pixels a fringe is π times as many radians.)
const ON_A_PIXEL: f64 = 1e-5;

/// Flux densities on pixel centres, all of one spectrum, and point sources at any place with spectra of their own.
#[derive(Debug, Clone, PartialEq)]
pub struct Model {
    /// Jy/pixel, `[y][x]`.
    pub pixels: Array2<f64>,
    /// Point sources.
    pub points: Vec<Component>,
    /// Further terms of the pixels' spectra, I₁, I₂ … of [`super::spectral`], Jy/pixel; none where all have one spectrum.
    pub terms: Vec<Array2<f64>>,
}

impl Model {
    /// No sources.
    pub fn empty(geometry: &ImageGeometry) -> Model {
        Model { pixels: Array2::zeros((geometry.height, geometry.width)), points: Vec::new(), terms: Vec::new() }
    }

    /// Components sorted onto pixels: those on the centre of a pixel of the image whose spectrum is the common one.
    pub fn from_components(
        sky: Vec<Component>,
        geometry: &ImageGeometry,
        reference_hz: f64,
        spectral_index: f64,
    ) -> Model {
        let mut model = Model::empty(geometry);
        for component in sky {
            let place = geometry.pixel_of(component.direction).filter(|_| {
                let flat = component.spectral_index == 0.0 && spectral_index == 0.0;
                flat || (component.spectral_index - spectral_index).abs() < 1e-9
            });
            let pixel = place.and_then(|(x, y)| {
                let near = (x - x.round()).abs() < ON_A_PIXEL && (y - y.round()).abs() < ON_A_PIXEL;
                let inside =
                    x > -0.5 && y > -0.5 && x < geometry.width as f64 - 0.5 && y < geometry.height as f64 - 0.5;
                (near && inside).then_some([y.round() as usize, x.round() as usize])
            });
            match pixel {
                Some(pixel) => model.pixels[pixel] += component.flux_at(reference_hz),
                None => model.points.push(component),
            }
        }
        model
    }

    /// All flux on pixels as components without names.
    pub fn pixel_components(
        &self,
        geometry: &ImageGeometry,
        reference_hz: f64,
        spectral_index: f64,
    ) -> Vec<Component> {
        on_pixels(&self.pixels, geometry, reference_hz, spectral_index)
    }

    /// The further terms as components.
    pub fn term_components(
        &self,
        geometry: &ImageGeometry,
        reference_hz: f64,
        spectral_index: f64,
    ) -> Vec<Vec<Component>> {
        self.terms.iter().map(|term| on_pixels(term, geometry, reference_hz, spectral_index)).collect()
    }

    /// Flux density of everything at a frequency, Jy.
    pub fn flux_at(&self, hz: f64) -> f64 {
        self.pixels.sum() + self.points.iter().map(|point| point.flux_at(hz)).sum::<f64>()
    }

    /// The model on pixels, Jy/pixel: each point source on the pixel it is nearest to, those beyond the image left out.
    pub fn image(&self, geometry: &ImageGeometry, hz: f64) -> Array2<f64> {
        let mut image = self.pixels.clone();
        for point in &self.points {
            if let Some((x, y)) = geometry.pixel_of(point.direction)
                && let Some(value) = image.get_mut([y.round() as usize, x.round() as usize])
                && x > -0.5
                && y > -0.5
            {
                *value += point.flux_at(hz);
            }
        }
        image
    }
}

fn on_pixels(
    pixels: &Array2<f64>,
    geometry: &ImageGeometry,
    reference_hz: f64,
    spectral_index: f64,
) -> Vec<Component> {
    let filled = pixels.indexed_iter().filter(|(_, flux)| **flux != 0.0);
    filled
        .map(|((y, x), &flux_jy)| Component {
            name: String::new(),
            direction: geometry.direction_of(x as f64, y as f64).unwrap_or(geometry.centre),
            flux_jy,
            reference_hz,
            spectral_index,
        })
        .collect()
}

/// Writes components as CSV with the columns that [`crate::sky::read_components`] reads.
///
/// # Errors
/// When the writer fails.
pub fn write_components(out: &mut dyn Write, sky: &[Component]) -> std::io::Result<()> {
    let mut table = csv::Writer::from_writer(out);
    table.write_record(["name", "ra_deg", "dec_deg", "flux_jy", "reference_hz", "spectral_index"])?;
    for component in sky {
        let Direction { ra, dec } = component.direction;
        let number = |value: f64| format!("{value:?}");
        table.write_record([
            component.name.clone(),
            // fourteen digits: below 1e-10 of a pixel of any image
            format!("{:.12}", ra.to_degrees().rem_euclid(360.0)),
            format!("{:.12}", dec.to_degrees()),
            number(component.flux_jy),
            number(component.reference_hz),
            number(component.spectral_index),
        ])?;
    }
    table.flush()
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::sky::read_components;

    /// What is written comes back: pixels to pixels, points to points.
    #[test]
    fn components_survive_a_file() {
        let centre = Direction::from_deg(359.99, -60.0);
        let geometry = ImageGeometry::new(centre, 300, 200, 1e-4).unwrap();
        let mut model = Model::empty(&geometry);
        model.pixels[[0, 0]] = 1.0 / 3.0;
        model.pixels[[199, 299]] = -2e-7;
        model.pixels[[100, 150]] = 4.5;
        model.points.push(Component {
            name: "P1".into(),
            direction: geometry.direction_of(10.25, 20.5).unwrap(),
            flux_jy: 0.7,
            reference_hz: 1.35e9,
            spectral_index: -0.8,
        });
        let mut sky = model.points.clone();
        sky.extend(model.pixel_components(&geometry, 1.35e9, 0.0));
        let file = tempfile::NamedTempFile::new().unwrap();
        write_components(&mut file.as_file(), &sky).unwrap();
        let back = Model::from_components(read_components(file.path()).unwrap(), &geometry, 1.35e9, 0.0);
        assert_eq!(back.pixels, model.pixels);
        assert_eq!(back.points.len(), 1);
        assert!(back.points[0].direction.separation(model.points[0].direction) < 1e-13);
        assert_eq!(back.points[0].flux_jy, 0.7);
        assert!((back.flux_at(1.35e9) - model.flux_at(1.35e9)).abs() < 1e-15);
        let image = model.image(&geometry, 1.35e9);
        assert!(image[[21, 10]] == 0.7 || image[[20, 10]] == 0.7, "the nearest pixel");
    }

    /// A spectrum of its own, a place between pixels or beyond the image: a point, not a pixel.
    #[test]
    fn what_is_not_on_a_pixel_stays_a_point() {
        let geometry = ImageGeometry::new(Direction::from_deg(10.0, 20.0), 20, 20, 1e-4).unwrap();
        let at = |x: f64, y: f64, spectral_index: f64| Component {
            name: String::new(),
            direction: geometry.direction_of(x, y).unwrap(),
            flux_jy: 1.0,
            reference_hz: 1e9,
            spectral_index,
        };
        let sky =
            vec![at(3.0, 4.0, -0.7), at(3.4, 4.0, 0.0), at(25.0, 4.0, 0.0), at(-1.0, 4.0, 0.0), at(3.0, 4.0, 0.0)];
        let model = Model::from_components(sky, &geometry, 1e9, 0.0);
        assert_eq!((model.points.len(), model.pixels.sum()), (4, 1.0));
        // points beyond the image are not in its picture
        assert_eq!(model.image(&geometry, 1e9).sum(), 3.0);
    }
}
