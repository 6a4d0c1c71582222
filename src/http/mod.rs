//! The service over HTTP: extract, one call to the service, respond. Knows no SQL.

mod batches;
mod certifications;
mod commitments;
mod condition;
mod health;
mod intake;
mod leakage;
mod ledger;
mod negotiation;
pub mod openapi;
pub mod problem;
mod rigs;
mod router;
pub mod server;
mod wire;
mod yields;
