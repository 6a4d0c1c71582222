//! The battery: all the evidence that the numbers are right, and its summary. `cargo bench --bench battery` is the long form.
//!
//! - *Sandwich.* Bounds at every level against explicit attacks on generated behaviours: no bound below an attack, levels in order.
//! - *Known values.* The same on behaviours whose guessing probability is known from elsewhere.
//! - *Reference.* Bounds against those of the same relaxation in other people's software.
//! - *Second implementation.* Records of every kind, and single mutations of them, before both implementations of the check.
//!
//! Ends with a failure if there is a single violation.

#[path = "../reference/codes.rs"]
mod codes;
#[path = "../reference/known.rs"]
mod known;
#[path = "../reference/relaxation.rs"]
mod relaxation;
mod sandwich;
#[path = "../reference/second.rs"]
mod second;

use std::{fmt::Display, process::ExitCode, time::Instant};

use clap::Parser;

use crate::{
    known::known,
    relaxation::{Distance, distance},
    sandwich::Sandwich,
    second::{Agreement, agreement},
};

#[derive(Parser)]
#[command(about = "Holds bounds, attacks, reference values and both implementations of the check against each other")]
struct CommandLine {
    #[command(flatten)]
    sandwich: Sandwich,
    /// Single mutations of records.
    #[arg(long, default_value_t = 10_000)]
    mutations: usize,
    /// Which mutations.
    #[arg(long, default_value_t = 1)]
    seed: u64,
}

fn main() -> ExitCode {
    // Cargo puts its own flag among the arguments.
    let CommandLine { sandwich, mutations, seed } = CommandLine::parse_from(std::env::args_os().filter(|argument| argument != "--bench"));
    let start = Instant::now();
    println!("-- attacks and bounds on generated behaviours");
    let (cases, spread) = sandwich.run();
    println!("-- attacks and bounds on behaviours with known values");
    let known: Vec<known::Outcome> = known().iter().map(known::Known::outcome).collect();
    println!("-- bounds of the reference");
    let Distance { cases: references, looser, tighter, worst_rounding_cost, violations: of_reference } = distance();
    println!("-- second implementation");
    let agreement = agreement(mutations, seed);
    print!("{agreement}");
    let Agreement { records, rejected, violations: of_second, .. } = agreement;

    let largest = |values: &mut dyn Iterator<Item = f64>| values.fold(0.0, f64::max);
    let known_gap = largest(&mut known.iter().map(|outcome| outcome.bound - outcome.attack));
    let known_cost = largest(&mut known.iter().map(|outcome| outcome.rounding_cost));
    let rounding = [cases.worst_rounding_cost, known_cost, worst_rounding_cost].into_iter().fold(0.0, f64::max);
    let bounds: usize = cases.gaps.iter().map(|(_, gaps)| gaps.len()).sum();
    print!("\n{cases}");
    println!("\n== battery, {:.0} s", start.elapsed().as_secs_f64());
    line(
        "cases",
        format!("{} behaviours ({spread}) with {bounds} bounds, {} known, {references} of the reference", cases.cases, known.len()),
    );
    line("worst gap, bound above attack", format!("{:.1e} generated, {known_gap:.1e} known", cases.worst_gap));
    line("worst loss by the exact check", format!("{rounding:.1e}"));
    line("against the reference", format!("looser by {looser:.1e} at most, tighter by {tighter:.1e} at most"));
    line("mutations rejected by both", format!("{rejected} of {mutations}, of {records} records"));
    let mut violations = cases.violations;
    violations.extend(known.into_iter().flat_map(|outcome| outcome.violations));
    violations.extend(of_reference);
    violations.extend(of_second);
    line("violations", violations.len());
    violations.iter().for_each(|violation| println!("violation: {violation}"));
    if violations.is_empty() { ExitCode::SUCCESS } else { ExitCode::FAILURE }
}

fn line(what: &str, value: impl Display) {
    println!("{what:30} {value}");
}
