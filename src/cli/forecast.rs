//! `bitassay forecast`

use std::{
    io::{IsTerminal, Write},
    path::PathBuf,
    process::ExitCode,
};

use anyhow::Context;
use bitassay::{
    fault::parse_object,
    forecast::{Forecast as Outcome, ForecastDocument, ForecastRequest, Progress, csv, forecast, picture, table},
};
use clap::{Args, ValueEnum};

use super::document;

/// Compute what would be certified over leakage, visibility or rounds
///
/// FILE is a JSON document with the members `scenario`, `behaviour` (or the `counts` of an earlier batch), `rounds` (a list of round models), `sweep`,
/// and optionally `entropy`, `total_rounds`, `setting_distribution`, `visibility`, `failure`, `level`, `loss`, `thresholds`, `wanted_bits`, `bracket`
/// and `attacks`; `-` reads standard input. For example:
///
///   "sweep": { "leakage": { "from": 1e-5, "to": 0.1, "points": 60 } }, "thresholds": { "leakage": 0.01 }
///
/// Neighbouring points share checked witnesses where that costs no more than `loss` bits per target round. The forecast goes to standard output. It is
/// about data that nobody has seen: no bits may be released on it.
///
/// Exit status: 0; 2 bad input.
#[derive(Args)]
#[command(verbatim_doc_comment)]
pub struct Forecast {
    /// What is to be forecast
    file: PathBuf,

    /// How the forecast is printed; by default a table on a terminal, and JSON elsewhere
    #[arg(long, value_enum)]
    format: Option<Format>,

    /// Write a picture of it to this file as well, in SVG
    #[arg(long, value_name = "FILE")]
    picture: Option<PathBuf>,
}

#[derive(Clone, Copy, ValueEnum)]
enum Format {
    Table,
    Json,
    Csv,
    Svg,
}

impl Forecast {
    pub fn run(self) -> anyhow::Result<ExitCode> {
        let text = document::read(&self.file)?;
        let named = || self.file.display().to_string();
        let request = parse_object::<ForecastDocument>(&text).and_then(ForecastRequest::try_from).with_context(named)?;
        let outcome = watched(&request)?;
        if let Some(file) = &self.picture {
            std::fs::write(file, picture(&outcome)?).with_context(|| format!("{} cannot be written", file.display()))?;
        }
        let terminal = std::io::stdout().is_terminal();
        let text = match self.format.unwrap_or(if terminal { Format::Table } else { Format::Json }) {
            Format::Table => table(&outcome),
            Format::Json => {
                document::print(&outcome)?;
                return Ok(ExitCode::SUCCESS);
            }
            Format::Csv => csv(&outcome)?,
            Format::Svg => picture(&outcome)?,
        };
        std::io::stdout().lock().write_all(text.as_bytes()).context("the forecast cannot be written")?;
        Ok(ExitCode::SUCCESS)
    }
}

/// Computes a forecast, with a line of progress on standard error if that is a terminal.
fn watched(request: &ForecastRequest) -> anyhow::Result<Outcome> {
    let mut errors = std::io::stderr();
    if !errors.is_terminal() {
        return Ok(forecast(request, |_| {}));
    }
    let outcome = forecast(request, |Progress { kind, settled, points, solves, attacks }| {
        let words = kind.in_words(bitassay::forecast::Swept::Rounds, None);
        // Progress that cannot be shown is no reason to stop.
        let _ = write!(errors, "\r\x1b[K{words}: {settled} of {points} points settled, {solves} solves so far, {attacks} attacks");
        let _ = errors.flush();
    });
    write!(std::io::stderr(), "\r\x1b[K").context("standard error is gone")?;
    Ok(outcome)
}
