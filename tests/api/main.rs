//! The real server on a free port, with a database file of its own. Modules follow the paths.

mod access;
mod bad_requests;
mod batches;
mod certifications;
mod client;
mod command_line;
mod commitments;
mod connections;
mod documents;
mod examples;
mod forecasts;
mod health;
mod kept;
mod leakage;
mod ledger;
mod measurements;
mod objections;
mod openapi;
mod rigs;
mod server;
mod settings;
mod tokens;
mod yields;
