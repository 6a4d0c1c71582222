//! What is fixed before the data of rounds with memory: witnesses, a power, the setting distribution, the number of rounds, and from them
//! one factor per setting and outcome. See [`crate::entropy::memory`] for the theorem.

use serde::{Deserialize, Serialize};
use sha2::{Digest, Sha256};

use crate::{
    bound::{Found, power_entropy, power_entropy_in},
    certificate::{BlockCertificate, FailureTotal},
    counts::{Behaviour, Counts, Table, check_distribution},
    entropy::{
        extraction::{extractable, hashing_cost, publication_cost},
        logarithm::{log2_down, log2_up},
        memory::{FactorError, RoundBound, block_min_entropy, factors, log2_product},
        power::{POWER_BITS, power_value},
    },
    fault::Fault,
    relaxation::{
        cells::COVER_CELLS,
        cost::choose,
        level::{Level, LevelChoice},
    },
    request::Failure,
    scenario::{Scenario, ScenarioDocument, Setting},
    solver::Limits,
    witness::{
        check::{CheckError, CheckedWitness, Place, check},
        witness::{Claim, Witness},
    },
};

/// Points of the curve of expected bits, each a factor √2 below the one before.
const CURVE_POINTS: u32 = 15;
/// How far the setting probabilities may miss 1 in all; well within what [`crate::entropy::memory::DISTRIBUTION_BITS`] allows.
const DISTRIBUTION_SLACK: f64 = 1e-12;

/// What an operator asks to be committed. Shapes: `expected_behaviour` is `[x][y][b]`, `setting_distribution` `[x][y]`.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(deny_unknown_fields)]
pub struct CommitmentDocument {
    pub scenario: ScenarioDocument,
    /// The behaviour the rig is expected to show. It affects how many bits are certified, never whether they are there.
    #[cfg_attr(feature = "service", schema(value_type = Vec<Vec<Vec<f64>>>))]
    pub expected_behaviour: Table<f64>,
    /// Probability `π(x,y)` of each setting, positive everywhere, drawn independently of everything else.
    pub setting_distribution: Vec<Vec<f64>>,
    /// Rounds of every batch under the commitment.
    pub rounds: u64,
    #[serde(default)]
    pub failure: Failure,
    #[serde(default)]
    pub level: LevelChoice,
}

/// A valid plan for a commitment.
#[derive(Debug, Clone, PartialEq)]
pub struct Plan {
    scenario: Scenario,
    expected: Behaviour,
    distribution: Vec<Vec<f64>>,
    rounds: u64,
    failure: Failure,
    level: Level,
}

impl TryFrom<CommitmentDocument> for Plan {
    type Error = Fault;

    fn try_from(document: CommitmentDocument) -> Result<Self, Fault> {
        let CommitmentDocument { scenario, expected_behaviour, setting_distribution: distribution, rounds, failure, level } = document;
        let scenario = Scenario::try_from(scenario).map_err(|fault| fault.under("/scenario"))?;
        let expected = Behaviour::try_new(expected_behaviour, scenario.geometry()).map_err(|fault| fault.under("/expected_behaviour"))?;
        check_distribution(&distribution, scenario.geometry(), DISTRIBUTION_SLACK).map_err(|fault| fault.under("/setting_distribution"))?;
        if !(1..=crate::counts::MAX_ROUNDS).contains(&rounds) {
            return Err(Fault::new("/rounds", format!("a batch has 1 to {} rounds", crate::counts::MAX_ROUNDS)));
        }
        failure.check().map_err(|fault| fault.under("/failure"))?;
        // One group per cell of a cover.
        let level = choose(level, &scenario, COVER_CELLS)?;
        Ok(Self { scenario, expected, distribution, rounds, failure, level })
    }
}

impl Plan {
    /// The level that the choice comes to.
    pub(crate) fn level(&self) -> Level {
        self.level
    }
}

/// The witness that stands for one target.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(deny_unknown_fields)]
pub struct CommittedTarget {
    pub preparation: usize,
    pub measurement: usize,
    pub level: Level,
    /// `sha256:` digest of a power witness, for the power of the commitment or a larger one.
    pub witness: String,
}

/// What a batch is expected to give at one power.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(deny_unknown_fields)]
pub struct CurvePoint {
    /// `β` in units of `2^-30`.
    pub power: u32,
    pub expected_bits: f64,
}

/// A commitment. Factors are the ones that count; everything else says where they come from.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(deny_unknown_fields)]
pub struct Commitment {
    #[cfg_attr(feature = "service", schema(value_type = ScenarioDocument))]
    pub scenario: Scenario,
    pub rounds: u64,
    pub setting_distribution: Vec<Vec<f64>>,
    pub failure: FailureTotal,
    #[cfg_attr(feature = "service", schema(value_type = Vec<Vec<Vec<f64>>>))]
    pub expected_behaviour: Table<f64>,
    /// `β` in units of `2^-30`.
    pub power: u32,
    pub targets: Vec<CommittedTarget>,
    /// `F`, `[x][y][b]`, rounded down.
    #[cfg_attr(feature = "service", schema(value_type = Vec<Vec<Vec<f64>>>))]
    pub factors: Table<f64>,
    /// Bits certified from a batch that shows exactly the expected behaviour; no promise.
    pub expected_bits: f64,
    pub expected_bits_per_target_round: f64,
    pub expected_bits_per_round: f64,
    /// Random bits that choosing the settings takes, per round, rounded up.
    pub setting_cost_per_round: f64,
    /// Expected bits per round minus what choosing the settings takes.
    pub expected_net_bits_per_round: f64,
    /// Expected bits over the power, from which the power was chosen.
    pub curve: Vec<CurvePoint>,
    pub version: String,
}

/// Why nothing was committed.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum CommitError {
    #[error("no witness passed the exact check for preparation {x}, measurement {y}")]
    Unverified { x: usize, y: usize },
    #[error(transparent)]
    Factors(#[from] FactorError),
    #[error(transparent)]
    Check(#[from] CheckError),
    #[error("nothing would be certified of the expected behaviour with this many rounds")]
    Nothing,
}

/// Chooses witnesses and the power for a plan.
///
/// A power witness holds for every smaller power as well, since `η_β` falls with β. So one is made for a power that is rather too large,
/// the expected bits are followed down from there, and a second witness is made for the power at which they are most.
///
/// # Errors
/// See [`CommitError`].
pub fn commit(plan: &Plan) -> Result<(Commitment, Vec<Witness>), CommitError> {
    let mut covers: Vec<Option<Claim>> = vec![None; plan.scenario.targets().len()];
    let first = witnesses(plan, power_near(largest_power(plan)), &mut covers)?;
    let (mut curve, best) = follow_down(plan, &checked(&first));
    let (mut expected_bits, power, mut factors) = best?;
    let mut found = first;
    let second = witnesses(plan, power, &mut covers)?;
    if let Ok((bits, better)) = expectation(plan, power, &checked(&second))
        && bits > expected_bits
    {
        (expected_bits, factors, found) = (bits, better, second);
    }
    curve.sort_by_key(|point| point.power);
    let targets = plan.scenario.targets().iter().zip(&found).map(|(target, found)| CommittedTarget {
        preparation: target.x,
        measurement: target.y,
        level: found.level,
        witness: found.witness.digest().to_owned(),
    });
    let setting_cost_per_round = setting_cost(&plan.distribution);
    let target_share: f64 = plan.scenario.targets().iter().map(|t| plan.distribution[t.x][t.y]).sum();
    let expected_bits_per_round = expected_bits / plan.rounds as f64;
    let commitment = Commitment {
        scenario: plan.scenario.clone(),
        rounds: plan.rounds,
        setting_distribution: plan.distribution.clone(),
        failure: FailureTotal::new(plan.failure, &plan.scenario),
        expected_behaviour: plan.expected.table().clone(),
        power,
        targets: targets.collect(),
        factors,
        expected_bits,
        expected_bits_per_target_round: expected_bits_per_round / target_share,
        expected_bits_per_round,
        setting_cost_per_round,
        expected_net_bits_per_round: expected_bits_per_round - setting_cost_per_round,
        curve,
        version: concat!("bitassay ", env!("CARGO_PKG_VERSION")).to_owned(),
    };
    Ok((commitment, found.into_iter().map(|found| found.witness.witness().clone()).collect()))
}

/// Expected bits of a plan with given witnesses, at the best power up to theirs; zero if nothing is expected.
pub(crate) fn expected_of(plan: &Plan, power: u32, witnesses: &[&CheckedWitness]) -> f64 {
    let powers = (0..CURVE_POINTS).map(|half_steps| power_near(largest_power(plan) * 0.5f64.powf(f64::from(half_steps) / 2.0)).min(power));
    powers.filter_map(|power| expectation(plan, power, witnesses).ok()).map(|(bits, _)| bits).fold(0.0, f64::max)
}

/// Expected bits at a power, and the factors they come from; one witness for each target.
fn expectation(plan: &Plan, power: u32, witnesses: &[&CheckedWitness]) -> Result<(f64, Table<f64>), CommitError> {
    let factors = plan_factors(&plan.scenario, &plan.distribution, plan.expected.table(), power, witnesses)?;
    Ok((expected_bits(plan, &factors, power), factors))
}

fn checked(found: &[Found]) -> Vec<&CheckedWitness> {
    found.iter().map(|found| &found.witness).collect()
}

/// The most bits that may be expected, with the power and the factors they come from.
type Best = Result<(f64, u32, Table<f64>), CommitError>;

/// The expected bits along powers that fall from the largest one, and the most of them, if there are any, with power and factors.
fn follow_down(plan: &Plan, witnesses: &[&CheckedWitness]) -> (Vec<CurvePoint>, Best) {
    let mut curve = Vec::new();
    let mut best: Best = Err(CommitError::Nothing);
    for half_steps in 0..CURVE_POINTS {
        let power = power_near(largest_power(plan) * 0.5f64.powf(f64::from(half_steps) / 2.0));
        match (expectation(plan, power, witnesses), &best) {
            (Ok((bits, factors)), known) => {
                curve.push(CurvePoint { power, expected_bits: bits });
                if bits > known.as_ref().map_or(0.0, |(most, ..)| *most) {
                    best = Ok((bits, power, factors));
                }
            }
            (Err(error), Err(_)) => best = Err(error),
            (Err(_), Ok(_)) => {}
        }
    }
    (curve, best)
}

/// The most bits to be expected with these witnesses, one for each target, and the power that gives them; `None` if none.
pub(crate) fn best_power(plan: &Plan, witnesses: &[&CheckedWitness]) -> Option<(f64, u32)> {
    follow_down(plan, witnesses).1.ok().map(|(bits, power, _)| (bits, power))
}

/// Bits to be expected at a power with these witnesses, one for each target.
///
/// # Errors
/// Factors that do not exist at this power.
pub(crate) fn expected_at(plan: &Plan, power: u32, witnesses: &[&CheckedWitness]) -> Result<f64, CommitError> {
    expectation(plan, power, witnesses).map(|(bits, _)| bits)
}

impl Plan {
    /// The power from which the best one is sought downwards, in units of `2^-30`.
    pub(crate) fn largest_power(&self) -> u32 {
        power_near(largest_power(self))
    }
}

/// A power witness for each target; the covers made for the first power serve the others.
fn witnesses(plan: &Plan, power: u32, covers: &mut [Option<Claim>]) -> Result<Vec<Found>, CommitError> {
    let place = Place::Behaviour(plan.expected.table());
    let mut all = Vec::new();
    for (target, cover) in plan.scenario.targets().iter().zip(covers) {
        let found = match cover {
            Some(Claim::Power { cuts, .. }) => {
                power_entropy_in(&plan.scenario, *target, place, power, cuts.clone(), plan.level, Limits::default())
            }
            _ => power_entropy(&plan.scenario, *target, place, power, plan.level, Limits::default()),
        };
        let found = found.ok_or(CommitError::Unverified { x: target.x, y: target.y })?;
        *cover = Some(found.witness.witness().claim.clone());
        all.push(found);
    }
    Ok(all)
}

/// The factors that follow from one witness per target.
fn plan_factors(
    scenario: &Scenario,
    distribution: &[Vec<f64>],
    expected: &Table<f64>,
    power: u32,
    witnesses: &[&CheckedWitness],
) -> Result<Table<f64>, CommitError> {
    let mut bounds = Vec::new();
    for (target, witness) in scenario.targets().iter().zip(witnesses) {
        let (kappa, nu) = witness.affine(scenario.leakage(), scenario.leakage_holds())?;
        bounds.push(RoundBound::from_power(*target, power, &kappa, &nu).centred(expected));
    }
    Ok(factors(&bounds, distribution, power)?)
}

/// `√(2 ln(1/δ) / (n_T v))` with v the variance of `ln p` at the targets: the best power if the factors of the other settings did not
/// vary; the optimum lies below.
fn largest_power(plan: &Plan) -> f64 {
    let targets = plan.scenario.targets();
    let share: f64 = targets.iter().map(|t| plan.distribution[t.x][t.y]).sum();
    let variance = |target: &Setting| {
        let terms = plan.expected.at(*target).iter().filter(|p| **p > 0.0);
        let (mean, square) = terms.fold((0.0, 0.0), |(mean, square), p| (mean + p * p.ln(), square + p * p.ln().powi(2)));
        square - mean * mean
    };
    let spread = targets.iter().map(variance).fold(0.0, f64::max).max(0.1);
    (2.0 * (1.0 / plan.failure.estimation).ln() / (plan.rounds as f64 * share * spread)).sqrt().min(1.0)
}

fn power_near(beta: f64) -> u32 {
    let scale = f64::from(1u32 << POWER_BITS);
    (beta * scale).round().clamp(1.0, scale) as u32
}

/// Bits that a batch with exactly the expected frequencies would be certified.
fn expected_bits(plan: &Plan, factors: &Table<f64>, power: u32) -> f64 {
    let rounds = plan.rounds as f64;
    let mut sum = 0.0;
    let mut publication = 0.0;
    for setting in plan.scenario.geometry().settings() {
        let here = rounds * plan.distribution[setting.x][setting.y];
        let cells = plan.expected.at(setting).iter().zip(&factors[setting.x][setting.y]);
        sum += here * cells.map(|(p, factor)| p * log2_down(*factor)).sum::<f64>();
        publication += publication_cost(here.round() as u64, plan.scenario.geometry().outcomes);
    }
    let entropy = (sum - log2_up(1.0 / plan.failure.estimation)) / power_value(power);
    (entropy - publication - hashing_cost(plan.failure.hashing)).max(0.0).floor()
}

/// Shannon entropy of the setting distribution, bits per round, rounded up: what an ideal source of settings takes.
pub fn setting_cost(distribution: &[Vec<f64>]) -> f64 {
    distribution.iter().flatten().map(|p| -p * log2_down(*p)).fold(0.0, |sum: f64, term| (sum + term).next_up())
}

impl Commitment {
    /// The canonical bytes: compact JSON with the fields in the order of this type.
    pub fn canonical_json(&self) -> String {
        // Numbers are finite and keys are strings: serialisation cannot fail.
        serde_json::to_string(self).unwrap_or_default()
    }

    /// `sha256:` and the digest of the canonical bytes, in lower-case hexadecimal.
    pub fn digest(&self) -> String {
        format!("sha256:{}", hex::encode(Sha256::digest(self.canonical_json())))
    }

    /// Whether counts may be certified under the commitment.
    ///
    /// # Errors
    /// Another number of rounds; the pointer is empty.
    pub fn accepts(&self, counts: &Counts) -> Result<(), Fault> {
        let total = counts.total();
        if total == self.rounds {
            return Ok(());
        }
        Err(Fault::new("", format!("the commitment is for {} rounds, the counts add up to {total}", self.rounds)))
    }

    /// The account of a block. No solve is involved.
    pub fn account(&self, counts: &Counts) -> BlockCertificate {
        let table = counts.table();
        let log2_product = log2_product(table, &self.factors);
        let min_entropy = block_min_entropy(log2_product, self.power, self.failure.estimation);
        let geometry = self.scenario.geometry();
        let costs = geometry.settings().map(|setting| publication_cost(counts.rounds_at(setting), geometry.outcomes));
        let publication_cost = costs.fold(0.0, |sum: f64, cost| (sum + cost).next_up());
        let hashing_cost = hashing_cost(self.failure.hashing);
        let certified_bits = extractable(min_entropy, &[publication_cost, hashing_cost]);
        let per_round = if certified_bits > 0 { (certified_bits as f64 / counts.total() as f64).next_down() } else { 0.0 };
        BlockCertificate {
            commitment: self.digest(),
            target_rounds: self.scenario.targets().iter().map(|target| counts.rounds_at(*target)).sum(),
            log2_product,
            min_entropy,
            publication_cost,
            hashing_cost,
            certified_bits,
            setting_cost_per_round: self.setting_cost_per_round,
            net_bits_per_round: per_round - self.setting_cost_per_round,
        }
    }

    /// Confirms that the factors follow from the witnesses, which are checked first. Witnesses are given in the order of the targets.
    ///
    /// # Errors
    /// The first reason not to believe the commitment.
    pub fn confirm(&self, witnesses: &[&Witness]) -> Result<(), CommitmentFault> {
        let mut checked = Vec::new();
        for (target, committed) in self.scenario.targets().iter().zip(&self.targets) {
            let fault = |detail| CommitmentFault::Target { x: target.x, y: target.y, detail };
            if (committed.preparation, committed.measurement) != (target.x, target.y) {
                return Err(CommitmentFault::Targets);
            }
            let witness = witnesses.iter().find(|witness| witness.digest() == committed.witness).ok_or(fault("its witness is missing"))?;
            let bounds_it = matches!(&witness.claim, Claim::Power { target: of, power, .. } if of == target && *power >= self.power);
            if !bounds_it || witness.geometry != self.scenario.geometry() {
                return Err(fault("its witness proves something else"));
            }
            checked.push(check(witness)?);
        }
        if self.power == 0 {
            return Err(CommitmentFault::Power);
        }
        let FailureTotal { estimation, hashing, .. } = self.failure;
        if self.failure != FailureTotal::new(Failure { estimation, hashing }, &self.scenario) {
            return Err(Fault::new("/failure/total", "it is not the sum of the failure probabilities, rounded up").into());
        }
        if checked.len() != self.scenario.targets().len() || self.targets.len() != checked.len() {
            return Err(CommitmentFault::Targets);
        }
        check_distribution(&self.setting_distribution, self.scenario.geometry(), DISTRIBUTION_SLACK)?;
        Behaviour::try_new(self.expected_behaviour.clone(), self.scenario.geometry())?;
        let references: Vec<&CheckedWitness> = checked.iter().collect();
        let factors = plan_factors(&self.scenario, &self.setting_distribution, &self.expected_behaviour, self.power, &references)?;
        if factors != self.factors || setting_cost(&self.setting_distribution) != self.setting_cost_per_round {
            return Err(CommitmentFault::Factors);
        }
        Ok(())
    }
}

/// Why a commitment is not believed.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum CommitmentFault {
    #[error("preparation {x}, measurement {y}: {detail}")]
    Target { x: usize, y: usize, detail: &'static str },
    #[error("the targets of the commitment are not those of its scenario")]
    Targets,
    #[error("the power is zero")]
    Power,
    #[error("the factors do not follow from the witnesses")]
    Factors,
    #[error(transparent)]
    Witness(#[from] CheckError),
    #[error(transparent)]
    Document(#[from] Fault),
    #[error(transparent)]
    Underivable(#[from] CommitError),
}
