//! `bitassay health`

use std::{process::ExitCode, time::Duration};

use anyhow::bail;
use clap::Args;

/// Ask a running service whether it is ready
///
/// For whoever restarts what does not answer, and has no other client at hand. Exit status: 0 if the service is ready, 2 if it is not
/// or does not answer; then one line on standard error says why.
#[derive(Args)]
pub struct Health {
    /// Where the service listens
    #[arg(long, value_name = "URL", env = "BITASSAY_URL", default_value = "http://127.0.0.1:8080")]
    url: String,

    /// Seconds to wait for the answer
    #[arg(long, value_name = "SECONDS", default_value_t = 3)]
    timeout: u64,
}

impl Health {
    pub fn run(self) -> anyhow::Result<ExitCode> {
        let wait = Duration::from_secs(self.timeout);
        let agent: ureq::Agent = ureq::Agent::config_builder().http_status_as_error(false).timeout_global(Some(wait)).build().into();
        let mut answer = agent.get(format!("{}/readyz", self.url.trim_end_matches('/'))).call()?;
        if answer.status() != 200 {
            bail!("{}", answer.body_mut().read_to_string()?);
        }
        Ok(ExitCode::SUCCESS)
    }
}
