//! `bitassay verify`

use std::{
    fs::File,
    io::{BufRead, BufReader, Read},
    path::{Path, PathBuf},
    process::ExitCode,
};

use anyhow::{Context, bail};
use bitassay::{
    bundle::Bundle,
    ledger::{
        checkpoint::Verifier,
        export::{Findings, Signed, is_export, verify, verify_standing},
    },
};
use clap::Args;
use serde_json::{Value, json};

use super::document;

/// Re-check an exported record and its witnesses, or a whole ledger, offline and without a solver
///
/// FILE is a bundle, an object with the members `record` and `witnesses`: what `certify --bundle` prints, or what the service answers at
/// `/v1/certifications/ID/bundle`, which also proves where the record stands in the ledger. A record from the service and the answer of
/// its `/witness` may also be given as two files. Or FILE is what `export` prints. Every witness is confirmed in exact arithmetic, and every
/// figure of each record is computed again from the counts and the witnesses; the tree is computed again from the entries.
///
/// Give the ledger's public key with --key, and have it from somewhere else than the file: without it, the checkpoint may be anyone's.
///
/// Exit status: 0 verified; 3 not verified, with each discrepancy on a line of standard error; 2 bad input.
#[derive(Args)]
pub struct Verify {
    /// A bundle, an export, or a record if WITNESSES is given; `-` reads standard input
    file: PathBuf,

    /// Witnesses as the service hands them out
    witnesses: Option<PathBuf>,

    /// Public key of the ledger, as `/v1/ledger/key` has it, or a file that holds it
    #[arg(long, value_name = "KEY")]
    key: Option<String>,
}

impl Verify {
    pub fn run(self) -> anyhow::Result<ExitCode> {
        let key = self.key.as_deref().map(key).transpose()?;
        let named = || self.file.display().to_string();
        let mut input: Box<dyn BufRead> = match self.file.as_path() {
            file if file == Path::new("-") => Box::new(BufReader::new(std::io::stdin())),
            file => Box::new(BufReader::new(File::open(file).with_context(|| format!("{} cannot be read", file.display()))?)),
        };
        let mut text = Vec::new();
        input.read_until(b'\n', &mut text).with_context(named)?;
        if self.witnesses.is_none() && is_export(&text) {
            return report_ledger(&verify(&text, input, key.as_ref()).with_context(named)?);
        }
        input.read_to_end(&mut text).with_context(named)?;
        let bundle = match &self.witnesses {
            Some(file) => Bundle::join(&text, &document::read(file)?),
            None => Bundle::read(&text),
        };
        let bundle = bundle.with_context(named)?;
        if key.is_some() && bundle.ledger.is_none() {
            bail!("{}: there is no checkpoint in it that the key could have signed", named());
        }
        let standing = bundle.ledger.as_ref().map(|standing| verify_standing(&bundle.record, standing, key.as_ref()));
        let mut discrepancies: Vec<String> = bundle.verify().err().unwrap_or_default().iter().map(ToString::to_string).collect();
        let mut report = json!({ "verified": false, "witnesses": bundle.witnesses.keys().collect::<Vec<_>>() });
        if let Some(Findings { checkpoint, discrepancies: of_standing, .. }) = &standing {
            discrepancies.extend(of_standing.iter().cloned());
            report["checkpoint"] = json!(checkpoint);
        }
        let checkpoint = standing.as_ref().and_then(|findings| findings.checkpoint.as_ref());
        conclude(
            report,
            &discrepancies,
            checkpoint,
            "every figure follows from the counts and the witnesses, under the assumptions listed in the record",
        )
    }
}

fn report_ledger(findings: &Findings) -> anyhow::Result<ExitCode> {
    let Findings { entries, certifications, root, checkpoint, discrepancies } = findings;
    let report = json!({ "verified": false, "entries": entries, "certifications": certifications, "root": root, "checkpoint": checkpoint });
    let signed = checkpoint.as_ref().map_or(0, |checkpoint| checkpoint.size);
    let words = format!(
        "{entries} entries, the first {signed} of them signed; every figure of {certifications} records follows from their counts and witnesses, under \
         the assumptions listed in them"
    );
    conclude(report, discrepancies, checkpoint.as_ref(), &words)
}

fn conclude(mut report: Value, discrepancies: &[String], checkpoint: Option<&Signed>, words: &str) -> anyhow::Result<ExitCode> {
    for discrepancy in discrepancies {
        eprintln!("not verified: {discrepancy}");
    }
    let verified = discrepancies.is_empty();
    report["verified"] = verified.into();
    report["discrepancies"] = json!(discrepancies);
    document::print(&report)?;
    if verified {
        eprintln!("verified: {words}");
        if checkpoint.is_some_and(|checkpoint| !checkpoint.signature_checked) {
            eprintln!("the checkpoint's signature was not checked: give the ledger's public key with --key");
        }
    }
    Ok(if verified { ExitCode::SUCCESS } else { ExitCode::from(3) })
}

/// A key, or a file that holds one.
fn key(text: &str) -> anyhow::Result<Verifier> {
    if let Ok(key) = text.parse() {
        return Ok(key);
    }
    let bytes = document::read(Path::new(text)).with_context(|| format!("--key: {text} is neither a key nor a file with one"))?;
    String::from_utf8_lossy(&bytes).trim().parse().with_context(|| format!("--key: {text}"))
}
