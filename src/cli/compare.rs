//! `bitassay compare`

use std::{
    io::{IsTerminal, Write},
    path::PathBuf,
    process::ExitCode,
};

use anyhow::Context;
use bitassay::{
    comparison::{Comparison, ComparisonDocument, Draw, Figures, Line},
    counts::MAX_ROUNDS,
    fault::parse_object,
};
use clap::Args;

use super::document;

/// Compare independent rounds with rounds that have memory, over the number of rounds and the way settings are drawn
///
/// FILE is a JSON document with the members `scenario` and `expected_behaviour`, and optionally `failure` and `level`; `-` reads standard input. The
/// table shows what would be certified if the counts were exactly the expected ones: bits per target round, and net bits per round, which are the
/// certified bits minus the random bits that choosing the settings takes. Nothing is certified here.
///
/// Exit status: 0; 2 bad input.
#[derive(Args)]
pub struct Compare {
    /// Scenario and expected behaviour
    file: PathBuf,

    /// Rounds of a batch, separated by commas
    #[arg(long, value_name = "N,…", value_delimiter = ',', value_parser = rounds, default_value = "1e5,1e6,1e7,1e8,1e9")]
    rounds: Vec<u64>,

    /// Fractions of the rounds that the target settings share, separated by commas; uniform settings are always shown
    #[arg(long, value_name = "SHARE,…", value_delimiter = ',', default_value = "0.5,0.9,0.99,0.999")]
    target_share: Vec<f64>,

    /// Print the figures as JSON
    #[arg(long)]
    json: bool,
}

/// A whole number, which may be written as 1e6.
fn rounds(text: &str) -> Result<u64, String> {
    let number: f64 = text.parse().map_err(|_| "not a number".to_owned())?;
    if number.fract() == 0.0 && (1.0..=MAX_ROUNDS as f64).contains(&number) {
        return Ok(number as u64);
    }
    Err(format!("a batch has 1 to {MAX_ROUNDS} rounds"))
}

impl Compare {
    pub fn run(self) -> anyhow::Result<ExitCode> {
        let named = || self.file.display().to_string();
        let text = document::read(&self.file)?;
        let comparison = parse_object::<ComparisonDocument>(&text).and_then(Comparison::try_from).with_context(named)?;
        let draws: Vec<Draw> =
            std::iter::once(Draw::Uniform).chain(self.target_share.iter().map(|share| Draw::TargetShare(*share))).collect();
        let shown = std::io::stderr().is_terminal();
        let progress = |done: usize, all: usize| {
            if shown {
                eprint!("\rwitness {} of {all} ", done + 1);
            }
        };
        let lines = comparison.table(&self.rounds, &draws, progress);
        if shown {
            eprintln!();
        }
        let lines = lines.with_context(named)?;
        if self.json {
            document::print(&lines)?;
        } else {
            print(&lines)?;
        }
        Ok(ExitCode::SUCCESS)
    }
}

fn print(lines: &[Line]) -> std::io::Result<()> {
    let mut out = std::io::stdout().lock();
    writeln!(
        out,
        "| rounds | target share | settings cost | independent: per target round | net per round | memory: per target round | net per round |"
    )?;
    writeln!(out, "|---|---|---|---|---|---|---|")?;
    for Line { rounds, target_share, setting_cost_per_round, independent, memory } in lines {
        let figures = |figures: &Figures| format!("{:.3} | {:+.4}", figures.bits_per_target_round, figures.net_bits_per_round);
        writeln!(
            out,
            "| {:.0e} | {target_share:.4} | {setting_cost_per_round:.4} | {} | {} |",
            *rounds as f64,
            figures(independent),
            figures(memory)
        )?;
    }
    writeln!(out, "\nBits; a net figure below zero takes more random bits for the settings than it yields.")
}
