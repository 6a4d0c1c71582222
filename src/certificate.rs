//! What certification says about a request: the record's body, in plain types.

use serde::{Deserialize, Serialize};

use crate::{
    counts::Table,
    leakage::budget::BudgetAccount,
    relaxation::level::{Level, LevelChoice},
    request::{EntropyChoice, LostRounds, LostTreatment, RoundModel},
    scenario::{Scenario, Setting},
    score::Score,
    statistics::quality::{LEAST_ROUNDS, Objection},
};

#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(rename_all = "kebab-case")]
pub enum Verdict {
    /// Bits may be extracted.
    Certified,
    /// A checked bound from frequencies taken as probabilities; no bits are released.
    Estimate,
    /// No bits.
    Refused,
}

/// Why bits are refused.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(rename_all = "kebab-case")]
pub enum Reason {
    /// The bound on the guessing probability reaches 1, or finite-size terms eat all bits.
    ZeroBound,
    /// The counts cannot come from the declared dimension and leakage, at the stated confidence.
    OutsideModel,
    /// No witness passed the exact check.
    Unverified,
    /// The batch began before its commitment was recorded.
    Uncommitted,
    /// The rig's profile refuses batches whose settings are not drawn as declared.
    SettingImbalance,
    /// The rig's profile refuses batches whose outcomes drifted since the newest certified one.
    OutcomeDrift,
    /// The rig's profile refuses batches with too few rounds of a setting.
    FewRounds,
    /// The rig's profile refuses batches that left lost rounds out.
    FairSampling,
}

impl From<Objection> for Reason {
    fn from(objection: Objection) -> Self {
        match objection {
            Objection::SettingImbalance => Self::SettingImbalance,
            Objection::OutcomeDrift => Self::OutcomeDrift,
            Objection::FewRounds => Self::FewRounds,
            Objection::FairSampling => Self::FairSampling,
        }
    }
}

impl Reason {
    /// What is objected to, if the batch is refused for its data and not for its bound.
    pub fn objection(self) -> Option<Objection> {
        match self {
            Self::SettingImbalance => Some(Objection::SettingImbalance),
            Self::OutcomeDrift => Some(Objection::OutcomeDrift),
            Self::FewRounds => Some(Objection::FewRounds),
            Self::FairSampling => Some(Objection::FairSampling),
            Self::ZeroBound | Self::OutsideModel | Self::Unverified | Self::Uncommitted => None,
        }
    }
}

/// Where a bound's witness came from. It makes no difference to what the bound means.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(rename_all = "kebab-case")]
pub enum Origin {
    /// Kept from an earlier solve.
    Kept,
    /// Solved for this batch.
    Fresh,
}

/// Failure probabilities as recorded.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(deny_unknown_fields)]
pub struct FailureTotal {
    pub estimation: f64,
    pub hashing: f64,
    /// That the leakage is larger than its budget says; left out where it is zero, as for a leakage that is stated.
    #[serde(default, skip_serializing_if = "is_zero")]
    pub leakage: f64,
    /// Sum of the above, rounded up.
    pub total: f64,
}

fn is_zero(value: &f64) -> bool {
    *value == 0.0
}

/// The bound of one target setting.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(deny_unknown_fields)]
pub struct TargetCertificate {
    pub preparation: usize,
    pub measurement: usize,
    /// Rounds at this setting; `null` for a stated behaviour.
    pub rounds: Option<u64>,
    /// Upper bound on the guessing probability, rounded up, at most 1; `null` when no witness passed the exact check.
    pub guessing_probability_bound: Option<f64>,
    /// `−log2` of the bound, in bits per target round, rounded down.
    pub min_entropy_per_round: f64,
    /// Min-entropy of the target string, in bits, rounded down, before anything is subtracted: the better one of what the guessing
    /// probability and a power entropy give; `null` for plug-in figures.
    pub min_entropy: Option<f64>,
    /// Bits subtracted because the counts are public, rounded up; `null` for plug-in figures.
    pub publication_cost: Option<f64>,
    /// Bits subtracted for the hash, rounded up; `null` for plug-in figures.
    pub hashing_cost: Option<f64>,
    /// Whole bits that may be extracted from the outcomes of this setting.
    pub certified_bits: u64,
    /// Level of the witness; `null` when there is none.
    pub level: Option<Level>,
    /// `sha256:` digest of the witness document; `null` when there is none.
    pub witness: Option<String>,
    /// Whether the witness was kept or made for this batch, for information; absent without a witness, and in older records.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub origin: Option<Origin>,
    /// What rounding the witness to integers cost in guessing probability, an approximate figure for information.
    pub rounding_cost: Option<f64>,
    /// The power entropy; `null` where no witness of it passed the exact check, or nothing is left of the min-entropy.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub power: Option<PowerCertificate>,
    /// What an explicit attack reaches, if one was sought and found. For information: no figure rests on it.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub bracket: Option<Bracket>,
}

/// The largest guessing probability lies between these two, up to the residual: how much the bound may be giving away.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(deny_unknown_fields)]
pub struct Bracket {
    /// Guessing probability of an explicit model within the declared leakage, rounded down.
    pub attack: f64,
    /// The bound, as above.
    pub bound: f64,
    /// By how much the model's probabilities may miss the data, or the region; zero if its behaviour lies inside.
    pub residual: f64,
}

/// A bound on the power entropy of a target's outcomes.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(deny_unknown_fields)]
pub struct PowerCertificate {
    /// `β` in units of `2^-30`.
    pub power: u32,
    /// Lower bound on the mean of `η_β`, in bits per target round, rounded down.
    pub entropy_per_round: f64,
    /// Failure probability of the step from rounds to the block; `null` where no bits are drawn from it.
    pub failure: Option<f64>,
    /// Min-entropy of the target string that follows, in bits, rounded down, before anything is subtracted; `null` where no bits are drawn
    /// from it.
    pub min_entropy: Option<f64>,
    pub level: Level,
    /// `sha256:` digest of the witness document.
    pub witness: String,
    /// Whether the witness was kept or made for this batch, for information; absent in older records.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub origin: Option<Origin>,
    /// What rounding the witness cost, in nats, an approximate figure for information.
    pub rounding_cost: f64,
}

impl TargetCertificate {
    pub fn setting(&self) -> Setting {
        Setting { x: self.preparation, y: self.measurement }
    }
}

/// The account of a block of rounds with memory, all targets together. Every number follows from the counts and the commitment.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(deny_unknown_fields)]
pub struct BlockCertificate {
    /// `sha256:` digest of the commitment.
    pub commitment: String,
    /// Rounds at target settings.
    pub target_rounds: u64,
    /// `Σ n log2 F` over all settings and outcomes, rounded down.
    pub log2_product: f64,
    /// `(Σ n log2 F − log2(1/δ)) / β`, in bits, rounded down, before anything is subtracted.
    pub min_entropy: f64,
    /// Bits subtracted because the counts of all settings are public, rounded up.
    pub publication_cost: f64,
    /// Bits subtracted for the hash, rounded up.
    pub hashing_cost: f64,
    /// Whole bits that may be extracted from the outcomes of the target settings together.
    pub certified_bits: u64,
    /// Random bits that choosing the settings takes, per round, rounded up.
    pub setting_cost_per_round: f64,
    /// Certified bits per round of the block minus what choosing the settings takes; negative where more goes in than comes out.
    pub net_bits_per_round: f64,
}

/// Proof that the numbers contradict the declaration, and what would explain them.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(deny_unknown_fields)]
pub struct OutsideModel {
    /// `sha256:` digest of the witness of the contradiction.
    pub witness: String,
    /// No smaller uniform leakage, read on average, explains the numbers: a lower bound, rounded down. `null` when it could
    /// not be verified.
    pub smallest_uniform_leakage: Option<f64>,
    /// `sha256:` digest of the witness of that figure.
    pub smallest_uniform_leakage_witness: Option<String>,
}

/// The outcome of certifying one request. Everything in it follows from the request alone.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(deny_unknown_fields)]
pub struct Certificate {
    pub verdict: Verdict,
    pub reason: Option<Reason>,
    #[cfg_attr(feature = "service", schema(value_type = crate::scenario::ScenarioDocument))]
    pub scenario: Scenario,
    /// The budget that the leakage comes from, if it is not stated.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub leakage_budget: Option<BudgetAccount>,
    /// Counts as certified, after lost rounds were folded in if that was asked for.
    #[cfg_attr(feature = "service", schema(value_type = Option<Vec<Vec<Vec<u64>>>>))]
    pub counts: Option<Table<u64>>,
    /// `sha256:` digest of the counts' canonical bytes.
    pub counts_digest: Option<String>,
    #[cfg_attr(feature = "service", schema(value_type = Option<Vec<Vec<Vec<f64>>>>))]
    pub behaviour: Option<Table<f64>>,
    /// Scores that were stated in place of a behaviour.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub scores: Option<Vec<Score>>,
    pub lost_rounds: Option<LostRounds>,
    pub rounds: RoundModel,
    pub total_rounds: Option<u64>,
    /// `null` for plug-in figures, which claim no confidence.
    pub failure: Option<FailureTotal>,
    /// The level that was asked for.
    pub level: LevelChoice,
    /// The entropy that was asked for.
    #[serde(default)]
    pub entropy: EntropyChoice,
    /// Confidence interval `[low, high]` of every probability, `[x][y][b]`; `null` for plug-in figures.
    #[cfg_attr(feature = "service", schema(value_type = Option<Vec<Vec<Vec<Vec<f64>>>>>))]
    pub region: Option<Table<[f64; 2]>>,
    pub targets: Vec<TargetCertificate>,
    /// Rounds with memory only.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub block: Option<BlockCertificate>,
    pub certified_bits: u64,
    /// Certified bits over all rounds of the batch, rounded down.
    pub bits_per_round: f64,
    pub outside_model: Option<OutsideModel>,
    /// What the figures rest on, in words.
    pub assumptions: Vec<String>,
    pub warnings: Vec<String>,
    /// Software that made the figures.
    pub version: String,
}

impl Certificate {
    /// Takes back whatever bits there were; the bounds stay. A refusal that stands already keeps its reason.
    pub fn refuse(&mut self, objection: Objection) {
        if self.verdict == Verdict::Refused {
            return;
        }
        self.verdict = Verdict::Refused;
        self.reason = Some(objection.into());
        self.certified_bits = 0;
        self.bits_per_round = 0.0;
        self.targets.iter_mut().for_each(|target| target.certified_bits = 0);
        if let Some(block) = &mut self.block {
            block.certified_bits = 0;
            block.net_bits_per_round = -block.setting_cost_per_round;
        }
    }

    /// What there is to object to that the certificate shows by itself. Whether settings and outcomes are as they were declared or as they
    /// were before, it does not.
    pub fn objections(&self) -> Vec<Objection> {
        let few = self.counts.iter().flatten().flatten().any(|outcomes| outcomes.iter().sum::<u64>() < LEAST_ROUNDS);
        let left_out = self.lost_rounds.as_ref().is_some_and(|lost| lost.treatment == LostTreatment::FairSampling);
        let found = [(Objection::FewRounds, few), (Objection::FairSampling, left_out)];
        found.into_iter().filter(|(_, found)| *found).map(|(objection, _)| objection).collect()
    }
}
