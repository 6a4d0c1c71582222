//! What is to be forecast: a scenario, an expected behaviour, and what is varied.

use serde::{Deserialize, Serialize};

use super::{
    curve::Kind,
    sweep::{MAX_POINTS, Sweep, Swept},
};
use crate::{
    counts::{Behaviour, Counts, MAX_ROUNDS, Table, check_distribution},
    fault::Fault,
    relaxation::{
        cells::COVER_CELLS,
        cost::{choose, estimate},
        level::{Level, LevelChoice},
    },
    request::{EntropyChoice, Failure, RoundModel},
    scenario::{Geometry, LeakageDocument, Scenario, ScenarioDocument},
    statistics::region::frequencies,
};

/// What sharing may cost unless the request says otherwise, in bits per target round: a width or two of a line in the picture.
const LOSS: f64 = 1.5e-3;
/// The most that may be asked for.
const MOST_LOSS: f64 = 0.1;
/// How far the probabilities of settings may miss 1 in all.
const DISTRIBUTION_SLACK: f64 = 1e-12;
/// Solves that a search for a threshold or a number of rounds is taken to need, per curve.
const SEARCH_SOLVES: usize = 12;

/// Points of a curve that are attacked unless the request says otherwise.
const ATTACKS: usize = 9;
/// Seconds that an attack is taken to cost for each probability of the behaviour: 5 s were measured for the 2→1 code, which has 16.
const ATTACK: f64 = 0.3;

/// How closely thresholds are bracketed, for each quantity that one is wanted of.
#[derive(Debug, Clone, Copy, PartialEq, Default, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(deny_unknown_fields)]
pub struct ThresholdsDocument {
    /// Largest leakage that still certifies: the ends of the bracket differ by at most this share, from 0.0001 to 1.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub leakage: Option<f64>,
    /// Smallest visibility that still certifies: the ends differ by at most this, from 0.00001 to 0.5.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub visibility: Option<f64>,
}

/// The document that `forecast` reads. Shapes: `counts` and `behaviour` are `[x][y][b]`, `setting_distribution` is `[x][y]`.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(deny_unknown_fields)]
pub struct ForecastDocument {
    pub scenario: ScenarioDocument,
    /// Counts of an earlier batch, whose frequencies are taken for the behaviour to come.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    #[cfg_attr(feature = "service", schema(value_type = Option<Vec<Vec<Vec<u64>>>>))]
    pub counts: Option<Table<u64>>,
    /// Probabilities, in place of counts.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    #[cfg_attr(feature = "service", schema(value_type = Option<Vec<Vec<Vec<f64>>>>))]
    pub behaviour: Option<Table<f64>>,
    /// One curve or two for each. `plug-in` is the limit of many rounds; `memory` has none by guessing.
    pub rounds: Vec<RoundModel>,
    /// With `power`, curves of power entropies are added to those of the guessing probability. They take several times as long.
    #[serde(default)]
    pub entropy: EntropyChoice,
    /// All rounds of a batch; with counts, by default as many as those.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub total_rounds: Option<u64>,
    /// Probability of each setting; by default as in the counts, without counts uniform.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub setting_distribution: Option<Vec<Vec<f64>>>,
    /// Weight of the behaviour in a mixture with white noise where visibility is not varied.
    #[serde(default = "one")]
    pub visibility: f64,
    #[serde(default)]
    pub failure: Failure,
    #[serde(default)]
    pub level: LevelChoice,
    pub sweep: Sweep,
    /// How much a point may give away, in bits per target round, because it shares the witness of another one: from 0 (none is shared unless
    /// that costs nothing) to 0.1.
    #[serde(default = "loss")]
    pub loss: f64,
    #[serde(default)]
    pub thresholds: ThresholdsDocument,
    /// Asks how many rounds are needed for this many bits.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub wanted_bits: Option<u64>,
    /// Seeks explicit attacks on points of plug-in curves, and shows what they leave next to what is certified. An attack takes longer than a
    /// solve.
    #[serde(default, skip_serializing_if = "std::ops::Not::not")]
    pub bracket: bool,
    /// On so many points of each curve, evenly spread, both ends among them; by default 9.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub attacks: Option<usize>,
}

fn one() -> f64 {
    1.0
}

fn loss() -> f64 {
    LOSS
}

/// A valid request for a forecast.
#[derive(Debug, Clone, PartialEq)]
pub struct ForecastRequest {
    pub(super) scenario: Scenario,
    pub(super) behaviour: Behaviour,
    pub(super) distribution: Vec<Vec<f64>>,
    pub(super) kinds: Vec<Kind>,
    pub(super) total_rounds: Option<u64>,
    pub(super) visibility: f64,
    pub(super) failure: Failure,
    pub(super) level: LevelChoice,
    pub(super) start: Level,
    pub(super) sweep: Sweep,
    pub(super) values: Vec<f64>,
    pub(super) loss: f64,
    pub(super) thresholds: ThresholdsDocument,
    pub(super) wanted_bits: Option<u64>,
    /// Points of each plug-in curve that are attacked.
    pub(super) attacks: usize,
}

/// What holds at one point of the grid.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct Setup {
    pub leakage: Vec<f64>,
    pub visibility: f64,
    pub rounds: Option<u64>,
}

impl TryFrom<ForecastDocument> for ForecastRequest {
    type Error = Fault;

    fn try_from(document: ForecastDocument) -> Result<Self, Fault> {
        let ForecastDocument { scenario, counts, behaviour, rounds, entropy, total_rounds, setting_distribution, visibility, .. } =
            document;
        let ForecastDocument { failure, level, sweep, loss, thresholds, wanted_bits, bracket, attacks, .. } = document;
        let scenario = Scenario::try_from(scenario).map_err(|fault| fault.under("/scenario"))?;
        let geometry = scenario.geometry();
        failure.check().map_err(|fault| fault.under("/failure"))?;
        let values = sweep.values().map_err(|fault| fault.under("/sweep"))?;
        let kinds = kinds(&rounds, entropy)?;
        let (behaviour, counted) = match (counts, behaviour) {
            (Some(table), None) => {
                let counts = Counts::try_new(table, geometry).map_err(|fault| fault.under("/counts"))?;
                let table = frequencies(&counts);
                (Behaviour::try_new(table, geometry).map_err(|fault| fault.under("/counts"))?, Some(counts))
            }
            (None, Some(table)) => (Behaviour::try_new(table, geometry).map_err(|fault| fault.under("/behaviour"))?, None),
            (Some(_), Some(_)) => return Err(Fault::new("/behaviour", "give counts or a behaviour, not both")),
            (None, None) => return Err(Fault::new("/behaviour", "give a behaviour, or counts in its place")),
        };
        let total_rounds = total_rounds.or(counted.as_ref().map(Counts::total));
        if total_rounds.is_some_and(|rounds| !(1..=MAX_ROUNDS).contains(&rounds)) {
            return Err(Fault::new("/total_rounds", format!("a batch has 1 to {MAX_ROUNDS} rounds")));
        }
        let finite = kinds.iter().any(|kind| kind.rounds != RoundModel::PlugIn);
        if finite && total_rounds.is_none() && (sweep.swept() != Swept::Rounds || thresholds != ThresholdsDocument::default()) {
            return Err(Fault::new("/total_rounds", "rounds that are not plug-in need a number: state it, or give counts"));
        }
        if sweep.swept() == Swept::Rounds && !finite {
            return Err(Fault::new("/sweep/rounds", "plug-in figures do not depend on the number of rounds"));
        }
        if wanted_bits.is_some() && !finite {
            return Err(Fault::new("/wanted_bits", "no bits are released from plug-in figures, however many rounds there are"));
        }
        if wanted_bits == Some(0) {
            return Err(Fault::new("/wanted_bits", "has to be at least 1"));
        }
        let attacks = attacked(bracket, attacks, &kinds)?;
        let distribution = match (setting_distribution, &counted) {
            (Some(distribution), _) => distribution,
            (None, Some(counts)) => shares(counts),
            (None, None) => {
                let settings = geometry.preparations * geometry.measurements;
                vec![vec![1.0 / settings as f64; geometry.measurements]; geometry.preparations]
            }
        };
        check_distribution(&distribution, geometry, DISTRIBUTION_SLACK).map_err(|fault| fault.under("/setting_distribution"))?;
        within("/visibility", visibility, 0.0, 1.0)?;
        within("/loss", loss, 0.0, MOST_LOSS)?;
        thresholds.leakage.map_or(Ok(()), |tolerance| within("/thresholds/leakage", tolerance, 1e-4, 1.0))?;
        thresholds.visibility.map_or(Ok(()), |tolerance| within("/thresholds/visibility", tolerance, 1e-5, 0.5))?;
        // Leaking carriers are the larger ones; where leakage is varied or searched for, they are what will be solved.
        let leaking = sweep.swept() == Swept::Leakage || thresholds.leakage.is_some();
        let largest = if leaking { scenario.clone().with_leakage(LeakageDocument::Uniform(1.0))? } else { scenario.clone() };
        let start = choose(level, &largest, groups(entropy, geometry))?;
        Ok(Self {
            scenario,
            behaviour,
            distribution,
            kinds,
            total_rounds,
            visibility,
            failure,
            level,
            start,
            sweep,
            values,
            loss,
            thresholds,
            wanted_bits,
            attacks,
        })
    }
}

fn within(pointer: &str, value: f64, low: f64, high: f64) -> Result<(), Fault> {
    if (low..=high).contains(&value) { Ok(()) } else { Err(Fault::new(pointer, format!("is from {low} to {high}, not {value}"))) }
}

/// Most groups of a question about an entropy.
fn groups(entropy: EntropyChoice, geometry: Geometry) -> usize {
    match entropy {
        EntropyChoice::Guessing => geometry.outcomes,
        EntropyChoice::Auto | EntropyChoice::Power => COVER_CELLS,
    }
}

/// The curves that are asked for.
fn kinds(rounds: &[RoundModel], entropy: EntropyChoice) -> Result<Vec<Kind>, Fault> {
    if rounds.is_empty() {
        return Err(Fault::new("/rounds", "at least one round model is needed"));
    }
    let mut kinds = Vec::new();
    for (i, model) in rounds.iter().enumerate() {
        if rounds[..i].contains(model) {
            return Err(Fault::new(format!("/rounds/{i}"), "this round model is listed twice"));
        }
        if *model == RoundModel::Memory && entropy == EntropyChoice::Guessing {
            return Err(Fault::new(
                format!("/rounds/{i}"),
                "rounds with memory are certified by power entropies, not by guessing probabilities",
            ));
        }
        if *model != RoundModel::Memory {
            kinds.push(Kind { rounds: *model, entropy: EntropyChoice::Guessing });
        }
        if entropy != EntropyChoice::Guessing {
            kinds.push(Kind { rounds: *model, entropy: EntropyChoice::Power });
        }
    }
    Ok(kinds)
}

/// How many points of a curve are attacked.
fn attacked(bracket: bool, attacks: Option<usize>, kinds: &[Kind]) -> Result<usize, Fault> {
    match (bracket, attacks) {
        (false, None) => Ok(0),
        (false, Some(_)) => Err(Fault::new("/attacks", "attacks are sought only with \"bracket\": true")),
        (true, _) if kinds.iter().all(|kind| kind.rounds != RoundModel::PlugIn) => {
            let detail = "an attack is on the limit of many rounds: list \"plug-in\" among the round models";
            Err(Fault::new("/bracket", detail))
        }
        (true, Some(attacks)) if !(1..=MAX_POINTS).contains(&attacks) => {
            Err(Fault::new("/attacks", format!("is from 1 to {MAX_POINTS}, not {attacks}")))
        }
        (true, attacks) => Ok(attacks.unwrap_or(ATTACKS)),
    }
}

/// The share of each setting in the rounds of a batch.
fn shares(counts: &Counts) -> Vec<Vec<f64>> {
    let total = counts.total() as f64;
    counts.table().iter().map(|rows| rows.iter().map(|values| values.iter().sum::<u64>() as f64 / total).collect()).collect()
}

impl ForecastRequest {
    /// Estimated seconds of computing the forecast if no witness were shared, see [`crate::relaxation::cost`].
    pub fn cost(&self) -> f64 {
        let thresholds = usize::from(self.thresholds.leakage.is_some()) + usize::from(self.thresholds.visibility.is_some());
        let searches = thresholds + usize::from(self.wanted_bits.is_some());
        let points = (self.values.len() + searches * SEARCH_SOLVES) * self.scenario.targets().len();
        let leaking = self.scenario.clone().with_leakage(LeakageDocument::Uniform(1.0)).unwrap_or_else(|_| self.scenario.clone());
        let of = |kind: &Kind| estimate(self.start, &leaking, groups(kind.entropy, self.scenario.geometry()));
        let attacked = self.kinds.iter().filter(|kind| kind.rounds == RoundModel::PlugIn).count();
        let attacks = attacked * self.attacks.min(self.values.len()) * self.scenario.targets().len();
        let Geometry { preparations, measurements, outcomes, .. } = self.scenario.geometry();
        let attack = ATTACK * (preparations * measurements * outcomes) as f64;
        points as f64 * self.kinds.iter().map(of).sum::<f64>() + attacks as f64 * attack
    }

    /// What is not varied.
    pub(super) fn base(&self) -> Setup {
        Setup { leakage: self.scenario.leakage().to_vec(), visibility: self.visibility, rounds: self.total_rounds }
    }

    /// What holds where the quantity has this value.
    pub(super) fn setup(&self, swept: Swept, value: f64) -> Setup {
        let base = self.base();
        match swept {
            Swept::Leakage => Setup { leakage: vec![value; base.leakage.len()], ..base },
            Swept::Visibility => Setup { visibility: value, ..base },
            Swept::Rounds => Setup { rounds: Some(value as u64), ..base },
        }
    }
}
