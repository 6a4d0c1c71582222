//! Commitments as an operator orders them for a rig, and as the service keeps them.

use serde::{Deserialize, Serialize};
use uuid::Uuid;

use crate::{
    clock::Stamp,
    commitment::{Commitment, CommitmentDocument, Plan},
    counts::{Counts, Table},
    fault::Fault,
    profile::{Profile, RigName},
    relaxation::level::LevelChoice,
    request::Failure,
    scenario::{Geometry, ScenarioDocument},
    statistics::region::frequencies,
};

/// What an operator orders: a commitment for the batches that follow. The rig's newest profile supplies the scenario and what is
/// left out.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, utoipa::ToSchema)]
#[serde(deny_unknown_fields)]
pub struct CommitmentOrder {
    /// The behaviour the rig is expected to show, `[x][y][b]`. It affects how many bits are certified, never whether they are there.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    #[schema(value_type = Option<Vec<Vec<Vec<f64>>>>)]
    pub expected_behaviour: Option<Table<f64>>,
    /// In place of `expected_behaviour`: an earlier certification of the same rig, whose frequencies are expected again.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub certification: Option<Uuid>,
    /// Probability `π(x,y)` of each setting, `[x][y]`, positive everywhere; without it, the profile's.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub setting_distribution: Option<Vec<Vec<f64>>>,
    /// Rounds of every batch under the commitment.
    pub rounds: u64,
    /// Without it, the profile's.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub failure: Option<Failure>,
    /// Without it, the profile's.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub level: Option<LevelChoice>,
}

/// Where the expected behaviour of an order is found.
#[derive(Debug, Clone, PartialEq)]
pub enum Expected {
    Stated(Table<f64>),
    Certification(Uuid),
}

/// What an order needs to know of an earlier record.
#[derive(Debug, Deserialize)]
struct Measured {
    rig: RigName,
    counts: Option<Table<u64>>,
}

impl CommitmentOrder {
    /// Where the expected behaviour is found.
    ///
    /// # Errors
    /// It is said twice, or not at all.
    pub fn expected(&self) -> Result<Expected, Fault> {
        match (&self.expected_behaviour, self.certification) {
            (Some(table), None) => Ok(Expected::Stated(table.clone())),
            (None, Some(id)) => Ok(Expected::Certification(id)),
            (Some(_), Some(_)) => Err(Fault::new("/certification", "give an expected behaviour or a certification, not both")),
            (None, None) => Err(Fault::new("/expected_behaviour", "an expected behaviour, or a certification in its place, is missing")),
        }
    }

    /// The level that holds for the order.
    pub fn level(&self, profile: &Profile) -> LevelChoice {
        self.level.unwrap_or(profile.level())
    }

    /// The plan that order and profile make together.
    ///
    /// # Errors
    /// The first thing that is wrong, with a pointer into the order.
    pub fn plan(self, profile: &Profile, expected_behaviour: Table<f64>) -> Result<Plan, Fault> {
        const DISTRIBUTION: &str = "/setting_distribution";
        let level = self.level(profile);
        let stated = self.setting_distribution.is_some();
        let Some(setting_distribution) = self.setting_distribution.or_else(|| profile.setting_distribution().map(<[_]>::to_vec)) else {
            return Err(Fault::new(DISTRIBUTION, "the profile has no setting distribution, so the commitment has to state it"));
        };
        let document = CommitmentDocument {
            scenario: ScenarioDocument::from(profile.scenario().clone()),
            expected_behaviour,
            setting_distribution,
            rounds: self.rounds,
            failure: self.failure.unwrap_or(profile.failure()),
            level,
        };
        Plan::try_from(document).map_err(|fault| {
            // Profiles are taken with distributions that are written with a few decimals; a commitment is not.
            if fault.pointer.starts_with(DISTRIBUTION) && !stated {
                return Fault::new(DISTRIBUTION, format!("the profile's, which holds where none is stated: {}", fault.detail));
            }
            fault
        })
    }
}

/// The frequencies of an earlier record of the rig.
///
/// # Errors
/// Another rig's record, or one whose counts do not fit; the pointer is that of an order.
pub fn earlier_frequencies(record: &str, rig: &RigName, geometry: Geometry) -> Result<Table<f64>, Fault> {
    let fault = |detail: String| Fault::new("/certification", detail);
    let measured: Measured = serde_json::from_str(record).map_err(|error| fault(format!("its record cannot be read: {error}")))?;
    if measured.rig != *rig {
        return Err(fault("it is of another rig".into()));
    }
    let counts = measured.counts.ok_or_else(|| fault("its record has no counts".into()))?;
    let counts =
        Counts::try_new(counts, geometry).map_err(|error| fault(format!("its counts do not fit the rig's profile: {}", error.detail)))?;
    Ok(frequencies(&counts))
}

/// A commitment that was recorded.
#[derive(Debug, Clone, PartialEq)]
pub struct Committed {
    pub id: Uuid,
    pub rig: RigName,
    /// Version of the rig's profile that it was made under; it stands for batches under that version only.
    pub profile_version: u64,
    /// A batch is certified under the newest commitment that had been recorded when it began, and refused if there was none.
    pub recorded_at: Stamp,
    /// The level that was asked for.
    pub level: LevelChoice,
    /// `sha256:` digest of the document.
    pub digest: String,
    /// The canonical text, byte for byte as it was digested.
    pub document: String,
    pub commitment: Commitment,
}

impl Committed {
    /// Where the commitment is found.
    pub fn path(&self) -> String {
        format!("/v1/commitments/{}", self.id)
    }
}
