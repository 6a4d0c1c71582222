//! The `bitassay` command.

mod cli;

fn main() -> std::process::ExitCode {
    cli::run()
}
