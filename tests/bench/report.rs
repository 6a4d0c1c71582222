//! Figures and requirements, as text and as JSON.

use std::fmt;

use serde::Serialize;

use crate::machine;

/// One figure.
#[derive(Debug, Serialize)]
struct Figure {
    name: String,
    value: f64,
    unit: &'static str,
}

/// A figure that has to stay on one side of a limit.
#[derive(Debug, Serialize)]
struct Requirement {
    name: String,
    value: f64,
    #[serde(skip_serializing_if = "Option::is_none")]
    at_least: Option<f64>,
    #[serde(skip_serializing_if = "Option::is_none")]
    below: Option<f64>,
    unit: &'static str,
    holds: bool,
}

/// What one part has to say.
#[derive(Debug, Default, Serialize)]
pub struct Section {
    /// How it was measured.
    notes: Vec<String>,
    figures: Vec<Figure>,
    requirements: Vec<Requirement>,
}

impl Section {
    pub fn note(&mut self, text: impl Into<String>) {
        self.notes.push(text.into());
    }

    pub fn figure(&mut self, name: impl Into<String>, value: f64, unit: &'static str) {
        self.figures.push(Figure { name: name.into(), value, unit });
    }

    pub fn at_least(&mut self, name: impl Into<String>, value: f64, limit: f64, unit: &'static str) {
        self.requirements.push(Requirement { name: name.into(), value, at_least: Some(limit), below: None, unit, holds: value >= limit });
    }

    pub fn below(&mut self, name: impl Into<String>, value: f64, limit: f64, unit: &'static str) {
        self.requirements.push(Requirement { name: name.into(), value, at_least: None, below: Some(limit), unit, holds: value < limit });
    }
}

#[derive(Debug, Serialize)]
pub struct Report {
    version: &'static str,
    processor: String,
    cores: usize,
    /// Processes that were running or waiting, on average, when the bench began: above 0, something else used the machine too.
    load: f64,
    parts: Vec<(&'static str, Section)>,
}

impl Report {
    pub fn new() -> Self {
        let version = concat!("bitassay ", env!("CARGO_PKG_VERSION"));
        Self { version, processor: machine::processor(), cores: machine::cores(), load: machine::load(), parts: vec![] }
    }

    pub fn add(&mut self, name: &'static str, section: Section) {
        self.parts.push((name, section));
    }

    pub fn holds(&self) -> bool {
        self.parts.iter().flat_map(|(_, section)| &section.requirements).all(|requirement| requirement.holds)
    }

    /// Writes the JSON form beside the build.
    pub fn write(&self) {
        let path = concat!(env!("CARGO_MANIFEST_DIR"), "/target/bench-report.json");
        let text = serde_json::to_string_pretty(self).expect("a report is plain data") + "\n";
        std::fs::write(path, text).unwrap_or_else(|error| panic!("{path}: {error}"));
        eprintln!("as JSON: {path}");
    }
}

/// A number with four digits that mean something.
fn digits(value: f64) -> String {
    let size = value.abs();
    let decimals = if size >= 1000.0 || value == 0.0 { 0 } else { (3.0 - size.log10().floor()).clamp(0.0, 9.0) as usize };
    format!("{value:.decimals$}")
}

impl fmt::Display for Report {
    fn fmt(&self, f: &mut fmt::Formatter) -> fmt::Result {
        writeln!(f, "{} on {} × {}, load {:.1} at the beginning", self.version, self.cores, self.processor, self.load)?;
        for (name, section) in &self.parts {
            writeln!(f, "\n{name}")?;
            for note in &section.notes {
                writeln!(f, "  {note}")?;
            }
            for Figure { name, value, unit } in &section.figures {
                writeln!(f, "  {name:<58} {:>12} {unit}", digits(*value))?;
            }
            for Requirement { name, value, at_least, below, unit, holds } in &section.requirements {
                let limit = match (at_least, below) {
                    (Some(limit), _) => format!("at least {}", digits(*limit)),
                    (_, Some(limit)) => format!("below {}", digits(*limit)),
                    (None, None) => String::new(),
                };
                let mark = if *holds { "holds" } else { "DOES NOT HOLD" };
                writeln!(f, "  {name:<58} {:>12} {unit}, {limit}: {mark}", digits(*value))?;
            }
        }
        Ok(())
    }
}
