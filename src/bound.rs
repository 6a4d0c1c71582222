//! From a question to a checked bound: pose, solve, round, check, and fall to a coarser level where that fails.

use num_rational::BigRational;
use num_traits::{One, Signed};

use crate::{
    relaxation::{
        level::Level,
        moments::Moments,
        question::{Knowledge, Question, Slack, pose},
        word::Algebra,
    },
    scenario::{Geometry, LeakageReading, Scenario, Setting},
    solver::{Limits, Status, solve},
    witness::{
        check::{CheckedBound, CheckedWitness, Place, proves_contradiction},
        rounding,
        witness::Claim,
    },
};

/// A checked witness, the bound it gives where it was asked for, and the level it was found at.
#[derive(Debug, Clone, PartialEq)]
pub struct Found {
    pub witness: CheckedWitness,
    pub bound: CheckedBound,
    pub level: Level,
}

/// Proof that no model of the scenario has the numbers.
#[derive(Debug, Clone, PartialEq)]
pub struct Contradiction {
    pub found: Found,
    /// No smaller uniform leakage, read on average, explains the numbers; with the witness of that. `None` if not verified.
    pub least_leakage: Option<(BigRational, CheckedWitness)>,
}

/// The answer to a question about a target setting.
#[derive(Debug, Clone, PartialEq)]
pub enum Answer {
    Bounded(Box<Found>),
    Outside(Box<Contradiction>),
    /// No witness passed the exact check at any level.
    Unverified,
}

/// A solve that did not end within the solver's tolerances is good enough all the same if rounding its witness costs no more than this
/// in guessing probability; the bound is what the exact check says in any case.
const GOOD_ENOUGH: f64 = 2e-6;

/// Upper bound on the guessing probability of a target of the scenario, for every model whose behaviour lies in the place.
///
/// Starts at `level` and falls to coarser ones where a solve does not end well; the least of the bounds that were checked is
/// returned.
pub fn guessing_probability(scenario: &Scenario, target: Setting, place: Place, level: Level, limits: Limits) -> Answer {
    let leakage = scenario.leakage();
    let question = Question {
        claim: Claim::Guess { target },
        knowledge: knowledge(place),
        leakage,
        leakage_holds: scenario.leakage_holds(),
        slack: Slack::None,
    };
    let mut best: Option<Found> = None;
    for level in descent(level) {
        let (status, found) = attempt(scenario.geometry(), &question, place, level, limits);
        if status == Status::Infeasible
            && let Some(contradiction) = contradiction(scenario, place, level, limits)
        {
            return Answer::Outside(Box::new(contradiction));
        }
        let improves = |found: &Found| best.as_ref().is_none_or(|best| found.bound.exact() < best.bound.exact());
        best = found.filter(improves).or(best);
        if best.as_ref().is_some_and(|best| status == Status::Solved || best.witness.rounding_cost() <= GOOD_ENOUGH) {
            break;
        }
    }
    best.map_or(Answer::Unverified, |found| Answer::Bounded(Box::new(found)))
}

/// Upper bound on a linear score `Σ s p` with integer coefficients `[x][y][b]`, over all models of a geometry and leakage.
///
/// `None` if no witness passed the exact check.
pub fn score(scenario: &Scenario, coefficients: Vec<Vec<Vec<i64>>>, level: Level, limits: Limits) -> Option<Found> {
    let claim = Claim::Score { coefficients };
    let uniform =
        vec![vec![vec![[0.0, 1.0]; scenario.geometry().outcomes]; scenario.geometry().measurements]; scenario.geometry().preparations];
    let question = Question {
        claim,
        knowledge: Knowledge::Nothing,
        leakage: scenario.leakage(),
        leakage_holds: scenario.leakage_holds(),
        slack: Slack::None,
    };
    descent(level).find_map(|level| attempt(scenario.geometry(), &question, Place::Region(&uniform), level, limits).1)
}

/// Proof that no model of the scenario has a behaviour in the place, if there is one at this level.
pub fn contradiction(scenario: &Scenario, place: Place, level: Level, limits: Limits) -> Option<Contradiction> {
    let point;
    let knowledge = match place {
        Place::Behaviour(table) => {
            point = as_intervals(table);
            Knowledge::Within(&point)
        }
        Place::Region(table) => Knowledge::Within(table),
    };
    let question = Question {
        claim: Claim::Contradiction,
        knowledge,
        leakage: scenario.leakage(),
        leakage_holds: scenario.leakage_holds(),
        slack: Slack::Behaviour,
    };
    let (_, found) = attempt(scenario.geometry(), &question, place, level, limits);
    let found = found.filter(|found| proves_contradiction(&found.witness, &found.bound))?;
    Some(Contradiction { found, least_leakage: least_leakage(scenario.geometry(), knowledge, place, level, limits) })
}

fn least_leakage(
    geometry: Geometry,
    knowledge: Knowledge,
    place: Place,
    level: Level,
    limits: Limits,
) -> Option<(BigRational, CheckedWitness)> {
    // Any leakage: no preparation may be taken as exactly leak-free.
    let anything = vec![1.0; geometry.preparations];
    let question = Question {
        claim: Claim::Contradiction,
        knowledge,
        leakage: &anything,
        leakage_holds: LeakageReading::OnAverage,
        slack: Slack::Leakage,
    };
    let (_, found) = attempt(geometry, &question, place, level, limits);
    let witness = found?.witness;
    let least = witness.least_uniform_leakage(place).ok()??;
    (least.is_positive() && least <= BigRational::one()).then_some((least, witness))
}

/// One solve at one level, with what could be verified of it.
fn attempt(geometry: Geometry, question: &Question, place: Place, level: Level, limits: Limits) -> (Status, Option<Found>) {
    let exact: Vec<bool> = question.leakage.iter().map(|leakage| *leakage == 0.0).collect();
    let Ok(mut moments) = Moments::new(Algebra::new(geometry, &exact), level) else { return (Status::Failed, None) };
    let Ok(posed) = pose(&mut moments, question) else { return (Status::Failed, None) };
    let candidate = solve(&posed.program, limits);
    let found = rounding::witness(&moments, question, &posed, &candidate).ok().and_then(|witness| {
        let bound = witness.bound(place, question.leakage, question.leakage_holds).ok()?;
        Some(Found { witness, bound, level })
    });
    (candidate.status, found)
}

fn knowledge(place: Place<'_>) -> Knowledge<'_> {
    match place {
        Place::Behaviour(table) => Knowledge::Exactly(table),
        Place::Region(table) => Knowledge::Within(table),
    }
}

fn as_intervals(table: &[Vec<Vec<f64>>]) -> Vec<Vec<Vec<[f64; 2]>>> {
    table.iter().map(|t| t.iter().map(|values| values.iter().map(|p| [*p, *p]).collect()).collect()).collect()
}

fn descent(level: Level) -> impl Iterator<Item = Level> {
    std::iter::successors(Some(level), |level| level.coarser())
}
