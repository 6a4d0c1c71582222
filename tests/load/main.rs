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
    /// Cargo says this to whatever it runs as a benchmark
    #[arg(long, hide = true)]
    bench: bool,

    #[command(subcommand)]
    command: Command,
}

#[derive(Subcommand)]
enum Command {
    Flood(flood::Flood),
    Soak(soak::Soak),
}

fn main() -> ExitCode {
    let CommandLine { command, .. } = CommandLine::parse();
    let well = match command {
        Command::Flood(flood) => flood.run(),
        Command::Soak(soak) => soak.run(),
    };
    if well { ExitCode::SUCCESS } else { ExitCode::FAILURE }
}
