//! Witnesses: exact proofs of bounds.

pub mod check;
mod fixed;
pub mod pool;
pub mod rounding;
// The document is the folder's one noun; the repetition is intended.
#[allow(clippy::module_inception)]
pub mod witness;
