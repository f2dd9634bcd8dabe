//! From the sums of all pointings to images: flat sky, weight map, point spread function, and the check of their sums.

pub mod beam_fit;
pub mod combine;
pub mod deconvolve;
mod flat;
mod mosaic;
mod self_check;
mod side_lobes;
mod weighting;

pub use flat::{flat_noise, flat_sky, response_map};
pub use mosaic::{Mosaic, Pointing, Tally};
pub use self_check::{SelfCheck, self_check};
pub use side_lobes::{SideLobes, side_lobes};
pub use weighting::{Price, Share, Weigher, WeighingError, Weighted};
