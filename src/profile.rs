//! What an operator declares about a rig.

use std::{fmt, str::FromStr};

use serde::{Deserialize, Serialize};

use crate::{
    counts::{NORMALISATION_SLACK, check_distribution},
    fault::Fault,
    freshness::Freshness,
    relaxation::level::LevelChoice,
    request::{EntropyChoice, Failure, RoundModel, Starts},
    scenario::{Scenario, ScenarioDocument},
    statistics::quality::Objection,
};

/// The name of a rig: `[a-z0-9][a-z0-9-]{0,62}`, so that it fits into paths, file names and host names as it is.
#[derive(Debug, Clone, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize)]
#[serde(try_from = "String", into = "String")]
pub struct RigName(String);

/// The text cannot name a rig.
#[derive(Debug, Clone, Copy, PartialEq, Eq, thiserror::Error)]
#[error("a rig's name has 1 to 63 lower-case letters, digits and hyphens, and does not start with a hyphen")]
pub struct NoRigName;

impl TryFrom<String> for RigName {
    type Error = NoRigName;

    fn try_from(text: String) -> Result<Self, NoRigName> {
        let letter = |byte: u8| byte.is_ascii_lowercase() || byte.is_ascii_digit();
        let fits = text.len() <= 63 && text.bytes().next().is_some_and(letter) && text.bytes().all(|byte| letter(byte) || byte == b'-');
        if fits { Ok(Self(text)) } else { Err(NoRigName) }
    }
}

impl FromStr for RigName {
    type Err = NoRigName;

    fn from_str(text: &str) -> Result<Self, NoRigName> {
        text.to_owned().try_into()
    }
}

impl From<RigName> for String {
    fn from(name: RigName) -> Self {
        name.0
    }
}

impl fmt::Display for RigName {
    fn fmt(&self, formatter: &mut fmt::Formatter) -> fmt::Result {
        formatter.write_str(&self.0)
    }
}

impl RigName {
    pub fn as_str(&self) -> &str {
        &self.0
    }
}

/// Longest outcome label and longest notes, in bytes.
const MAX_LABEL: usize = 64;
const MAX_NOTES: usize = 4096;

/// A rig's profile: what its operator declares. In words that a document may hold; [`Profile`] is the validated form.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, utoipa::ToSchema)]
#[serde(deny_unknown_fields)]
#[schema(as = Profile, description = "A rig's profile: what its operator declares.")]
pub struct ProfileDocument {
    pub scenario: ScenarioDocument,
    pub rounds: RoundModel,
    #[serde(default)]
    pub failure: Failure,
    #[serde(default)]
    pub level: LevelChoice,
    #[serde(default)]
    pub entropy: EntropyChoice,
    #[serde(default)]
    pub freshness: Freshness,
    /// Probability `π(x,y)` with which the rig chooses each setting, `[x][y]`; adds up to 1.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub setting_distribution: Option<Vec<Vec<f64>>>,
    /// Concerns about a batch's data for which it is refused, most serious first: the first that applies is the reason. A batch is compared with
    /// the rig's newest certified one; to accept a rig that has changed, take `outcome-drift` out for one batch.
    #[serde(default, skip_serializing_if = "Vec::is_empty")]
    pub refuse_on: Vec<Objection>,
    /// What the outcomes are called at the rig, one label each, all different.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub outcome_labels: Option<Vec<String>>,
    /// Anything the operator wants to keep with the profile.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub notes: Option<String>,
}

/// A valid profile.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[serde(into = "ProfileDocument", try_from = "ProfileDocument")]
pub struct Profile {
    scenario: Scenario,
    rounds: RoundModel,
    failure: Failure,
    level: LevelChoice,
    entropy: EntropyChoice,
    freshness: Freshness,
    setting_distribution: Option<Vec<Vec<f64>>>,
    refuse_on: Vec<Objection>,
    outcome_labels: Option<Vec<String>>,
    notes: Option<String>,
    /// Follows from scenario and level.
    starts: Starts,
}

impl TryFrom<ProfileDocument> for Profile {
    type Error = Fault;

    fn try_from(document: ProfileDocument) -> Result<Self, Fault> {
        let ProfileDocument {
            scenario,
            rounds,
            failure,
            level,
            entropy,
            freshness,
            setting_distribution,
            refuse_on,
            outcome_labels,
            notes,
        } = document;
        let scenario = Scenario::try_from(scenario).map_err(|fault| fault.under("/scenario"))?;
        failure.check().map_err(|fault| fault.under("/failure"))?;
        freshness.check().map_err(|fault| fault.under("/freshness"))?;
        // Too large for every level is said now, and not when a batch comes in.
        let starts = Starts::of(level, &scenario)?;
        if let Some(distribution) = &setting_distribution {
            check_distribution(distribution, scenario.geometry(), NORMALISATION_SLACK)
                .map_err(|fault| fault.under("/setting_distribution"))?;
        }
        // A commitment has a distribution of its own.
        let comparable = setting_distribution.is_some() || rounds == RoundModel::Memory;
        check_objections(&refuse_on, comparable).map_err(|fault| fault.under("/refuse_on"))?;
        if let Some(labels) = &outcome_labels {
            check_labels(labels, scenario.geometry().outcomes).map_err(|fault| fault.under("/outcome_labels"))?;
        }
        if notes.as_ref().is_some_and(|notes| notes.len() > MAX_NOTES) {
            return Err(Fault::new("/notes", format!("notes have at most {MAX_NOTES} bytes")));
        }
        Ok(Self { scenario, rounds, failure, level, entropy, freshness, setting_distribution, refuse_on, outcome_labels, notes, starts })
    }
}

/// Each objection once, and none that could never be raised.
fn check_objections(objections: &[Objection], distribution_is_known: bool) -> Result<(), Fault> {
    for (i, objection) in objections.iter().enumerate() {
        if objections[..i].contains(objection) {
            return Err(Fault::new(format!("/{i}"), "this concern is listed twice"));
        }
        if *objection == Objection::SettingImbalance && !distribution_is_known {
            return Err(Fault::new(format!("/{i}"), "needs a setting_distribution that the settings can be compared with"));
        }
    }
    Ok(())
}

fn check_labels(labels: &[String], outcomes: usize) -> Result<(), Fault> {
    if labels.len() != outcomes {
        return Err(Fault::new("", format!("needs one label per outcome: {outcomes}, has {}", labels.len())));
    }
    for (b, label) in labels.iter().enumerate() {
        if label.is_empty() || label.len() > MAX_LABEL {
            return Err(Fault::new(format!("/{b}"), format!("a label has 1 to {MAX_LABEL} bytes")));
        }
        if labels[..b].contains(label) {
            return Err(Fault::new(format!("/{b}"), "this label is given twice"));
        }
    }
    Ok(())
}

impl From<Profile> for ProfileDocument {
    fn from(profile: Profile) -> Self {
        let Profile {
            scenario, rounds, failure, level, entropy, freshness, setting_distribution, refuse_on, outcome_labels, notes, ..
        } = profile;
        Self {
            scenario: scenario.into(),
            rounds,
            failure,
            level,
            entropy,
            freshness,
            setting_distribution,
            refuse_on,
            outcome_labels,
            notes,
        }
    }
}

impl Profile {
    pub fn scenario(&self) -> &Scenario {
        &self.scenario
    }

    pub fn rounds(&self) -> RoundModel {
        self.rounds
    }

    pub fn failure(&self) -> Failure {
        self.failure
    }

    /// Declared setting distribution `π(x,y)`, `[x][y]`.
    pub fn setting_distribution(&self) -> Option<&[Vec<f64>]> {
        self.setting_distribution.as_deref()
    }

    /// Concerns for which a batch is refused.
    pub fn refuse_on(&self) -> &[Objection] {
        &self.refuse_on
    }

    pub fn entropy(&self) -> EntropyChoice {
        self.entropy
    }

    pub fn freshness(&self) -> Freshness {
        self.freshness
    }

    /// The levels that the choice comes to.
    pub fn starts(&self) -> Starts {
        self.starts
    }

    pub fn level(&self) -> LevelChoice {
        self.level
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::fault::parse;

    const PROFILE: &str = r#"{"scenario": {"preparations": 2, "measurements": 1, "outcomes": 2, "carrier_dimension": 2,
        "leakage": [0.1, 0.2], "targets": [[0, 0]]}, "rounds": "independent", "setting_distribution": [[0.25], [0.75]]}"#;

    #[test]
    fn a_profile_is_read_back_with_its_defaults_filled_in() {
        let document: ProfileDocument = parse(PROFILE.as_bytes()).unwrap();
        let profile = Profile::try_from(document).unwrap();
        let text = serde_json::to_string(&profile).unwrap();
        assert!(
            text.contains(
                r#""failure":{"estimation":1e-10,"hashing":1e-10},"level":"auto","entropy":"auto","freshness":{"accept_loss":0.001}"#
            ),
            "{text}"
        );
        assert_eq!(serde_json::from_str::<Profile>(&text).unwrap(), profile);
    }

    #[test]
    fn a_distribution_misses_one_or_a_row() {
        for (rows, pointer) in [("[[0.5], [0.6]]", ""), ("[[1.0]]", ""), ("[[0.5, 0.5], [0.5]]", "/0"), ("[[0.0], [1.0]]", "/0/0")] {
            let document: ProfileDocument = parse(PROFILE.replace("[[0.25], [0.75]]", rows).as_bytes()).unwrap();
            assert_eq!(Profile::try_from(document).unwrap_err().pointer, format!("/setting_distribution{pointer}"), "{rows}");
        }
    }

    #[test]
    fn freshness_is_always_or_a_loss_within_reason() {
        let with = |freshness: &str| {
            let text = PROFILE.replace(r#""rounds":"#, &format!(r#""freshness": {freshness}, "rounds":"#));
            Profile::try_from(parse::<ProfileDocument>(text.as_bytes()).unwrap())
        };
        assert_eq!(with(r#""always""#).unwrap().freshness(), Freshness::Always);
        assert_eq!(with(r#"{"accept_loss": 0}"#).unwrap().freshness(), Freshness::AcceptLoss(0.0));
        for bits in ["-1e-9", "1.5"] {
            assert_eq!(with(&format!(r#"{{"accept_loss": {bits}}}"#)).unwrap_err().pointer, "/freshness/accept_loss");
        }
    }

    #[test]
    fn names_fit_into_paths() {
        for good in ["a", "0", "rig-7", &"z".repeat(63)] {
            assert!(RigName::try_from(good.to_owned()).is_ok(), "{good}");
        }
        for bad in ["", "-a", "Rig", "a_b", "a.b", "é", &"z".repeat(64)] {
            assert!(RigName::try_from(bad.to_owned()).is_err(), "{bad}");
        }
    }
}
