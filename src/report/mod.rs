//! Everything a person or another program reads: pictures, FITS products, `run.json`, the report page and the closing
//! summary.
//!
//! Nothing here computes a result; it shows what [`RunRecord`] and the images hold. Every file appears whole or not
//! at all ([`write_whole`]).

mod deconvolution;
mod page;
pub mod picture;
mod products;
mod record;
mod summary;
mod whole_file;

pub use deconvolution::DeconvolutionFigures;
pub use page::{PageError, PagePicture, render_page, write_page};
pub use products::{ProductError, ProductHeader, write_image_product};
pub use record::{
    Accuracy, BeamFigures, ImageFigures, InputFile, KernelFigures, Noise, PointingRecord, Product, RunRecord,
    StageTime, StationGroup, Versions,
};
pub use summary::{summary_json, summary_sentence, summary_text};
pub use whole_file::{WriteError, write_json, write_whole};
