//! What an explicit attack leaves, next to what is certified.
//!
//! Only plug-in figures have a bracket: they are entropies per round in the limit of many rounds, and a model with the expected behaviour, repeated,
//! leaves no more of them than its own. Attacks on neighbouring points begin with each other's strategies. The check of a model knows nothing of where
//! its strategies come from.

use serde::{Deserialize, Serialize};

use super::{
    curve::{Case, Forecaster, Kind, LIMIT_POWER, Point, Progress},
    request::Setup,
    shared::{Spot, Standing},
};
use crate::{
    attack::{Attack, Effort, Hints, attack, objective::Objective, strategy::Strategy},
    certificate::Reason,
    certify::LARGEST_RESIDUAL,
    request::EntropyChoice,
    scenario::{LeakageReading, Scenario, Setting},
    witness::check::{CheckedWitness, Place},
};

/// The least entropy of the curve's kind that a model within the declaration leaves lies between these two, up to the residual. Another kind of
/// entropy may certify more: the power entropy is often above what an attack leaves of the min-entropy.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(deny_unknown_fields)]
pub struct PointBracket {
    /// Bits per target round that an explicit model within the leakage leaves, rounded up.
    pub attack: f64,
    /// Bits per target round by the bound, as above.
    pub bound: f64,
    /// By how much the model's probabilities may miss the expected behaviour.
    pub residual: f64,
}

impl Forecaster<'_> {
    /// Attacks as many points of a plug-in curve as the request says.
    pub fn add_brackets(&self, kind: Kind, setups: &[Setup], points: &mut [Point], told: &mut dyn FnMut(Progress)) {
        let mut known: Vec<Vec<Strategy>> = vec![vec![]; self.request.scenario.targets().len()];
        let spread = spread(points.len(), self.request.attacks);
        for (attacks, i) in spread.into_iter().enumerate() {
            let (Some(setup), Some(point)) = (setups.get(i), points.get_mut(i)) else { continue };
            if point.reason != Some(Reason::OutsideModel)
                && let Some(case) = Case::new(self.request, kind, setup)
            {
                point.bracket = self.bracket(kind, &case, point.bits_per_target_round, &mut known);
            }
            told(Progress { kind, settled: setups.len(), points: setups.len(), solves: self.solves(), attacks: attacks + 1 });
        }
    }

    /// `None` unless every target has an attack.
    fn bracket(&self, kind: Kind, case: &Case, bound: f64, known: &mut [Vec<Strategy>]) -> Option<PointBracket> {
        let (mut bits, mut shares, mut residual) = (0.0, 0.0, 0.0f64);
        for ((t, target), known) in self.request.scenario.targets().iter().enumerate().zip(known) {
            let found = self.attack(kind, case, t, *target, known)?;
            known.clear();
            known.extend(found.model.parts.iter().map(|part| part.strategy.clone()));
            let share = self.request.distribution[target.x][target.y];
            bits += share * left(kind, &found);
            shares += share;
            residual = residual.max(found.residual);
        }
        let attack = (bits / shares) * (1.0 + 8.0 * f64::EPSILON);
        Some(PointBracket { attack, bound, residual })
    }

    /// The best attack found on one target; none that the witness of the bound contradicts.
    fn attack(&self, kind: Kind, case: &Case, t: usize, target: Setting, known: &[Strategy]) -> Option<Attack> {
        let (kept, power) = match kind.entropy {
            EntropyChoice::Guessing => (&self.guessing, 0),
            EntropyChoice::Auto | EntropyChoice::Power => (&self.power, LIMIT_POWER),
        };
        let shared = kept.get(t)?;
        let spot = Spot { evidence: case.evidence.clone(), leakage: case.leakage.clone(), power };
        let witness = match shared.standing(&spot) {
            Standing::Bounded { number, .. } => shared.found(number).map(|found| &found.witness),
            Standing::Outside | Standing::Unverified => None,
        };
        let scenario = case.request.scenario();
        let usable: Vec<Strategy> = known.iter().filter(|strategy| is_usable(strategy, scenario)).cloned().collect();
        let hints = Hints { witness, known: &usable };
        let found = attack(scenario, target, case.evidence.place(), objective(kind), hints, Effort::default())?;
        let fits = found.residual <= LARGEST_RESIDUAL && witness.is_none_or(|witness| is_allowed(kind, case, witness, &found));
        fits.then_some(found)
    }
}

fn objective(kind: Kind) -> Objective {
    match kind.entropy {
        EntropyChoice::Guessing => Objective::Guess,
        EntropyChoice::Auto | EntropyChoice::Power => Objective::PowerEntropy { power: LIMIT_POWER },
    }
}

/// What an attack attains in the terms of a witness: a guessing probability, or minus an entropy in nats; rounded down.
fn attained(kind: Kind, found: &Attack) -> f64 {
    match kind.entropy {
        EntropyChoice::Guessing => found.guessing_probability(),
        EntropyChoice::Auto | EntropyChoice::Power => (found.attained.value - found.attained.error).next_down(),
    }
}

/// Bits per round that an attack leaves, rounded up.
fn left(kind: Kind, found: &Attack) -> f64 {
    let bits = match kind.entropy {
        EntropyChoice::Guessing => -attained(kind, found).log2(),
        EntropyChoice::Auto | EntropyChoice::Power => -attained(kind, found) * std::f64::consts::LOG2_E,
    };
    bits.max(0.0) * (1.0 + 8.0 * f64::EPSILON)
}

/// Whether a bound leaves room for an attack, over all behaviours that the attack may have.
fn is_allowed(kind: Kind, case: &Case, witness: &CheckedWitness, found: &Attack) -> bool {
    let Some(widened) = case.evidence.widened(found.residual) else { return false };
    let scenario = case.request.scenario();
    let bound = witness.bound(Place::Region(&widened), scenario.leakage(), scenario.leakage_holds());
    bound.is_ok_and(|bound| attained(kind, found) <= bound.rounded_up())
}

/// Whether a strategy keeps to what a single one has to keep to.
fn is_usable(strategy: &Strategy, scenario: &Scenario) -> bool {
    let leakage = strategy.leakage(scenario.geometry().carrier_dimension as usize);
    let single = |limit: f64| limit == 0.0 || scenario.leakage_holds() == LeakageReading::EveryEmission;
    leakage.iter().zip(scenario.leakage()).all(|(found, limit)| !single(*limit) || found <= limit)
}

/// So many numbers below `length`, evenly spread, both ends among them.
fn spread(length: usize, count: usize) -> Vec<usize> {
    match (length, count) {
        (0, _) | (_, 0) => vec![],
        (_, 1) => vec![length / 2],
        _ if count >= length => (0..length).collect(),
        _ => (0..count).map(|i| (i * (length - 1) + (count - 1) / 2) / (count - 1)).collect(),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn attacks_are_spread_from_end_to_end() {
        assert_eq!(spread(60, 4), [0, 20, 39, 59]);
        assert_eq!(spread(3, 9), [0, 1, 2]);
        assert_eq!((spread(5, 1), spread(0, 3), spread(5, 0)), (vec![2], vec![], vec![]));
    }
}
