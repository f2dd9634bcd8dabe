//! The files of `image`: FITS images and their pictures.

use crate::report::picture::{PictureError, PictureSpec, paint, write_picture};
use crate::report::{PagePicture, Product, ProductError, ProductHeader, write_image_product};
use crate::sky::ImageGeometry;
use ndarray::Array2;
use std::path::Path;
use thiserror::Error;

/// What is to be written.
pub(super) struct Images {
    pub geometry: ImageGeometry,
    pub dirty: Array2<f64>,
    pub weight: Array2<f64>,
    pub psf: Array2<f64>,
    /// Header of the dirty image; the others differ in unit and description.
    pub header: ProductHeader,
}

/// What was written.
pub(super) struct Written {
    pub products: Vec<Product>,
    pub pictures: Vec<PagePicture>,
}

/// Why a file was not written.
#[derive(Debug, Error)]
pub(super) enum FilesError {
    #[error(transparent)]
    Product(#[from] ProductError),
    #[error(transparent)]
    Picture(#[from] PictureError),
    #[error("a picture cannot be coded as PNG: {0}; this is a fault of evensky")]
    Png(#[from] png::EncodingError),
}

/// One image and how it is shown.
struct Sheet<'a> {
    name: &'static str,
    image: &'a Array2<f64>,
    bunit: &'static str,
    /// The unit as a picture shows it.
    unit: &'static str,
    quantity: &'static str,
    what: &'static str,
    caption: &'static str,
    with_beam: bool,
}

impl Images {
    /// Writes every image as FITS and as a picture, each whole or not at all.
    pub(super) fn write(&self, folder: &Path) -> Result<Written, FilesError> {
        let sheets = [
            Sheet {
                name: "dirty",
                image: &self.dirty,
                bunit: "Jy/beam",
                unit: "Jy/beam",
                quantity: "Dirty image, flat sky",
                what: "dirty mosaic on the flat sky, N/W",
                caption: "Flux density of an isolated point source at its pixel, corrected for the primary beams of all \
                          stations. Not deconvolved: side lobes of every source are still there.",
                with_beam: true,
            },
            Sheet {
                name: "weight",
                image: &self.weight,
                bunit: "beam2 Jy-2",
                unit: "(Jy/beam)^{−2}",
                quantity: "Weight: inverse variance of the flat sky",
                what: "inverse variance of the dirty image",
                caption: "One over the square root of this number is the thermal noise at a pixel, as the weights of the \
                          visibilities state it.",
                with_beam: false,
            },
            Sheet {
                name: "psf",
                image: &self.psf,
                bunit: "",
                unit: "",
                quantity: "Point spread function",
                what: "point spread function of the flat sky at its reference pixel",
                caption: "What a source of 1 Jy at the peak, and nothing else, would look like in the dirty image. \
                          Elsewhere in a mosaic it differs.",
                with_beam: true,
            },
        ];
        let mut written = Written { products: Vec::new(), pictures: Vec::new() };
        for sheet in &sheets {
            let about = ProductHeader {
                bunit: sheet.bunit.to_owned(),
                description: sheet.what.to_owned(),
                beam: if sheet.with_beam { self.header.beam } else { None },
                ..self.header.clone()
            };
            let file = format!("{}.fits", sheet.name);
            write_image_product(&folder.join(&file), sheet.image.view(), &self.geometry, &about)?;
            written.products.push(Product { path: file, what: sheet.what.to_owned() });
            let spec = PictureSpec {
                title: &self.header.object,
                quantity: sheet.quantity,
                unit: sheet.unit,
                geometry: self.geometry,
                beam: if sheet.with_beam { self.header.beam } else { None },
                scale: None,
            };
            let canvas = paint(sheet.image.view(), &spec)?;
            let file = format!("{}.png", sheet.name);
            write_picture(&folder.join(&file), &canvas)?;
            written.products.push(Product { path: file, what: format!("picture of {}.fits", sheet.name) });
            written.pictures.push(PagePicture {
                title: sheet.quantity.to_owned(),
                caption: sheet.caption.to_owned(),
                png: canvas.png()?,
            });
        }
        Ok(written)
    }
}
