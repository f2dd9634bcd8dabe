//! evensky
pub mod beam;
pub mod cli;
pub mod fits;
pub mod observation;
pub mod response;
pub mod run;
pub mod sky;
