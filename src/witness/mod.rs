//! Witnesses: exact proofs of bounds.

// The document is the folder's one noun; the repetition is intended.
#[allow(clippy::module_inception)]
pub mod witness;
