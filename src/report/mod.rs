//! report
pub mod picture;
mod whole_file;
pub use whole_file::{WriteError, write_json, write_whole};
