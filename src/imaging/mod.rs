//! From visibilities to images.

pub mod beam_fit;
