//! What the command `attack` prints: bounds and attacks of every target of a request, and the models themselves.

use nalgebra::Complex;
use serde::Serialize;

use super::{
    objective::Objective,
    search::{Attack, Effort, Hints, attack},
    strategy::{Matrix, Part, Vector},
};
use crate::{
    bound::{Answer, guessing_probability},
    certify::{Evidence, evidence},
    counts::Table,
    relaxation::level::Level,
    request::Request,
    scenario::{Scenario, Setting},
    solver::Limits,
    witness::check::Place,
};

/// A complex number as `[real, imaginary]`.
type Number = [f64; 2];

/// Everything that was found.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Report {
    pub scenario: Scenario,
    /// Whether a checked witness proves that no model has the data.
    pub outside_model: bool,
    pub targets: Vec<TargetReport>,
    pub version: &'static str,
}

/// The bound and the attack of one target.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct TargetReport {
    pub preparation: usize,
    pub measurement: usize,
    /// Guessing probability of the model below, rounded down; `null` if no model was found.
    pub attack: Option<f64>,
    /// Checked upper bound on the guessing probability of every model; `null` if there is none.
    pub bound: Option<f64>,
    /// Level of the bound.
    pub level: Option<Level>,
    /// Whether the attack exceeds what the bound's witness allows over the data, widened by the residual: the bound is wrong then.
    pub contradicted: bool,
    pub model: Option<ModelReport>,
}

/// A model, and what it attains, computed from its matrices.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct ModelReport {
    /// By how much the probabilities may miss the data, or the confidence region; zero if they lie inside.
    pub residual: f64,
    /// What errors of arithmetic may add to any figure.
    pub error: f64,
    /// `[x][y][b]`.
    pub behaviour: Table<f64>,
    /// Mean weight outside the carrier, per preparation.
    pub mean_leakage: Vec<f64>,
    /// The largest weight outside the carrier in any strategy, per preparation.
    pub largest_leakage: Vec<f64>,
    /// Rounds of the search.
    pub rounds: usize,
    /// Whether the search ended because nothing better was found.
    pub settled: bool,
    pub strategies: Vec<StrategyReport>,
}

/// One strategy of a mixture; complex numbers are `[real, imaginary]`.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct StrategyReport {
    pub weight: f64,
    /// The outcome that the adversary names at the target setting.
    pub guess: usize,
    /// Unit vectors, `[x][axis]`.
    pub states: Vec<Vec<Number>>,
    /// `[y][b][row][column]`.
    pub measurements: Vec<Vec<Vec<Vec<Number>>>>,
    /// The projector on the carrier, `[row][column]`.
    pub carrier: Vec<Vec<Number>>,
}

/// Bounds and attacks every target of a request. A region is attacked as a region: the model may have any behaviour in it.
pub fn report(request: &Request, effort: Effort) -> Report {
    let scenario = request.scenario();
    let evidence = evidence(request);
    let mut report = Report {
        scenario: scenario.clone(),
        outside_model: false,
        targets: Vec::new(),
        version: concat!("bitassay ", env!("CARGO_PKG_VERSION")),
    };
    for target in scenario.targets() {
        report.targets.push(on_target(request, *target, &evidence, effort, &mut report.outside_model));
    }
    report
}

fn on_target(request: &Request, target: Setting, evidence: &Evidence, effort: Effort, outside: &mut bool) -> TargetReport {
    let found = match guessing_probability(request.scenario(), target, evidence.place(), request.start, Limits::default()) {
        Answer::Bounded(found) => Some(found),
        Answer::Outside(_) => {
            *outside = true;
            None
        }
        Answer::Unverified => None,
    };
    let hints = Hints { witness: found.as_ref().map(|found| &found.witness), known: &[] };
    let attack = if *outside { None } else { attack(request.scenario(), target, evidence.place(), Objective::Guess, hints, effort) };
    let contradicted = found.as_ref().zip(attack.as_ref()).is_some_and(|(found, attack)| {
        let Some(widened) = evidence.widened(attack.residual) else { return false };
        let allowed = found.witness.bound(Place::Region(&widened), request.scenario().leakage(), request.scenario().leakage_holds());
        allowed.is_ok_and(|allowed| attack.guessing_probability() > allowed.rounded_up())
    });
    TargetReport {
        preparation: target.x,
        measurement: target.y,
        attack: attack.as_ref().map(Attack::guessing_probability),
        bound: found.as_ref().map(|found| found.bound.rounded_up().min(1.0)),
        level: found.as_ref().map(|found| found.level),
        contradicted,
        model: attack.as_ref().map(ModelReport::of),
    }
}

impl ModelReport {
    pub fn of(attack: &Attack) -> Self {
        let Attack { model, attained, residual, rounds, settled } = attack;
        Self {
            residual: *residual,
            error: attained.error,
            behaviour: attained.behaviour.clone(),
            mean_leakage: attained.mean_leakage.clone(),
            largest_leakage: attained.largest_leakage.clone(),
            rounds: *rounds,
            settled: *settled,
            strategies: model.parts.iter().map(StrategyReport::of).collect(),
        }
    }
}

impl StrategyReport {
    fn of(part: &Part) -> Self {
        Self {
            weight: part.weight,
            guess: part.guess,
            states: part.strategy.states.iter().map(vector).collect(),
            measurements: part.strategy.measurements.iter().map(|elements| elements.iter().map(matrix).collect()).collect(),
            carrier: matrix(&part.carrier),
        }
    }
}

fn number(value: &Complex<f64>) -> Number {
    [value.re, value.im]
}

fn vector(vector: &Vector) -> Vec<Number> {
    vector.iter().map(number).collect()
}

fn matrix(matrix: &Matrix) -> Vec<Vec<Number>> {
    matrix.row_iter().map(|row| row.iter().map(number).collect()).collect()
}
