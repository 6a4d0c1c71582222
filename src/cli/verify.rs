//! `bitassay verify`

use std::{path::PathBuf, process::ExitCode};

use anyhow::Context;
use bitassay::bundle::Bundle;
use clap::Args;
use serde_json::json;

use super::document;

/// Re-check an exported record and its witnesses, offline and without a solver
///
/// FILE is what `certify --bundle` prints: an object with the members `record` and `witnesses`. A record from the service and the answer of
/// its `/witness` may also be given as two files. Every witness is confirmed in exact arithmetic, and every figure of the record is
/// computed again from the counts and the witnesses.
///
/// Exit status: 0 verified; 3 not verified, with each discrepancy on a line of standard error; 2 bad input.
#[derive(Args)]
pub struct Verify {
    /// A bundle, or a record if WITNESSES is given; `-` reads standard input
    file: PathBuf,

    /// Witnesses as the service hands them out
    witnesses: Option<PathBuf>,
}

impl Verify {
    pub fn run(self) -> anyhow::Result<ExitCode> {
        let text = document::read(&self.file)?;
        let bundle = match &self.witnesses {
            Some(file) => Bundle::join(&text, &document::read(file)?),
            None => Bundle::read(&text),
        };
        let bundle = bundle.with_context(|| self.file.display().to_string())?;
        let discrepancies = bundle.verify().err().unwrap_or_default();
        for discrepancy in &discrepancies {
            eprintln!("not verified: {discrepancy}");
        }
        let verified = discrepancies.is_empty();
        document::print(&json!({
            "verified": verified,
            "witnesses": bundle.witnesses.keys().collect::<Vec<_>>(),
            "discrepancies": discrepancies.iter().map(ToString::to_string).collect::<Vec<_>>(),
        }))?;
        if verified {
            eprintln!("verified: every figure follows from the counts and the witnesses, under the assumptions listed in the record");
        }
        Ok(if verified { ExitCode::SUCCESS } else { ExitCode::from(3) })
    }
}
