//! evensky
pub mod beam;
pub mod fits;
pub mod imaging;
pub mod observation;
pub mod report;
pub mod response;
pub mod sky;
