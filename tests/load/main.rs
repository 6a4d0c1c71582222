//! The service under load, as a process of its own: `cargo bench --bench load -- flood` and `-- soak`.
//!
//! `flood` posts more batches that need a solve than the queue takes, and measures meanwhile how long the history and the checks take to
//! answer. `soak` uses the service evenly for minutes, and watches its memory and its file descriptors. Both print their figures, and end
//! with a failure if a figure is worse than it may be.

mod flood;
mod process;
mod soak;

use std::process::ExitCode;

use clap::{Parser, Subcommand};

#[derive(Parser)]
struct CommandLine {
    #[command(subcommand)]
    command: Command,
}

#[derive(Subcommand)]
enum Command {
    Flood(flood::Flood),
    Soak(soak::Soak),
}

fn main() -> ExitCode {
    // Cargo puts its own flag last, after the subcommand.
    let CommandLine { command } = CommandLine::parse_from(std::env::args_os().filter(|argument| argument != "--bench"));
    let well = match command {
        Command::Flood(flood) => flood.run(),
        Command::Soak(soak) => soak.run(),
    };
    if well { ExitCode::SUCCESS } else { ExitCode::FAILURE }
}
