//! `bitassay attack`

use std::{path::PathBuf, process::ExitCode};

use anyhow::Context;
use bitassay::{
    attack::{
        Effort,
        report::{Report, report},
    },
    fault::parse,
    request::{Request, RequestDocument},
};
use clap::Args;

use super::document;

/// Look for an explicit model with which an adversary guesses the target outcomes, and print it next to the bound
///
/// FILE is the document that `certify` reads; `-` reads standard input. The model obeys the declared leakage and reproduces the stated
/// behaviour, the frequencies (plug-in) or some behaviour in the confidence region. What it attains is recomputed from its matrices. The largest
/// guessing probability lies between the attack and the bound, so their distance is what the bound may be giving away. No bits follow
/// from an attack, and not finding a better one proves nothing.
///
/// Exit status: 0 an attack on every target was found; 3 not so, or a bound is contradicted; 2 bad input.
#[derive(Args)]
pub struct Attack {
    /// The batch, or a stated behaviour
    file: PathBuf,

    /// Most rounds of the search for each target
    #[arg(long, default_value_t = Effort::default().rounds)]
    rounds: usize,

    /// Seed of the random starts
    #[arg(long, default_value_t = Effort::default().seed)]
    seed: u64,
}

impl Attack {
    pub fn run(self) -> anyhow::Result<ExitCode> {
        let text = document::read(&self.file)?;
        let named = || self.file.display().to_string();
        let request = parse::<RequestDocument>(&text).and_then(Request::try_from).with_context(named)?;
        let effort = Effort { rounds: self.rounds, seed: self.seed, ..Effort::default() };
        let report = report(&request, effort);
        document::print(&report)?;
        let mut found = true;
        for line in in_words(&report, &mut found) {
            eprintln!("{line}");
        }
        Ok(if found { ExitCode::SUCCESS } else { ExitCode::from(3) })
    }
}

fn in_words(report: &Report, found: &mut bool) -> Vec<String> {
    if report.outside_model {
        *found = false;
        return vec!["outside the declared model: there is nothing to attack".to_owned()];
    }
    let mut lines = Vec::new();
    for target in &report.targets {
        let place = format!("preparation {}, measurement {}", target.preparation, target.measurement);
        let (Some(attack), Some(model)) = (target.attack, target.model.as_ref()) else {
            *found = false;
            lines.push(format!("{place}: no attack was found"));
            continue;
        };
        let missed =
            if model.residual > 1e-8 { format!(" (its behaviour misses the data by up to {:.1e})", model.residual) } else { String::new() };
        lines.push(match target.bound {
            Some(bound) if target.contradicted => {
                *found = false;
                format!(
                    "{place}: an attack guesses {attack:.9} and the bound says {bound:.9}: THE BOUND IS WRONG, please report this request"
                )
            }
            Some(bound) => format!(
                "{place}: an adversary guesses at least {attack:.9}{missed} and at most {bound:.9}; the bound may give away {:.1e}",
                (bound - attack).max(0.0)
            ),
            None => format!("{place}: an adversary guesses at least {attack:.9}{missed}; there is no checked bound"),
        });
    }
    lines
}
