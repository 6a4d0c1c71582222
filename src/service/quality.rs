//! What the reader of a record should know about the batch's data.

use std::sync::Arc;

use serde::Deserialize;
use uuid::Uuid;

use super::newest::Newest;
use crate::{
    certificate::{Certificate, Verdict},
    counts::{Counts, Table},
    ledger::{Ledger, LedgerError, history::Filter},
    profile::RigName,
    record::Concern,
    statistics::quality::{Expectations, LEAST_ROUNDS, Objection, examine},
};

/// Chance of any warning about a batch in which everything is as declared. Common practice.
const SIGNIFICANCE: f64 = 1e-3;

/// The part of an earlier record that a batch is compared with.
#[derive(Deserialize)]
struct Earlier {
    id: Uuid,
    counts: Option<Table<u64>>,
}

/// Counts of the rig's newest certified batch, as far as anybody can tell while others are being written.
///
/// # Errors
/// The ledger's.
pub(super) async fn previous(ledger: &Ledger, newest: &Newest, rig: &RigName) -> Result<Option<Arc<Table<u64>>>, LedgerError> {
    if let Some(known) = newest.certified(rig) {
        return Ok(known);
    }
    let filter = Filter { rig: Some(rig.clone()), verdict: Some(Verdict::Certified), ..Filter::default() };
    let found = ledger.history.page(&filter, 1).await?.items.into_iter().next();
    let earlier = found.and_then(|recorded| serde_json::from_str::<Earlier>(&recorded.record).ok());
    let counts = earlier.as_ref().and_then(|earlier| earlier.counts.clone()).map(Arc::new);
    newest.note_certified(rig, earlier.map(|earlier| earlier.id), counts.clone());
    Ok(counts)
}

/// Settings against the distribution that was declared or committed, outcomes against an earlier batch, and settings with few rounds.
pub(super) fn concerns(previous: Option<&Table<u64>>, distribution: Option<&[Vec<f64>]>, certificate: &Certificate) -> Vec<Concern> {
    let geometry = certificate.scenario.geometry();
    let fitting = |table: Table<u64>| Counts::try_new(table, geometry).ok();
    // A certificate of a posted batch has counts, and they fit.
    let Some(counts) = certificate.counts.clone().and_then(fitting) else { return vec![] };
    // A batch of another geometry is nothing to compare with.
    let previous = previous.cloned().and_then(fitting);
    let expectations = Expectations { distribution, previous: previous.as_ref(), least_rounds: LEAST_ROUNDS, significance: SIGNIFICANCE };
    // Distribution and counts fit the geometry of a valid profile or commitment.
    let findings = examine(&counts, &expectations).unwrap_or_default();
    findings.into_iter().map(|finding| Concern { detail: finding.to_string(), finding }).collect()
}

/// The first thing that a profile objects to, if there is any.
pub fn objection(refuse_on: &[Objection], concerns: &[Concern], certificate: &Certificate) -> Option<Objection> {
    let of_certificate = certificate.objections();
    let found = |objection: &&Objection| {
        of_certificate.contains(objection) || concerns.iter().any(|concern| concern.finding.objection() == **objection)
    };
    refuse_on.iter().find(found).copied()
}
