//! `bitassay openapi`

use std::{io::Write, process::ExitCode};

use clap::Args;

use bitassay::http::openapi::document;

/// Print the description of the HTTP interface (OpenAPI 3.1)
///
/// The repository keeps it in `api/openapi.json`; after a change to the interface, write it anew:
/// `bitassay openapi > api/openapi.json`.
#[derive(Args)]
pub struct Openapi {}

impl Openapi {
    pub fn run(self) -> anyhow::Result<ExitCode> {
        write!(std::io::stdout(), "{}", document()?)?;
        Ok(ExitCode::SUCCESS)
    }
}
