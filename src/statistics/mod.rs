//! From counts to frequencies, confidence regions and limits.

pub mod interval;
pub mod poisson;
pub mod region;
