//! evensky
pub mod beam;
pub mod fits;
pub mod imaging;
pub mod observation;
pub mod response;
pub mod sky;
