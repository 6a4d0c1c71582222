//! `bitassay leakage`

use std::{path::PathBuf, process::ExitCode};

use anyhow::Context;
use bitassay::{
    fault::parse_object,
    leakage::budget::{Budget, BudgetDocument},
};
use clap::Args;

use super::document;

/// Compute a leakage budget from what was measured
///
/// FILE is a JSON document with the members `carrier_dimension` and `contributions`, each with a `source` (coherent, thermal, g2, coincidence,
/// heralded, vacuum, overlap, side-mode) and stated values or counts; `-` reads standard input. The report goes to standard output: the sum, to be
/// declared as a rig's leakage, each contribution's share, the failure probability of limits from counts, and what all of it rests on.
///
/// Exit status: 0; 2 bad input.
#[derive(Args)]
pub struct Leakage {
    /// The budget
    file: PathBuf,
}

impl Leakage {
    pub fn run(self) -> anyhow::Result<ExitCode> {
        let text = document::read(&self.file)?;
        let budget = parse_object::<BudgetDocument>(&text).and_then(Budget::try_from).with_context(|| self.file.display().to_string())?;
        document::print(&budget.report())?;
        eprintln!("leakage at most {}, failure probability {}", budget.leakage(), budget.failure());
        Ok(ExitCode::SUCCESS)
    }
}
