//! Attacks and bounds held against each other on generated behaviours: no bound below an attack, and how much lies between.
//!
//! Case number `i` is the same for ever. Its behaviour is that of a pure strategy that is best at a random score, an extremal point of what the
//! scenario allows, with one of several amounts of white noise, or a mixture of two such points.
//!
//! A bound is compared with an attack at the behaviour that the attack really has, where its witness, which holds for every behaviour, says something
//! as well: over intervals around it that are as wide as the errors of arithmetic. So the comparison needs no tolerance, and a residual of
//! the attack plays no part in it.

use std::fmt;

use super::{
    attained::Attained,
    climb::{Confinement, Space},
    master::{Column, Prices},
    numbers::Numbers,
    objective::Objective,
    search::{Attack, Effort, Hints, attack, random_strategy, space},
    strategy::Strategy,
};
use crate::{
    bound::{Answer, Found, guessing_probability},
    counts::Table,
    relaxation::{cost::choose, level::Level, level::LevelChoice},
    scenario::{LeakageDocument, LeakageReading, Scenario, ScenarioDocument, Setting},
    solver::Limits,
    witness::check::{CheckError, CheckedWitness, Place},
};

/// A scenario and a behaviour that it allows.
#[derive(Debug, Clone)]
pub struct Case {
    pub name: String,
    pub scenario: Scenario,
    pub behaviour: Table<f64>,
    /// Strategies that it was made from.
    pub known: Vec<Strategy>,
}

/// Case `number`: two to five preparations, one to three measurements, two or three outcomes, dimensions one to three, leakage from 0 to 0.1
/// in both readings.
pub fn case(number: u64) -> Option<Case> {
    let mut numbers = Numbers::new(number.wrapping_mul(0x2545_f491_4f6c_dd1d).wrapping_add(17));
    let mut pick = |choices: usize| ((numbers.uniform() * choices as f64) as usize).min(choices - 1);
    let (preparations, measurements, outcomes) = (2 + pick(4), 1 + pick(3), if pick(3) == 0 { 3 } else { 2 });
    // A carrier with a dimension for every preparation certifies nothing.
    let carrier_dimension = (1 + pick(3)).min(preparations - 1) as u32;
    // A carrier of one dimension without leakage tells nothing of the preparation.
    let leakage = if carrier_dimension == 1 { [1e-4, 1e-3, 1e-2, 0.05, 0.1] } else { [0.0, 1e-4, 1e-3, 1e-2, 0.1] }[pick(5)];
    let leakage_holds = if pick(3) == 0 { LeakageReading::EveryEmission } else { LeakageReading::OnAverage };
    let noise = [0.0, 0.0, 0.001, 0.003, 0.01, 0.03][pick(6)];
    let mixed = pick(4) == 0;
    let uneven = pick(4) == 0;
    let leakages = (0..preparations).map(|x| if uneven && x % 2 == 1 { leakage / 2.0 } else { leakage }).collect();
    let document = ScenarioDocument {
        preparations,
        measurements,
        outcomes,
        carrier_dimension,
        leakage: LeakageDocument::PerPreparation(leakages),
        leakage_holds,
        targets: vec![Setting { x: 0, y: 0 }],
    };
    let scenario = Scenario::try_from(document.clone()).ok()?;
    let space = space(&scenario, Setting { x: 0, y: 0 }, Objective::Guess, Effort::default());
    let known: Vec<Strategy> = (0..1 + usize::from(mixed)).filter_map(|_| extremal(&space, &mut numbers, scenario.leakage())).collect();
    let share = if mixed { 0.2 + 0.6 * numbers.uniform() } else { 1.0 };
    let behaviours: Vec<Table<f64>> = known.iter().map(Strategy::behaviour).collect();
    let of = |x: usize, y: usize, b: usize| {
        let rest = behaviours.get(1).map_or(0.0, |other| (1.0 - share) * other[x][y][b]);
        let pure = (share * behaviours.first().map_or(0.0, |pure| pure[x][y][b]) + rest).clamp(0.0, 1.0);
        (1.0 - noise) * pure + noise / outcomes as f64
    };
    let setting = |x: usize, y: usize| (0..outcomes).map(|b| of(x, y, b)).collect();
    let behaviour: Table<f64> = (0..preparations).map(|x| (0..measurements).map(|y| setting(x, y)).collect()).collect();
    // The setting whose outcome is the least certain.
    let certainty = |setting: &Setting| most(&behaviour[setting.x][setting.y]);
    let target = scenario.geometry().settings().min_by(|one, other| certainty(one).total_cmp(&certainty(other)))?;
    let scenario = Scenario::try_from(ScenarioDocument { targets: vec![target], ..document }).ok()?;
    let reading = if leakage_holds == LeakageReading::OnAverage { "on average" } else { "every emission" };
    let kind = if mixed { "mixed" } else { "extremal" };
    let uneven = if uneven { ", uneven" } else { "" };
    let name = format!(
        "case {number}: X {preparations} Y {measurements} B {outcomes} d {carrier_dimension}, leakage {leakage} {reading}{uneven}, {kind}, noise {noise}"
    );
    Some(Case { name, scenario, behaviour, known })
}

/// Strategies of which the one with the least certain outcome is taken.
const TRIED: usize = 12;

/// A strategy that is best at a random score among those whose every state leaks no more than its limit.
fn extremal(space: &Space, numbers: &mut Numbers, leakage: &[f64]) -> Option<Strategy> {
    let geometry = space.geometry;
    let confined = |limit: &f64| if *limit > 0.0 { Confinement::AtMost(*limit * (1.0 - 1e-9)) } else { Confinement::Inside };
    let space = Space { confinement: leakage.iter().map(confined).collect(), ..space.clone() };
    let mut climbed = |number: usize| {
        let start = random_strategy(&space, numbers, number);
        // Scores without a preference for an outcome as such.
        let mut behaviour: Table<f64> = vec![vec![vec![0.0; geometry.outcomes]; geometry.measurements]; geometry.preparations];
        behaviour.iter_mut().flatten().flatten().for_each(|score| *score = numbers.normal());
        for y in 0..geometry.measurements {
            for b in 0..geometry.outcomes {
                let mean = behaviour.iter().map(|table| table[y][b]).sum::<f64>() / geometry.preparations as f64;
                behaviour.iter_mut().for_each(|table| table[y][b] -= mean);
            }
        }
        let prices = Prices { weight: 0.0, behaviour, leakage: vec![0.0; geometry.preparations] };
        space.climb(start, &prices, vec![0.0; geometry.outcomes], 500)
    };
    let columns: Vec<Column> = (0..TRIED).map(&mut climbed).collect();
    let certainty = |column: &Column| column.behaviour.iter().flatten().map(|values| most(values)).fold(f64::INFINITY, f64::min);
    columns.into_iter().min_by(|one, other| certainty(one).total_cmp(&certainty(other))).map(|column| column.strategy)
}

fn most(values: &[f64]) -> f64 {
    values.iter().fold(0.0, |most, p| p.max(most))
}

/// A level's bound on a case.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Bounded {
    pub level: Level,
    /// Over the attack's own behaviour, at most 1.
    pub bound: f64,
    /// Bound minus attack.
    pub gap: f64,
    pub rounding_cost: f64,
}

/// What came out of a case.
#[derive(Debug, Clone, PartialEq)]
pub struct Outcome {
    pub name: String,
    /// What the attack certainly reaches; `None` if there is none.
    pub attack: Option<f64>,
    /// See [`Attack::residual`].
    pub residual: f64,
    pub bounds: Vec<Bounded>,
    /// What must not happen.
    pub violations: Vec<String>,
}

/// By how much a sharper level may lie above a coarser one besides what its rounding cost: solves end within this of their optimum.
pub const SOLVER: f64 = 2e-6;

/// Bounds a case at every level that `auto` may take, attacks it, and compares.
pub fn outcome(case: &Case, effort: Effort) -> Outcome {
    let Case { name, scenario, behaviour, known } = case;
    let target = scenario.targets()[0];
    let mut outcome = Outcome { name: name.clone(), attack: None, residual: 0.0, bounds: Vec::new(), violations: Vec::new() };
    let sharpest = choose(LevelChoice::Auto, scenario, scenario.geometry().outcomes).unwrap_or(Level::Lean);
    let mut found: Vec<Found> = Vec::new();
    for level in Level::ALL.into_iter().filter(|level| *level <= sharpest) {
        match guessing_probability(scenario, target, Place::Behaviour(behaviour), level, Limits::default()) {
            Answer::Bounded(bounded) if bounded.level == level => found.push(*bounded),
            // A coarser level stands in where a solve ends badly, and is there already.
            Answer::Bounded(_) => {}
            Answer::Unverified => outcome.violations.push(format!("{name}: no bound at {level:?}")),
            Answer::Outside(_) => outcome.violations.push(format!("{name}: called impossible at {level:?}")),
        }
    }
    let hints = Hints { witness: found.last().map(|found| &found.witness), known };
    let attack = attack(scenario, target, Place::Behaviour(behaviour), Objective::Guess, hints, effort);
    let Some(Attack { attained, residual, .. }) = attack.as_ref() else {
        outcome.violations.push(format!("{name}: no attack"));
        return outcome;
    };
    let reached = attack.as_ref().map_or(0.0, Attack::guessing_probability);
    (outcome.attack, outcome.residual) = (Some(reached), *residual);
    for Found { witness, level, .. } in &found {
        match bound_at(witness, scenario, attained) {
            Ok(bound) => {
                if bound < reached {
                    outcome.violations.push(format!("{name}: the bound {bound} at {level:?} is below the attack {reached}"));
                }
                let (bound, rounding_cost) = (bound.min(1.0), witness.rounding_cost());
                outcome.bounds.push(Bounded { level: *level, bound, gap: bound - reached, rounding_cost });
            }
            Err(error) => outcome.violations.push(format!("{name}: the witness at {level:?} does not apply: {error}")),
        }
    }
    // At the case's behaviour, for which the levels were asked: far from it witnesses are in no order.
    for pair in found.windows(2) {
        let [coarser, sharper] = pair else { continue };
        // No level contains `sparse`.
        if coarser.level == Level::Sparse {
            continue;
        }
        let excess = sharper.bound.rounded_up() - coarser.bound.rounded_up();
        if excess > sharper.witness.rounding_cost() + SOLVER {
            outcome.violations.push(format!("{name}: {:?} is above {:?} by {excess:.1e}", sharper.level, coarser.level));
        }
    }
    outcome
}

/// The bound over what the attained behaviour may be.
fn bound_at(witness: &CheckedWitness, scenario: &Scenario, attained: &Attained) -> Result<f64, CheckError> {
    let around = |p: &f64| [(p - attained.error).max(0.0), (p + attained.error).min(1.0)];
    let intervals: Table<[f64; 2]> =
        attained.behaviour.iter().map(|table| table.iter().map(|values| values.iter().map(around).collect()).collect()).collect();
    Ok(witness.bound(Place::Region(&intervals), scenario.leakage(), scenario.leakage_holds())?.rounded_up())
}

/// What came out of many cases.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct Summary {
    pub cases: usize,
    pub violations: Vec<String>,
    /// The largest gap of the sharpest level that was tried, and the case.
    pub worst_gap: f64,
    pub worst_case: String,
    pub worst_rounding_cost: f64,
    /// Attacks whose behaviour misses the case's by more than 10⁻⁸, so that their gap belongs to another behaviour.
    pub missed: usize,
    /// Gaps of each level, in ascending order.
    pub gaps: Vec<(Level, Vec<f64>)>,
}

impl Summary {
    pub fn of(outcomes: &[Outcome]) -> Self {
        let mut summary = Self { cases: outcomes.len(), ..Self::default() };
        for outcome in outcomes {
            summary.violations.extend(outcome.violations.iter().cloned());
            summary.missed += usize::from(outcome.residual > 1e-8);
            if let Some(sharpest) = outcome.bounds.last().filter(|bounded| bounded.gap > summary.worst_gap) {
                (summary.worst_gap, summary.worst_case) = (sharpest.gap, outcome.name.clone());
            }
            for bounded in &outcome.bounds {
                summary.worst_rounding_cost = summary.worst_rounding_cost.max(bounded.rounding_cost);
            }
        }
        for level in Level::ALL {
            let of_level = outcomes.iter().flat_map(|outcome| &outcome.bounds).filter(|bounded| bounded.level == level);
            let mut gaps: Vec<f64> = of_level.map(|bounded| bounded.gap).collect();
            gaps.sort_by(f64::total_cmp);
            summary.gaps.push((level, gaps));
        }
        summary
    }
}

impl fmt::Display for Summary {
    fn fmt(&self, formatter: &mut fmt::Formatter) -> fmt::Result {
        writeln!(
            formatter,
            "{} cases, {} violations, worst gap {:.1e}, worst rounding cost {:.1e}, {} behaviours missed",
            self.cases,
            self.violations.len(),
            self.worst_gap,
            self.worst_rounding_cost,
            self.missed
        )?;
        for (level, gaps) in &self.gaps {
            let quantile = |share: f64| gaps.get(((gaps.len() as f64 - 1.0) * share).round() as usize).copied().unwrap_or(0.0);
            let beyond = |gap: f64| gaps.iter().filter(|found| **found > gap).count();
            writeln!(
                formatter,
                "{level:?}: {} bounds, gap median {:.1e}, nine tenths {:.1e}, largest {:.1e}; above 1e-5 {}, 1e-4 {}, 1e-3 {}, 1e-2 {}",
                gaps.len(),
                quantile(0.5),
                quantile(0.9),
                quantile(1.0),
                beyond(1e-5),
                beyond(1e-4),
                beyond(1e-3),
                beyond(1e-2)
            )?;
        }
        writeln!(formatter, "widest: {}", self.worst_case)?;
        self.violations.iter().try_for_each(|violation| writeln!(formatter, "violation: {violation}"))
    }
}
