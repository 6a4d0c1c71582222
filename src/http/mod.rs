//! The service over HTTP: extract, one call to the service, respond. Knows no SQL.

pub mod access;
mod batches;
mod certifications;
mod commitments;
mod condition;
pub mod cursor;
mod forecasts;
mod health;
mod intake;
mod leakage;
mod ledger;
pub mod limits;
mod measurements;
mod negotiation;
pub mod openapi;
pub mod problem;
mod rigs;
pub mod router;
pub mod server;
mod wire;
mod yields;
