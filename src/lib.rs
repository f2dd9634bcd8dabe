//! evensky
pub mod beam;
pub mod cli;
pub mod fits;
pub mod imaging;
pub mod observation;
pub mod report;
pub mod response;
pub mod run;
pub mod sky;
