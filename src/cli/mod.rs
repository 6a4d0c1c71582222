//! The command line: one file a command.

mod attack;
mod backup;
mod certify;
mod compare;
mod demo;
mod document;
mod export;
mod forecast;
mod health;
mod leakage;
mod openapi;
mod serve;
mod settings;
mod token;
mod verify;

use std::process::ExitCode;

use clap::{Parser, Subcommand};

/// Certifies randomness from an untrusted prepare-and-measure rig whose carrier is almost d-dimensional.
///
/// Exit status: 0 if all went well, 2 for bad usage or bad input, 3 if something was refused or not verified.
#[derive(Parser)]
#[command(name = "bitassay", version, max_term_width = 100)]
pub struct CommandLine {
    #[command(subcommand)]
    command: Command,
}

#[derive(Subcommand)]
enum Command {
    Serve(serve::Serve),
    #[command(subcommand)]
    Token(token::Token),
    Health(health::Health),
    Certify(certify::Certify),
    Verify(verify::Verify),
    Attack(attack::Attack),
    Leakage(leakage::Leakage),
    Compare(compare::Compare),
    Forecast(forecast::Forecast),
    Export(export::Export),
    Backup(backup::Backup),
    Demo(demo::Demo),
    Openapi(openapi::Openapi),
}

/// Reads the arguments and runs the command. What goes wrong is told in one line on standard error.
pub fn run() -> ExitCode {
    let outcome = match CommandLine::parse().command {
        Command::Serve(command) => command.run(),
        Command::Token(command) => command.run(),
        Command::Health(command) => command.run(),
        Command::Certify(command) => command.run(),
        Command::Verify(command) => command.run(),
        Command::Attack(command) => command.run(),
        Command::Leakage(command) => command.run(),
        Command::Compare(command) => command.run(),
        Command::Forecast(command) => command.run(),
        Command::Export(command) => command.run(),
        Command::Backup(command) => command.run(),
        Command::Demo(command) => command.run(),
        Command::Openapi(command) => command.run(),
    };
    outcome.unwrap_or_else(|error| {
        // Whoever reads standard output may stop when they have seen enough. Nothing is said then, and the status is the one the shell gives
        // to a process that the pipe ended: a verdict that was not read is no success.
        if error.chain().any(is_broken_pipe) {
            return ExitCode::from(141);
        }
        eprintln!("bitassay: {error:#}");
        ExitCode::from(2)
    })
}

fn is_broken_pipe(cause: &(dyn std::error::Error + 'static)) -> bool {
    let of_io = cause.downcast_ref::<std::io::Error>().map(std::io::Error::kind);
    let of_json = cause.downcast_ref::<serde_json::Error>().and_then(serde_json::Error::io_error_kind);
    of_io.or(of_json) == Some(std::io::ErrorKind::BrokenPipe)
}
