//! The files of `image`: FITS images and their pictures.

use super::image_deconvolve::Deconvolved;
use crate::imaging::beam_fit::FittedBeam;
use crate::imaging::deconvolve::write_components;
use crate::report::picture::{PictureError, PictureSpec, paint, write_picture};
use crate::report::{
    PagePicture, Product, ProductError, ProductHeader, WriteError, write_image_product, write_whole,
};
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
    /// What deconvolution made of it.
    pub deconvolved: Option<Deconvolved>,
    /// Header of the dirty image; the others differ in unit and description.
    pub header: ProductHeader,
}

/// What was written.
#[derive(Default)]
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
    #[error(transparent)]
    Table(#[from] WriteError),
}

/// One image and how it is shown.
pub(super) struct Sheet<'a> {
    pub name: &'static str,
    pub image: &'a Array2<f64>,
    pub bunit: &'static str,
    /// The unit as a picture shows it.
    pub unit: &'static str,
    pub quantity: &'static str,
    pub what: &'static str,
    pub caption: &'static str,
    /// The beam that the image is seen with.
    pub beam: Option<FittedBeam>,
}

impl Images {
    /// Writes every image as FITS and as a picture, each whole or not at all.
    pub(super) fn write(&self, folder: &Path) -> Result<Written, FilesError> {
        let dirty = [
            Sheet {
                name: "dirty",
                image: &self.dirty,
                bunit: "Jy/beam",
                unit: "Jy/beam",
                quantity: "Dirty image, flat sky",
                what: "dirty mosaic on the flat sky, N/W",
                caption: "Flux density of an isolated point source at its pixel, corrected for the primary beams of all \
                          stations. Not deconvolved: side lobes of every source are still there.",
                beam: self.header.beam,
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
                beam: None,
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
                beam: self.header.beam,
            },
        ];
        let mut written = Written::default();
        let deconvolved = self.deconvolved.iter().flat_map(Deconvolved::sheets);
        for sheet in deconvolved.chain(dirty) {
            write_sheet(&sheet, &self.geometry, &self.header, folder, &mut written)?;
        }
        if let Some(deconvolved) = &self.deconvolved {
            let file = "components.csv";
            write_whole(&folder.join(file), |out| write_components(out, &deconvolved.components))?;
            let what = "components of the model, in a form that start_from and a simulation read".to_owned();
            written.products.push(Product { path: file.to_owned(), what });
        }
        Ok(written)
    }
}

/// Writes one image as FITS and as a picture, and notes both.
pub(super) fn write_sheet(
    sheet: &Sheet,
    geometry: &ImageGeometry,
    header: &ProductHeader,
    folder: &Path,
    written: &mut Written,
) -> Result<(), FilesError> {
    let about = ProductHeader {
        bunit: sheet.bunit.to_owned(),
        description: sheet.what.to_owned(),
        beam: sheet.beam,
        ..header.clone()
    };
    let file = format!("{}.fits", sheet.name);
    write_image_product(&folder.join(&file), sheet.image.view(), geometry, &about)?;
    written.products.push(Product { path: file, what: sheet.what.to_owned() });
    let spec = PictureSpec {
        title: &header.object,
        quantity: sheet.quantity,
        unit: sheet.unit,
        geometry: *geometry,
        beam: sheet.beam,
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
    Ok(())
}
