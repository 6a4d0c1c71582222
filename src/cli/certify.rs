//! `bitassay certify`

use std::{path::PathBuf, process::ExitCode, time::Instant};

use anyhow::Context;
use bitassay::{
    bundle::Bundle,
    certificate::{Certificate, Verdict},
    certify::certify,
    fault::parse,
    request::{Request, RequestDocument},
};
use clap::Args;
use serde_json::{Map, Value, json};

use super::document;

/// Certify one batch from a file and print the record
///
/// FILE is a JSON document with the members `scenario`, `counts` (or `behaviour`, with "plug-in" only), `rounds`, and optionally `failure`,
/// `level`, `lost_rounds` and `"bracket": true`, which also seeks an explicit attack on every target; `-` reads standard input. The record goes to standard output, a summary in words to standard error. No
/// database is involved and nothing is kept.
///
/// Exit status: 0 certified or estimated; 3 refused (the record is printed all the same); 2 bad input.
#[derive(Args)]
pub struct Certify {
    /// The batch
    file: PathBuf,

    /// Print the record together with its witnesses, as `verify` reads it
    #[arg(long)]
    bundle: bool,
}

impl Certify {
    pub fn run(self) -> anyhow::Result<ExitCode> {
        let text = document::read(&self.file)?;
        let named = || self.file.display().to_string();
        let request = parse::<RequestDocument>(&text).and_then(Request::try_from).with_context(named)?;
        let begun = Instant::now();
        let certification = certify(&request);
        let certificate = certification.certificate;
        let mut record: Map<String, Value> = serde_json::from_value(serde_json::to_value(&certificate)?)?;
        record.insert("timings".into(), json!({ "solved_seconds": begun.elapsed().as_secs_f64() }));
        if self.bundle {
            let witnesses = certification.witnesses.into_iter().map(|witness| (witness.digest(), witness)).collect();
            document::print(&Bundle { record, commitment: None, witnesses, ledger: None })?;
        } else {
            document::print(&record)?;
        }
        eprintln!("{}", in_words(&certificate));
        Ok(if certificate.verdict == Verdict::Refused { ExitCode::from(3) } else { ExitCode::SUCCESS })
    }
}

fn in_words(certificate: &Certificate) -> String {
    match certificate.verdict {
        Verdict::Certified => format!(
            "certified: {} bits may be extracted, {:.6} per round; holds under the assumptions listed in the record",
            certificate.certified_bits, certificate.bits_per_round
        ),
        Verdict::Estimate => {
            let entropies: Vec<String> = certificate.targets.iter().map(|target| format!("{:.6}", target.min_entropy_per_round)).collect();
            format!(
                "estimate: min-entropy {} bit per target round; a plug-in figure, no bits may be released from it",
                entropies.join(", ")
            )
        }
        Verdict::Refused => {
            let reason = certificate.reason.and_then(|reason| serde_json::to_value(reason).ok());
            format!("refused: {}", reason.as_ref().and_then(Value::as_str).unwrap_or("no reason given"))
        }
    }
}
