//! One certification as it is kept and answered.

use serde::{Deserialize, Serialize};
use uuid::Uuid;

use crate::{
    batch::LeakageSource,
    certificate::{Certificate, FailureTotal, Reason, Verdict},
    clock::Stamp,
    profile::RigName,
    statistics::quality::{Finding, Objection},
};

/// How long a certification took, in seconds.
#[derive(Debug, Clone, Copy, Default, PartialEq, Serialize, Deserialize, utoipa::ToSchema)]
pub struct Timings {
    /// From acceptance until a solver was free.
    pub queued_seconds: f64,
    /// On the solver; zero where none was needed: with kept witnesses, and for rounds with memory.
    pub solved_seconds: f64,
}

/// The record of one certification: what the core found, with what only the service knows. It is written out once; that text
/// is kept and answered from then on.
#[derive(Debug, Clone, PartialEq, Serialize, utoipa::ToSchema)]
pub struct Record {
    pub id: Uuid,
    #[schema(value_type = String)]
    pub rig: RigName,
    /// Version of the rig's profile that the batch was certified under.
    pub profile_version: u64,
    #[schema(value_type = String, format = DateTime)]
    pub recorded_at: Stamp,
    #[schema(value_type = String, format = DateTime)]
    pub started_at: Stamp,
    #[schema(value_type = String, format = DateTime)]
    pub ended_at: Stamp,
    pub leakage_source: LeakageSource,
    /// Rounds with memory only: identifier of the commitment that the batch was certified under.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub commitment: Option<Uuid>,
    #[serde(flatten)]
    pub certificate: Certificate,
    /// What the reader should know about the data: settings that are not drawn as declared, outcomes that drifted since the rig's newest
    /// certified batch, settings with few rounds. No bound depends on it; whether bits are released may, see `refuse_on`.
    pub concerns: Vec<Concern>,
    /// Concerns for which the rig's profile has a batch refused.
    #[serde(skip_serializing_if = "Vec::is_empty")]
    pub refuse_on: Vec<Objection>,
    pub timings: Timings,
}

/// One finding about a batch's data, with its sentence.
#[derive(Debug, Clone, PartialEq, Serialize, utoipa::ToSchema)]
pub struct Concern {
    pub detail: String,
    #[serde(flatten)]
    #[schema(value_type = Object)]
    pub finding: Finding,
}

impl Record {
    /// Where the record is found.
    pub fn path(&self) -> String {
        format!("/v1/certifications/{}", self.id)
    }
}

/// The head of a record, read back from its text: one row of the history as a table.
#[derive(Debug, Clone, PartialEq, Deserialize)]
pub struct Summary {
    pub id: Uuid,
    pub rig: RigName,
    pub profile_version: u64,
    pub recorded_at: Stamp,
    pub started_at: Stamp,
    pub ended_at: Stamp,
    pub verdict: Verdict,
    pub reason: Option<Reason>,
    pub total_rounds: Option<u64>,
    pub certified_bits: u64,
    pub bits_per_round: f64,
    pub failure: Option<FailureTotal>,
    pub counts_digest: Option<String>,
    pub version: String,
}
