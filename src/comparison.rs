//! Independent rounds against rounds with memory: what would be certified of the same behaviour, over the number of rounds and the way in which
//! settings are chosen, and what is left once the choice of the settings is paid for.
//!
//! A power witness holds for every smaller power and for every behaviour, so a few of them serve all numbers of rounds and all setting
//! distributions: one for the expected behaviour at each power of a ladder, and one for each number of rounds that is the best in the
//! confidence region which so many rounds would give. Each figure is the best over all of these, which is allowed in both models: with memory
//! they are chosen ahead of the data, and with independent rounds all of them hold at once. The counts are the expected ones, without
//! fluctuations, so a figure is what to expect and no bound.

use serde::{Deserialize, Serialize};

use crate::{
    bound::{Answer, Found, guessing_probability, power_entropy},
    commitment::{CommitmentDocument, Plan, expected_of, setting_cost},
    counts::{Counts, Table},
    entropy::{
        extraction::{extractable, hashing_cost, publication_cost},
        independent::{block_min_entropy, power_for},
        power::POWER_BITS,
    },
    fault::Fault,
    relaxation::level::{Level, LevelChoice},
    request::Failure,
    scenario::{Scenario, ScenarioDocument, Setting},
    solver::Limits,
    statistics::region::region,
    witness::check::{CheckedWitness, Place},
};

/// Powers of the ladder, `β = 2^-k`; each serves all powers down to the next.
const LADDER: [u32; 6] = [3, 5, 7, 9, 11, 13];

/// What is to be compared. Shape: `expected_behaviour` is `[x][y][b]`.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct ComparisonDocument {
    pub scenario: ScenarioDocument,
    pub expected_behaviour: Table<f64>,
    #[serde(default)]
    pub failure: Failure,
    #[serde(default)]
    pub level: LevelChoice,
}

/// A valid comparison.
#[derive(Debug, Clone, PartialEq)]
pub struct Comparison {
    document: ComparisonDocument,
    scenario: Scenario,
    level: Level,
}

/// How settings are drawn.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Draw {
    /// All alike.
    Uniform,
    /// The targets share this fraction of the rounds, the other settings the rest; each alike. Above 0 and below 1.
    TargetShare(f64),
}

/// One line of the table.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Line {
    pub rounds: u64,
    /// Fraction of the rounds at target settings.
    pub target_share: f64,
    /// Random bits that choosing the settings takes, per round, rounded up.
    pub setting_cost_per_round: f64,
    pub independent: Figures,
    pub memory: Figures,
}

/// What is certified of so many rounds in one model, after publication and hashing.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct Figures {
    pub bits: u64,
    pub bits_per_target_round: f64,
    /// Certified bits minus the bits that the settings take, per round; negative where more goes in than comes out.
    pub net_bits_per_round: f64,
}

impl TryFrom<ComparisonDocument> for Comparison {
    type Error = Fault;

    fn try_from(document: ComparisonDocument) -> Result<Self, Fault> {
        let uniform = |geometry: crate::scenario::Geometry| {
            let share = 1.0 / (geometry.preparations * geometry.measurements) as f64;
            vec![vec![share; geometry.measurements]; geometry.preparations]
        };
        let scenario = Scenario::try_from(document.scenario.clone()).map_err(|fault| fault.under("/scenario"))?;
        // A plan for a single round has everything checked that the plans below have in common.
        let level = Plan::try_from(document.plan(uniform(scenario.geometry()), 1))?.level();
        Ok(Self { document, scenario, level })
    }
}

impl ComparisonDocument {
    fn plan(&self, setting_distribution: Vec<Vec<f64>>, rounds: u64) -> CommitmentDocument {
        let Self { scenario, expected_behaviour, failure, level } = self.clone();
        CommitmentDocument { scenario, expected_behaviour, setting_distribution, rounds, failure, level }
    }
}

/// Witnesses of all targets for one power, in the order of the targets.
struct Set {
    power: u32,
    witnesses: Vec<CheckedWitness>,
}

impl Comparison {
    /// One line for each number of rounds and each way of drawing settings; `progress` is told of every witness before it is made.
    ///
    /// # Errors
    /// Rounds that are too few or too many, a share that is none, or targets that no witness is found for.
    pub fn table(&self, rounds: &[u64], draws: &[Draw], mut progress: impl FnMut(usize, usize)) -> Result<Vec<Line>, Fault> {
        self.check_model()?;
        let sets = self.sets(rounds, &mut progress)?;
        let mut lines = Vec::new();
        for n in rounds {
            for draw in draws {
                lines.push(self.line(*n, *draw, &sets)?);
            }
        }
        Ok(lines)
    }

    /// Bounds say nothing about a behaviour that no model has.
    fn check_model(&self) -> Result<(), Fault> {
        let Some(target) = self.scenario.targets().first() else { return Ok(()) };
        let place = Place::Behaviour(&self.document.expected_behaviour);
        match guessing_probability(&self.scenario, *target, place, self.level, Limits::default()) {
            Answer::Outside(_) => {
                Err(Fault::new("/expected_behaviour", "cannot come from a carrier of the declared dimension with the declared leakage"))
            }
            Answer::Bounded(_) | Answer::Unverified => Ok(()),
        }
    }

    fn sets(&self, rounds: &[u64], progress: &mut impl FnMut(usize, usize)) -> Result<Vec<Set>, Fault> {
        let total = LADDER.len() + rounds.len();
        let mut sets = Vec::new();
        for (done, k) in LADDER.iter().enumerate() {
            progress(done, total);
            sets.push(self.set(1 << (POWER_BITS - k), Place::Behaviour(&self.document.expected_behaviour))?);
        }
        for (done, n) in rounds.iter().enumerate() {
            progress(LADDER.len() + done, total);
            let counts = self.counts(*n, &self.distribution(Draw::Uniform)?)?;
            let target = self.scenario.targets().first().map_or(1, |target| counts.rounds_at(*target));
            let intervals = region(&counts, self.document.failure.estimation / 2.0);
            sets.push(self.set(power_for(target, self.document.failure.estimation / 2.0), Place::Region(&intervals))?);
        }
        Ok(sets)
    }

    fn set(&self, power: u32, place: Place) -> Result<Set, Fault> {
        let missing = |target: &Setting| {
            Fault::new("", format!("no witness passed the exact check for preparation {}, measurement {}", target.x, target.y))
        };
        let found = |target: &Setting| -> Result<CheckedWitness, Fault> {
            let found: Option<Found> = power_entropy(&self.scenario, *target, place, power, self.level, Limits::default());
            found.map(|found| found.witness).ok_or_else(|| missing(target))
        };
        Ok(Set { power, witnesses: self.scenario.targets().iter().map(found).collect::<Result<_, _>>()? })
    }

    /// `π(x,y)`, `[x][y]`.
    fn distribution(&self, draw: Draw) -> Result<Vec<Vec<f64>>, Fault> {
        let geometry = self.scenario.geometry();
        let targets = self.scenario.targets();
        let settings = geometry.preparations * geometry.measurements;
        let (of_target, of_other) = match draw {
            Draw::Uniform => (1.0 / settings as f64, 1.0 / settings as f64),
            Draw::TargetShare(share) if share > 0.0 && share < 1.0 && settings > targets.len() => {
                (share / targets.len() as f64, (1.0 - share) / (settings - targets.len()) as f64)
            }
            Draw::TargetShare(share) => {
                return Err(Fault::new("", format!("the targets share a fraction above 0 and below 1 of the rounds, not {share}")));
            }
        };
        let probability = |x, y| if targets.contains(&Setting { x, y }) { of_target } else { of_other };
        Ok((0..geometry.preparations).map(|x| (0..geometry.measurements).map(|y| probability(x, y)).collect()).collect())
    }

    /// The expected counts, in whole rounds.
    fn counts(&self, rounds: u64, distribution: &[Vec<f64>]) -> Result<Counts, Fault> {
        let of_setting = |probabilities: &Vec<f64>, share: &f64| -> Vec<u64> {
            probabilities.iter().map(|p| (p * share * rounds as f64).round() as u64).collect()
        };
        let rows = self.document.expected_behaviour.iter().zip(distribution);
        let table = rows.map(|(table, shares)| table.iter().zip(shares).map(|(p, share)| of_setting(p, share)).collect()).collect();
        Counts::try_new(table, self.scenario.geometry()).map_err(|fault| Fault::new("", format!("{rounds} rounds: {}", fault.detail)))
    }

    fn line(&self, rounds: u64, draw: Draw, sets: &[Set]) -> Result<Line, Fault> {
        let distribution = self.distribution(draw)?;
        let target_share: f64 = self.scenario.targets().iter().map(|target| distribution[target.x][target.y]).sum();
        let setting_cost_per_round = setting_cost(&distribution);
        let figures = |bits: u64| Figures {
            bits,
            bits_per_target_round: bits as f64 / (rounds as f64 * target_share),
            net_bits_per_round: bits as f64 / rounds as f64 - setting_cost_per_round,
        };
        let independent = figures(self.independent(&self.counts(rounds, &distribution)?, sets));
        let plan = Plan::try_from(self.document.plan(distribution, rounds))?;
        let memory = sets.iter().map(|set| expected_of(&plan, set.power, &set.witnesses.iter().collect::<Vec<_>>()));
        let memory = figures(memory.fold(0.0, f64::max) as u64);
        Ok(Line { rounds, target_share, setting_cost_per_round, independent, memory })
    }

    /// As a batch with a power entropy is certified, half of the estimation failure for the region and half for the block.
    fn independent(&self, counts: &Counts, sets: &[Set]) -> u64 {
        let Failure { estimation, hashing } = self.document.failure;
        let targets = self.scenario.targets();
        let intervals = region(counts, estimation / 2.0);
        let failure = (estimation / 2.0 / targets.len() as f64).next_down();
        let hashing = hashing_cost((hashing / targets.len() as f64).next_down());
        let mut bits = 0;
        for (i, target) in targets.iter().enumerate() {
            let rounds = counts.rounds_at(*target);
            let publication = publication_cost(rounds, self.scenario.geometry().outcomes);
            let of_set = |set: &Set| {
                let bound = set.witnesses.get(i)?.bound(Place::Region(&intervals), self.scenario.leakage(), self.scenario.leakage_holds());
                let entropy = block_min_entropy(bound.ok()?.exact(), rounds, power_for(rounds, failure).min(set.power), failure);
                Some(extractable(entropy, &[publication, hashing]))
            };
            bits += sets.iter().filter_map(of_set).max().unwrap_or(0);
        }
        bits
    }
}
