//! Certifies randomness from an untrusted prepare-and-measure rig whose carrier is almost d-dimensional.
//!
//! A source prepares one of X states, a receiver measures in one of Y ways, an outcome b is recorded. Neither device is trusted; admitted is
//! only that each state has at most a weight ε, the leakage, outside some d-dimensional space. From counts and the leakage follows
//! an upper bound on the probability that an adversary guesses an outcome, and from that a number of bits that may be extracted.
//!
//! What flows where:
//!
//! ```text
//! request ─ counts ─┬─ statistics ──┐
//!   scenario        │  (a region)   ├─ bound ─ relaxation ─ solver ─ witness (rounded, then checked exactly)
//!                   └───────────────┘                                   │
//!                        certificate ── certify ── entropy (bits) ◄─────┘
//!                             │
//!        verify (no solver) ──┤
//!                             └─ record ─ ledger ─ service ─ http
//! ```
//!
//! - [`request`], [`scenario`] and [`counts`] hold validated input; [`fault`] says what is wrong with a document, and where.
//! - [`statistics`] turns counts into a region that holds the true probabilities with a stated confidence.
//! - [`relaxation`] turns a question about a scenario into a semidefinite programme; [`solver`] answers it in floating point, and is
//!   not believed; [`witness`] rounds the answer to integers and proves a bound from them in exact arithmetic. [`bound`] strings these
//!   together.
//! - [`attack`] looks for explicit models from below: what is between an attack and a bound is what the bound may give away.
//! - [`entropy`] turns a bound into whole bits, [`certify`] draws up the [`certificate`], and [`verify`] confirms one without a
//!   solver; a [`bundle`] is what is needed for that.
//! - [`forecast`] draws up the same accounts for behaviours that are expected, over leakage, visibility or rounds.
//! - With the feature `service`, on by default: profiles of rigs, an append-only ledger in SQLite, and HTTP.
//!
//! From counts to bits, and the same figures confirmed without a solver:
//!
//! ```
//! use bitassay::{certify::certify, fault, request::{Request, RequestDocument}, verify::verify};
//!
//! let document = r#"{
//!     "scenario": { "preparations": 2, "measurements": 1, "outcomes": 2, "carrier_dimension": 1,
//!                   "leakage": 0.1, "leakage_holds": "on-average", "targets": [[0, 0]] },
//!     "counts": [[[795000, 205000]], [[205000, 795000]]],
//!     "rounds": "independent",
//!     "failure": { "estimation": 1e-10, "hashing": 1e-10 }
//! }"#;
//! let request = Request::try_from(fault::parse::<RequestDocument>(document.as_bytes())?)?;
//! let certification = certify(&request);
//! assert!(certification.certificate.certified_bits > 100_000);
//! assert_eq!(verify(&certification.certificate, None, &certification.witnesses), Ok(()));
//! # Ok::<(), fault::Fault>(())
//! ```

#![deny(unsafe_code)]

pub mod attack;

#[cfg(feature = "service")]
pub mod batch;
pub mod bound;
pub mod bundle;
pub mod certificate;
pub mod certify;
#[cfg(feature = "service")]
pub mod clock;
pub mod commitment;
#[cfg(feature = "service")]
pub mod committed;
pub mod comparison;
pub mod counts;
pub mod entropy;
pub mod exact;
pub mod fault;
pub mod forecast;
#[cfg(feature = "service")]
pub mod freshness;
#[cfg(feature = "service")]
pub mod http;
pub mod leakage;
#[cfg(feature = "service")]
pub mod ledger;
#[cfg(feature = "service")]
pub mod metrics;
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
pub mod score;
#[cfg(feature = "service")]
pub mod service;
pub mod solver;
pub mod statistics;
#[cfg(feature = "service")]
pub mod submission;
#[cfg(feature = "service")]
pub mod token;
pub mod verify;
pub mod witness;
