//! What a poster is told when a batch is refused.

use serde::Serialize;

use crate::{
    certificate::{Reason, Verdict},
    record::Record,
    statistics::quality::Objection,
};

/// Type of the problem document of a refused batch.
pub const REFUSED: &str = "urn:bitassay:problem:refused";

/// The problem document (RFC 9457) of a refused batch. It is kept with the submission, so that a repeated post is answered
/// with the same bytes even after the words below have changed.
#[derive(Debug, Clone, PartialEq, Serialize, utoipa::ToSchema)]
pub struct Refusal {
    #[serde(rename = "type")]
    pub kind: &'static str,
    pub title: &'static str,
    /// Always 422.
    pub status: u16,
    /// The reason in plain words.
    pub detail: String,
    pub reason: Option<Reason>,
    /// Path of the record; refused batches are recorded too.
    pub certification: String,
    /// For `outside-model`: no smaller uniform leakage, read on average, explains the counts.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub smallest_uniform_leakage: Option<f64>,
}

impl Refusal {
    /// The refusal of a record; `None` if the record does not refuse.
    pub fn of(record: &Record) -> Option<Self> {
        if record.certificate.verdict != Verdict::Refused {
            return None;
        }
        Some(Self {
            kind: REFUSED,
            title: "The batch is refused: no bits may be extracted from it",
            status: 422,
            detail: explanation(record),
            reason: record.certificate.reason,
            certification: record.path(),
            smallest_uniform_leakage: record.certificate.outside_model.as_ref().and_then(|outside| outside.smallest_uniform_leakage),
        })
    }
}

fn explanation(record: &Record) -> String {
    let certificate = &record.certificate;
    match certificate.reason {
        Some(Reason::SettingImbalance | Reason::OutcomeDrift | Reason::FewRounds | Reason::FairSampling) => objections(record),
        Some(Reason::ZeroBound) => {
            let block = certificate.block.as_ref().map(|block| block.min_entropy);
            let min_entropy = block.unwrap_or_else(|| certificate.targets.iter().filter_map(|target| target.min_entropy).sum());
            if min_entropy > 0.0 {
                format!(
                    "The bound proves {min_entropy:.1} bits of min-entropy, but what is subtracted for the published counts and the \
                     hash uses up all of it. More rounds, or a smaller leakage, may help."
                )
            } else if block.is_some() {
                "The counts, weighed with the committed factors, prove no min-entropy: they show less than was expected when the \
                 commitment was made."
                    .into()
            } else {
                "Whoever made the devices may know every outcome: the bound on the guessing probability reaches 1. The counts, at \
                 the declared dimension and leakage, show no randomness."
                    .into()
            }
        }
        Some(Reason::OutsideModel) => {
            let dimension = certificate.scenario.geometry().carrier_dimension;
            let explains = certificate.outside_model.as_ref().and_then(|outside| outside.smallest_uniform_leakage);
            // Rounded down: still at least that much. The document has the figure with all its digits.
            let digits = |leakage: f64| (leakage * 1e4).floor() / 1e4;
            let explains =
                explains.map_or_else(String::new, |leakage| format!(" It would take a uniform leakage of at least {}.", digits(leakage)));
            format!("The counts cannot come from a carrier of dimension {dimension} with the declared leakage.{explains}")
        }
        Some(Reason::Uncommitted) => {
            "The batch began before any commitment under the rig's profile was recorded: what is fixed after the fact proves nothing."
                .into()
        }
        Some(Reason::Unverified) | None => {
            "No bound passed the exact check, so nothing is known about the batch. This says nothing against the rig.".into()
        }
    }
}

/// Everything that the rig's profile objects to, in words.
fn objections(record: &Record) -> String {
    let objected = record.concerns.iter().filter(|concern| record.refuse_on.contains(&concern.finding.objection()));
    let mut details: Vec<&str> = objected.map(|concern| concern.detail.as_str()).collect();
    if record.refuse_on.contains(&Objection::FairSampling) {
        details.extend(record.certificate.warnings.iter().map(|warning| warning.trim_end_matches('.')));
    }
    format!("The rig's profile refuses such data, whatever the bound says: {}.", details.join("; "))
}
