//! Certifies randomness from an untrusted prepare-and-measure rig whose carrier is almost d-dimensional.

#![deny(unsafe_code)]

pub mod counts;
pub mod fault;
pub mod relaxation;
pub mod scenario;
pub mod solver;
