//! Everything a person or another program reads: pictures, FITS products, `run.json`, the report page and the closing
//! summary.
//!
//! Nothing here computes a result; it shows what [`RunRecord`] and the images hold. Every file appears whole or not
//! at all ([`write_whole`]).

mod combined;
mod deconvolution;
mod measured;
mod page;
pub mod picture;
mod products;
mod record;
mod sources;
mod summary;
mod votable;
mod whole_file;

pub use combined::{CombinedField, CombinedFigures};
pub use deconvolution::DeconvolutionFigures;
pub use measured::{Measured, SourceRow};
pub use page::{PageError, PagePicture, render_page, write_page};
pub use products::{ProductError, ProductHeader, write_image_product};
pub use record::{
    Accuracy, BeamFigures, ImageFigures, InputFile, KernelFigures, Noise, PointingRecord, Product, RunRecord,
    StageTime, StationGroup, Versions, WeightingFigures,
};
pub use sources::{
    Cell, SOURCE_COLUMNS, SourceColumn, SourcesError, source_headings, write_covariance, write_source_csv,
    write_source_fits, write_source_votable,
};
pub use summary::{summary_json, summary_sentence, summary_text};
pub use votable::votable;
pub use whole_file::{WriteError, write_json, write_whole};
