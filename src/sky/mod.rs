//! Directions, projections, image geometry and component models: the ground floor, importing nothing of ours.
//!
//! Angles are radians unless a name says otherwise. Directions are ICRS. Images are orthographic (FITS `SIN`)
//! about their centre: `l` points East, `m` North, `n = sqrt(1 - l² - m²)`. Images of others may have any zenithal
//! projection ([`CelestialWcs`]).

mod catalogue;
mod component;
mod direction;
mod geometry;
mod wcs;

pub use catalogue::{CatalogueError, read_components};
pub use component::Component;
pub use direction::{Direction, TangentFrame};
pub use geometry::{GeometryError, ImageGeometry};
pub use wcs::{CelestialWcs, Zenithal};
