//! What goes into the ledger and what comes out of it.

use std::sync::Arc;

use sqlx::{Row, sqlite::SqliteRow};
use uuid::Uuid;

use super::LedgerError;
use crate::{
    certificate::{Reason, Verdict},
    clock::Stamp,
    commitment::Commitment,
    committed::Committed,
    leakage::budget::BudgetDocument,
    profile::{Profile, RigName},
    record::Record,
    refusal::Refusal,
    submission::Submission,
    witness::{pool::Kept, witness::Witness},
};

/// One version of a rig's profile.
#[derive(Debug, Clone, PartialEq)]
pub struct ProfileVersion {
    pub rig: RigName,
    pub version: u64,
    pub recorded_at: Stamp,
    pub profile: Profile,
}

/// A certification on its way into the ledger.
#[derive(Debug, Clone)]
pub struct Entry {
    pub id: Uuid,
    pub rig: RigName,
    pub profile_version: u64,
    pub verdict: Verdict,
    pub reason: Option<Reason>,
    pub recorded_at: Stamp,
    pub certified_bits: u64,
    pub rounds: u64,
    pub failure: Option<f64>,
    /// The commitment it rests on, whose witnesses are not listed here again.
    pub commitment: Option<Uuid>,
    /// The record's text.
    pub record: String,
    /// Digest and document of each witness that may be new to the ledger.
    pub witnesses: Vec<(String, String)>,
    /// Digests of witnesses that are in the ledger already.
    pub kept: Vec<String>,
    pub submission: Submission,
    /// The text that is answered where that is not the record itself.
    pub refusal: Option<String>,
}

impl Entry {
    /// Writes the record out; from here on its text is what counts.
    ///
    /// # Errors
    /// A figure that JSON cannot hold.
    pub fn new(record: &Record, witnesses: &[Witness], kept: &[Arc<Kept>], submission: Submission) -> Result<Self, serde_json::Error> {
        let certificate = &record.certificate;
        let (mut witnesses, mut known) = (documents(witnesses), Vec::new());
        for kept in kept {
            let digest = kept.witness().digest().to_owned();
            match kept.document() {
                Some(document) => witnesses.push((digest, document.to_string())),
                None => known.push(digest),
            }
        }
        Ok(Self {
            id: record.id,
            rig: record.rig.clone(),
            profile_version: record.profile_version,
            verdict: certificate.verdict,
            reason: certificate.reason,
            recorded_at: record.recorded_at,
            certified_bits: certificate.certified_bits,
            rounds: certificate.total_rounds.unwrap_or(0),
            failure: certificate.failure.map(|failure| failure.total),
            commitment: record.commitment,
            record: serde_json::to_string(record)?,
            witnesses,
            kept: known,
            submission,
            refusal: Refusal::of(record).map(|refusal| serde_json::to_string(&refusal)).transpose()?,
        })
    }
}

/// Digest and document of each witness, once each: targets may rest on the same one.
pub fn documents(witnesses: &[Witness]) -> Vec<(String, String)> {
    let mut documents: Vec<_> = witnesses.iter().map(|witness| (witness.digest(), witness.canonical_json())).collect();
    documents.sort();
    documents.dedup();
    documents
}

/// A witness that is kept for later batches.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct KeptRow {
    pub digest: String,
    /// The witness's text.
    pub document: String,
    /// What it was made for, as JSON.
    pub made_for: String,
}

/// One commitment of a list.
#[derive(Debug, Clone, PartialEq)]
pub struct NumberedCommitment {
    pub number: u64,
    pub committed: Committed,
}

/// A leakage budget that is kept.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct KeptBudget {
    pub number: u64,
    pub recorded_at: Stamp,
    /// The canonical text, byte for byte as it was digested.
    pub document: String,
}

impl KeptBudget {
    /// The budget as a document.
    ///
    /// # Errors
    /// A text that cannot be read.
    pub fn budget(&self) -> Result<BudgetDocument, LedgerError> {
        serde_json::from_str(&self.document).map_err(|source| LedgerError::Unreadable { what: "leakage budget", source: Arc::new(source) })
    }
}

/// The answer that a submission was given, to be given again.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Answered {
    pub id: Uuid,
    pub body_digest: String,
    /// The record's text.
    pub record: String,
    /// The text that is answered in its place when the batch was refused.
    pub refusal: Option<String>,
}

/// One record of the history.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Recorded {
    pub entry: u64,
    pub record: String,
}

/// What the yield adds up.
#[derive(Debug, Clone, PartialEq)]
pub struct Tally {
    pub id: Uuid,
    pub recorded_at: Stamp,
    pub verdict: Verdict,
    pub certified_bits: u64,
    pub rounds: u64,
    pub failure: Option<f64>,
}

/// The ledger's word for a verdict or a reason: the same as in a record.
pub(crate) fn word<T: serde::Serialize>(value: T) -> String {
    match serde_json::to_value(value) {
        Ok(serde_json::Value::String(word)) => word,
        // Plain enums only; the column's CHECK refuses this.
        _ => String::new(),
    }
}

fn value<T: serde::de::DeserializeOwned>(word: String, what: &'static str) -> Result<T, LedgerError> {
    serde_json::from_value(serde_json::Value::String(word)).map_err(|source| LedgerError::Unreadable { what, source: Arc::new(source) })
}

fn unsigned(number: i64, what: &'static str) -> Result<u64, LedgerError> {
    u64::try_from(number).map_err(|_| LedgerError::OutOfRange { what })
}

fn time(microseconds: i64) -> Result<Stamp, LedgerError> {
    Stamp::from_microseconds(microseconds).ok_or(LedgerError::OutOfRange { what: "time" })
}

/// A row that is read through the types of this module.
pub(super) trait Read: Sized {
    fn read(row: &SqliteRow) -> Result<Self, LedgerError>;
}

impl Read for ProfileVersion {
    fn read(row: &SqliteRow) -> Result<Self, LedgerError> {
        let profile: String = row.try_get("profile")?;
        Ok(Self {
            rig: value(row.try_get("rig")?, "rig name")?,
            version: unsigned(row.try_get("version")?, "version")?,
            recorded_at: time(row.try_get("recorded_at")?)?,
            profile: serde_json::from_str(&profile)
                .map_err(|source| LedgerError::Unreadable { what: "profile", source: Arc::new(source) })?,
        })
    }
}

impl Read for Committed {
    fn read(row: &SqliteRow) -> Result<Self, LedgerError> {
        let document: String = row.try_get("document")?;
        let commitment: Commitment =
            serde_json::from_str(&document).map_err(|source| LedgerError::Unreadable { what: "commitment", source: Arc::new(source) })?;
        Ok(Self {
            id: value(row.try_get("id")?, "id")?,
            rig: value(row.try_get("rig")?, "rig name")?,
            profile_version: unsigned(row.try_get("profile_version")?, "version")?,
            recorded_at: time(row.try_get("recorded_at")?)?,
            level: value(row.try_get("level")?, "level")?,
            digest: row.try_get("digest")?,
            document,
            commitment,
        })
    }
}

impl Read for NumberedCommitment {
    fn read(row: &SqliteRow) -> Result<Self, LedgerError> {
        Ok(Self { number: unsigned(row.try_get("commitment")?, "commitment number")?, committed: Committed::read(row)? })
    }
}

impl Read for KeptBudget {
    fn read(row: &SqliteRow) -> Result<Self, LedgerError> {
        Ok(Self {
            number: unsigned(row.try_get("budget")?, "budget number")?,
            recorded_at: time(row.try_get("recorded_at")?)?,
            document: row.try_get("document")?,
        })
    }
}

impl Read for Answered {
    fn read(row: &SqliteRow) -> Result<Self, LedgerError> {
        Ok(Self {
            id: value(row.try_get("id")?, "id")?,
            body_digest: row.try_get("body_digest")?,
            record: row.try_get("record")?,
            refusal: row.try_get("refusal")?,
        })
    }
}

impl Read for Recorded {
    fn read(row: &SqliteRow) -> Result<Self, LedgerError> {
        Ok(Self { entry: unsigned(row.try_get("entry")?, "entry")?, record: row.try_get("record")? })
    }
}

impl Read for Tally {
    fn read(row: &SqliteRow) -> Result<Self, LedgerError> {
        Ok(Self {
            id: value(row.try_get("id")?, "id")?,
            recorded_at: time(row.try_get("recorded_at")?)?,
            verdict: value(row.try_get("verdict")?, "verdict")?,
            certified_bits: unsigned(row.try_get("certified_bits")?, "number of bits")?,
            rounds: unsigned(row.try_get("rounds")?, "number of rounds")?,
            failure: row.try_get("failure")?,
        })
    }
}
