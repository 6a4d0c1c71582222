//! What is to be certified: a scenario, the counts or a stated behaviour, and how the rounds are accounted for.

use serde::{Deserialize, Serialize};

use crate::{
    counts::{Behaviour, Counts, Table},
    fault::Fault,
    relaxation::{
        cells::COVER_CELLS,
        cost::{LIMIT, choose, estimate},
        level::{Level, LevelChoice},
    },
    scenario::{Scenario, ScenarioDocument, Setting},
    score::{Score, check_scores},
};

/// What is assumed about the sequence of rounds.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(rename_all = "kebab-case")]
pub enum RoundModel {
    /// Frequencies are taken as probabilities. A diagnostic: no bits are released.
    PlugIn,
    /// Rounds are independent and identically distributed, given the distribution of the hidden variable.
    Independent,
    /// No independence is assumed; factors are committed ahead of the data.
    Memory,
}

/// Which entropy the certified bits come from.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Default, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(rename_all = "kebab-case")]
pub enum EntropyChoice {
    /// `power` wherever rounds are finite.
    #[default]
    Auto,
    /// The min-entropy, from the guessing probability of one round. The power entropy is shown, and no bits come from it.
    Guessing,
    /// A power entropy, which gives up to three times the bits, or the min-entropy where that gives more. Half of the estimation failure
    /// goes to the step from rounds to the block.
    Power,
}

/// Failure probabilities that the poster is willing to accept, each in `[1e-100, 0.5]`.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(deny_unknown_fields)]
pub struct Failure {
    /// That the confidence region misses the true behaviour.
    pub estimation: f64,
    /// Distance from uniform left by the two-universal hash.
    pub hashing: f64,
}

impl Default for Failure {
    fn default() -> Self {
        Self { estimation: 1e-10, hashing: 1e-10 }
    }
}

impl Failure {
    /// # Errors
    /// The first probability outside `[1e-100, 0.5]`.
    pub fn check(&self) -> Result<(), Fault> {
        for (name, value) in [("estimation", self.estimation), ("hashing", self.hashing)] {
            if !(1e-100..=0.5).contains(&value) {
                return Err(Fault::new(format!("/{name}"), format!("a failure probability is from 1e-100 to 0.5, is {value}")));
            }
        }
        Ok(())
    }
}

/// Rounds in which no outcome was registered, per setting `[x][y]`, and what the poster asks to be done with them.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(deny_unknown_fields)]
pub struct LostRounds {
    pub counts: Vec<Vec<u64>>,
    pub treatment: LostTreatment,
}

#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(rename_all = "kebab-case")]
pub enum LostTreatment {
    /// They are left out, on the explicit assumption that a loss does not depend on the setting or the would-be outcome.
    FairSampling,
    /// They are counted as this outcome. Always allowed.
    AsOutcome(usize),
}

/// The document that `certify` reads and that a posted batch and its rig's profile make together.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct RequestDocument {
    pub scenario: ScenarioDocument,
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub counts: Option<Table<u64>>,
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub behaviour: Option<Table<f64>>,
    /// In place of counts or a behaviour, with "plug-in" only: linear scores that the behaviour reaches.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub scores: Option<Vec<Score>>,
    pub rounds: RoundModel,
    #[serde(default)]
    pub failure: Failure,
    #[serde(default)]
    pub level: LevelChoice,
    #[serde(default)]
    pub entropy: EntropyChoice,
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub lost_rounds: Option<LostRounds>,
    /// Whether explicit attacks are to be sought as well, which say how much the bounds may give away. Changes no certified figure.
    #[serde(default, skip_serializing_if = "std::ops::Not::not")]
    pub bracket: bool,
}

/// Counts, or probabilities in their place.
#[derive(Debug, Clone, PartialEq)]
pub enum Data {
    Counts(Counts),
    Behaviour(Behaviour),
    /// Only scores of the behaviour are known.
    Scores(Vec<Score>),
}

/// A valid request.
#[derive(Debug, Clone, PartialEq)]
pub struct Request {
    pub(crate) scenario: Scenario,
    pub(crate) data: Data,
    pub(crate) rounds: RoundModel,
    pub(crate) failure: Failure,
    pub(crate) level: LevelChoice,
    /// The level that the choice comes to for guessing probabilities.
    pub(crate) start: Level,
    /// The same for power entropies, which have more groups; `None` where no level is affordable.
    pub(crate) power_start: Option<Level>,
    pub(crate) entropy: EntropyChoice,
    pub(crate) lost_rounds: Option<LostRounds>,
    pub(crate) bracket: bool,
}

/// The levels that a choice comes to in a scenario. To find them out means to go through all words of each level, so they are kept with a profile.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Starts {
    guessing: Level,
    /// Power entropies have more groups; `None` where no level is affordable.
    power: Option<Level>,
}

impl Starts {
    /// # Errors
    /// As [`choose`].
    pub fn of(level: LevelChoice, scenario: &Scenario) -> Result<Self, Fault> {
        let guessing = choose(level, scenario, scenario.geometry().outcomes)?;
        // A level that was asked for may be too much for so many groups; then the next coarser one that is not.
        let affordable = |level: &Level| estimate(*level, scenario, COVER_CELLS) <= LIMIT;
        let power = match level {
            LevelChoice::Auto => choose(level, scenario, COVER_CELLS).ok(),
            _ => std::iter::successors(Some(guessing), |level| level.coarser()).find(affordable),
        };
        Ok(Self { guessing, power })
    }
}

impl TryFrom<RequestDocument> for Request {
    type Error = Fault;

    fn try_from(document: RequestDocument) -> Result<Self, Fault> {
        Self::read(document, None)
    }
}

impl Request {
    /// As the conversion, with starts that were found for the same choice in the same geometry with the same preparations exactly leak-free.
    pub(crate) fn read(document: RequestDocument, starts: Option<Starts>) -> Result<Self, Fault> {
        let RequestDocument { scenario, counts, behaviour, scores, rounds, failure, level, entropy, lost_rounds, bracket } = document;
        let scenario = Scenario::try_from(scenario).map_err(|fault| fault.under("/scenario"))?;
        failure.check().map_err(|fault| fault.under("/failure"))?;
        let Starts { guessing: start, power: power_start } = starts.map_or_else(|| Starts::of(level, &scenario), Ok)?;
        if rounds == RoundModel::Memory {
            return Err(Fault::new("/rounds", "rounds with memory need a commitment recorded before the data: post them to the service"));
        }
        let geometry = scenario.geometry();
        let data = match (counts, behaviour, scores) {
            (Some(mut table), None, None) => {
                if let Some(lost) = &lost_rounds {
                    lost.fold_into(&mut table, geometry.outcomes)?;
                }
                Data::Counts(Counts::try_new(table, geometry).map_err(|fault| fault.under("/counts"))?)
            }
            (None, Some(table), None) => {
                if rounds != RoundModel::PlugIn {
                    return Err(Fault::new("/behaviour", "a stated behaviour has no rounds: it goes with \"plug-in\" only"));
                }
                if lost_rounds.is_some() {
                    return Err(Fault::new("/lost_rounds", "a stated behaviour has no rounds to lose"));
                }
                Data::Behaviour(Behaviour::try_new(table, geometry).map_err(|fault| fault.under("/behaviour"))?)
            }
            (None, None, Some(scores)) => {
                if rounds != RoundModel::PlugIn {
                    return Err(Fault::new("/scores", "a stated score has no rounds: it goes with \"plug-in\" only"));
                }
                if lost_rounds.is_some() {
                    return Err(Fault::new("/lost_rounds", "a stated score has no rounds to lose"));
                }
                check_scores(&scores, geometry).map_err(|fault| fault.under("/scores"))?;
                Data::Scores(scores)
            }
            (Some(_), Some(_), _) => return Err(Fault::new("/behaviour", "give counts or a behaviour, not both")),
            (_, _, Some(_)) => return Err(Fault::new("/scores", "give scores in place of counts or a behaviour, not besides")),
            (None, None, None) => return Err(Fault::new("/counts", "counts are missing")),
        };
        Ok(Self { scenario, data, rounds, failure, level, start, power_start, entropy, lost_rounds, bracket })
    }
}

impl LostRounds {
    /// Adds the lost rounds to the counts if they are to be counted as an outcome.
    pub(crate) fn fold_into(&self, table: &mut Table<u64>, outcomes: usize) -> Result<(), Fault> {
        let shape = |pointer: String| Fault::new(pointer, "needs one number per preparation and measurement, as the counts have");
        if self.counts.len() != table.len() {
            return Err(shape("/lost_rounds/counts".into()));
        }
        for (x, (lost, counted)) in self.counts.iter().zip(table.iter_mut()).enumerate() {
            if lost.len() != counted.len() {
                return Err(shape(format!("/lost_rounds/counts/{x}")));
            }
            let LostTreatment::AsOutcome(outcome) = self.treatment else { continue };
            if outcome >= outcomes {
                let detail = format!("there is no outcome {outcome}; they are numbered from 0 to {}", outcomes - 1);
                return Err(Fault::new("/lost_rounds/treatment/as-outcome", detail));
            }
            for (n, cells) in lost.iter().zip(counted) {
                if let Some(cell) = cells.get_mut(outcome) {
                    *cell = cell.saturating_add(*n);
                }
            }
        }
        Ok(())
    }

    pub fn total(&self) -> u64 {
        self.counts.iter().flatten().fold(0, |sum: u64, n| sum.saturating_add(*n))
    }
}

impl Request {
    pub fn scenario(&self) -> &Scenario {
        &self.scenario
    }

    pub fn data(&self) -> &Data {
        &self.data
    }

    /// Rounds at a setting; `None` for a stated behaviour.
    pub fn rounds_at(&self, setting: Setting) -> Option<u64> {
        match &self.data {
            Data::Counts(counts) => Some(counts.rounds_at(setting)),
            Data::Behaviour(_) | Data::Scores(_) => None,
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::scenario::{LeakageDocument, LeakageReading};
    /// A level that is affordable for guessing probabilities alone is no reason to bound power entropies more loosely than the level below.
    #[test]
    fn a_sharper_level_starts_no_coarser_anywhere() {
        let document = ScenarioDocument {
            preparations: 4,
            measurements: 2,
            outcomes: 2,
            carrier_dimension: 2,
            leakage: LeakageDocument::Uniform(1e-2),
            leakage_holds: LeakageReading::OnAverage,
            targets: vec![Setting { x: 0, y: 0 }],
        };
        let scenario = Scenario::try_from(document).unwrap();
        let [sharp, keen] = [LevelChoice::Sharp, LevelChoice::Keen].map(|level| Starts::of(level, &scenario).unwrap());
        assert_eq!((keen.guessing, sharp.guessing), (Level::Keen, Level::Sharp));
        assert!(keen.power >= sharp.power, "{keen:?} {sharp:?}");
        assert!(choose(LevelChoice::Keen, &scenario, COVER_CELLS).is_err(), "nothing is tried here");
    }
}
