//! The same bounds from a general modelling layer with general solvers, in a Python process of its own.

use std::{
    io::{BufRead, BufReader, Lines, Write},
    process::{Child, ChildStdin, ChildStdout, Command, Stdio},
};

use serde::Deserialize;
use serde_json::Value;

/// A process that answers, line by line.
pub struct General {
    process: Child,
    questions: ChildStdin,
    answers: Lines<BufReader<ChildStdout>>,
}

/// What it found.
#[derive(Debug, Deserialize)]
pub struct Solved {
    /// `None` where it ran out of time with nothing.
    pub value: Option<f64>,
    pub status: String,
    pub seconds: f64,
    /// Side of the matrix.
    pub side: usize,
    /// Whether it ended of itself, or its time had run out.
    pub ended: bool,
}

impl General {
    /// Installs what is needed, if it is not there yet, and waits until everything is imported.
    ///
    /// # Errors
    /// Why there is none, in words: for one, without Python.
    pub fn start() -> Result<Self, String> {
        let script = concat!(env!("CARGO_MANIFEST_DIR"), "/tests/bench/general/run");
        let started = Command::new(script).stdin(Stdio::piped()).stdout(Stdio::piped()).spawn();
        let mut process = started.map_err(|error| format!("{script}: {error}"))?;
        let (Some(questions), Some(output)) = (process.stdin.take(), process.stdout.take()) else { return Err("no pipes".into()) };
        let mut general = Self { process, questions, answers: BufReader::new(output).lines() };
        match general.answers.next() {
            Some(Ok(line)) if line == "\"ready\"" => Ok(general),
            _ => Err(format!("{script} does not run here; it says why above")),
        }
    }

    /// Solves a case of `tests/reference/relaxation.py` with a solver, within a number of seconds or so.
    pub fn solve(&mut self, case: &Value, solver: &str, seconds: f64) -> Result<Solved, String> {
        let mut question = case.clone();
        question["solver"] = solver.into();
        question["seconds"] = seconds.into();
        writeln!(self.questions, "{question}").map_err(|error| error.to_string())?;
        let line = self.answers.next().ok_or("it has ended")?.map_err(|error| error.to_string())?;
        serde_json::from_str(&line).map_err(|_| line)
    }
}

impl Drop for General {
    fn drop(&mut self) {
        let _ = self.process.kill();
        let _ = self.process.wait();
    }
}
