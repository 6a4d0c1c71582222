//! Certifies randomness from an untrusted prepare-and-measure rig whose carrier is almost d-dimensional.

#![deny(unsafe_code)]

pub mod bound;
pub mod certificate;
pub mod certify;
pub mod counts;
pub mod entropy;
pub mod exact;
pub mod fault;
pub mod leakage;
pub mod relaxation;
pub mod request;
pub mod scenario;
pub mod solver;
pub mod statistics;
pub mod verify;
pub mod witness;
