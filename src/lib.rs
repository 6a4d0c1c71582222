//! Certifies randomness from an untrusted prepare-and-measure rig whose carrier is almost d-dimensional.

#![deny(unsafe_code)]

#[cfg(feature = "service")]
pub mod batch;
pub mod bound;
pub mod bundle;
pub mod certificate;
pub mod certify;
#[cfg(feature = "service")]
pub mod clock;
pub mod counts;
pub mod entropy;
pub mod exact;
pub mod fault;
#[cfg(feature = "service")]
pub mod http;
#[cfg(feature = "service")]
pub mod ledger;
#[cfg(feature = "service")]
pub mod profile;
#[cfg(feature = "service")]
pub mod record;
#[cfg(feature = "service")]
pub mod refusal;
pub mod relaxation;
pub mod request;
#[cfg(feature = "service")]
pub mod rig_yield;
pub mod scenario;
#[cfg(feature = "service")]
pub mod service;
pub mod solver;
pub mod statistics;
#[cfg(feature = "service")]
pub mod submission;
pub mod verify;
pub mod witness;
