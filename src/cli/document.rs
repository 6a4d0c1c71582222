//! Documents on the command line: read from a file or from standard input, written to standard output.

use std::{
    io::{Read, Write},
    path::Path,
};

use anyhow::Context;
use serde::Serialize;

/// The bytes of a file, or of standard input for `-`.
pub fn read(file: &Path) -> anyhow::Result<Vec<u8>> {
    let mut bytes = Vec::new();
    if file == Path::new("-") {
        std::io::stdin().read_to_end(&mut bytes).context("standard input cannot be read")?;
        return Ok(bytes);
    }
    std::fs::read(file).with_context(|| format!("{} cannot be read", file.display()))
}

/// Prints a document as indented JSON.
pub fn print(document: &impl Serialize) -> anyhow::Result<()> {
    let mut output = std::io::stdout().lock();
    serde_json::to_writer_pretty(&mut output, document).context("the document cannot be written")?;
    writeln!(output).context("the document cannot be written")
}
