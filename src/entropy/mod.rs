//! From bounds on the guessing probability to whole bits that may be extracted.

pub mod extraction;
pub mod independent;
pub mod logarithm;
pub mod memory;
pub mod power;
