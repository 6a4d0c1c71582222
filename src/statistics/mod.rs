//! From counts to frequencies and confidence regions.

pub mod interval;
pub mod region;
