//! From counts to frequencies, confidence regions and limits, and tests of the data's quality.

pub mod chi_squared;
pub mod interval;
pub mod poisson;
pub mod quality;
pub mod region;
