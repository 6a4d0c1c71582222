//! The relaxation against a reference: the same moment matrix, not split by parity, in a general modelling layer with another solver. The
//! values, and the script that makes them again, stand beside this file (`relaxation.json`, `relaxation.py`, `requirements.txt`).

use bitassay::{
    bound::{Answer, guessing_probability},
    counts::Table,
    relaxation::level::Level,
    scenario::{LeakageReading, Scenario, Setting},
    solver::Limits,
    witness::check::Place,
};
use serde::Deserialize;
use serde_json::json;

#[derive(Deserialize)]
struct Reference {
    /// What the reference's solver can be trusted to.
    accuracy: f64,
    cases: Vec<Case>,
}

#[derive(Deserialize)]
struct Case {
    name: String,
    dimension: u32,
    leakage: Vec<f64>,
    reading: LeakageReading,
    level: Level,
    target: Setting,
    behaviour: Table<f64>,
    value: f64,
}

/// How far our bounds are from the reference's values.
pub struct Distance {
    pub cases: usize,
    /// The most that a bound of ours is above, and below, the reference's value.
    pub looser: f64,
    pub tighter: f64,
    pub worst_rounding_cost: f64,
    /// What must not happen.
    pub violations: Vec<String>,
}

/// The most that rounding a witness to integers may cost.
pub const ROUNDING: f64 = 2e-6;

/// Bounds every case. Never looser by more than [`ROUNDING`], and never tighter by more than the accuracy of the reference's solver, since both are
/// the same relaxation.
pub fn distance() -> Distance {
    let reference: Reference = serde_json::from_str(include_str!("relaxation.json")).unwrap();
    let cases = reference.cases.len();
    let mut distance = Distance { cases, looser: 0.0, tighter: 0.0, worst_rounding_cost: 0.0, violations: Vec::new() };
    for case in &reference.cases {
        let scenario: Scenario = serde_json::from_value(json!({
            "preparations": case.behaviour.len(), "measurements": case.behaviour[0].len(), "outcomes": case.behaviour[0][0].len(),
            "carrier_dimension": case.dimension, "leakage": case.leakage, "leakage_holds": case.reading, "targets": [case.target],
        }))
        .unwrap();
        let answer = guessing_probability(&scenario, case.target, Place::Behaviour(&case.behaviour), case.level, Limits::default());
        let found = match answer {
            Answer::Bounded(found) if found.level == case.level => found,
            other => {
                distance.violations.push(format!("{}: {other:?}", case.name));
                continue;
            }
        };
        let difference = found.bound.rounded_up() - case.value;
        println!("{:40} {:.9} {difference:+.1e}", case.name, case.value);
        (distance.looser, distance.tighter) = (distance.looser.max(difference), distance.tighter.max(-difference));
        distance.worst_rounding_cost = distance.worst_rounding_cost.max(found.witness.rounding_cost());
        if difference > ROUNDING {
            distance.violations.push(format!("{} is looser than the reference by {difference:.1e}", case.name));
        }
        if -difference > reference.accuracy {
            distance.violations.push(format!("{} is tighter than the reference by {:.1e}", case.name, -difference));
        }
    }
    distance
}

#[test]
fn bounds_are_those_of_the_unsplit_relaxation() {
    let distance = distance();
    assert!(distance.cases >= 30);
    assert_eq!(distance.violations, Vec::<String>::new());
}
