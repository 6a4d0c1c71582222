//! What the program costs, in one report: `cargo bench`, or `cargo bench -- warm service` for some parts.
//!
//! The report goes to standard output as text, and to `target/bench-report.json`. Ratios compare what was measured in the same run, on the
//! same machine, by the same clock. Requirements that do not hold are marked; the exit status is 1 then.

mod batches;
mod cold;
mod cost;
mod forecast;
mod general;
mod machine;
mod memory;
mod report;
mod requests;
mod service;
mod warm;

use std::process::ExitCode;

use report::{Report, Section};

/// A part of the bench: its name, and what measures it.
type Part = (&'static str, fn() -> Section);

/// Parts run in this order.
const PARTS: [Part; 6] = [
    ("cold", cold::run),
    ("cost", cost::run),
    ("forecast", forecast::run),
    ("warm", warm::run),
    ("service", service::run),
    ("memory", memory::run),
];

fn main() -> ExitCode {
    // Cargo passes flags of its own.
    let wanted: Vec<String> = std::env::args().skip(1).filter(|argument| !argument.starts_with('-')).collect();
    if let Some(unknown) = wanted.iter().find(|name| PARTS.iter().all(|(part, _)| part != name)) {
        eprintln!("there is no part {unknown}; there are {}", PARTS.map(|(name, _)| name).join(", "));
        return ExitCode::from(2);
    }
    let mut report = Report::new();
    for (name, run) in PARTS {
        if wanted.is_empty() || wanted.iter().any(|wanted| wanted == name) {
            eprintln!("measuring: {name}");
            report.add(name, run());
        }
    }
    print!("{report}");
    report.write();
    if report.holds() { ExitCode::SUCCESS } else { ExitCode::FAILURE }
}
