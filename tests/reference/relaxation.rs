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

/// Never looser by more than 2e-6, the most that rounding a witness to integers may cost, and never tighter by more than the accuracy of the
/// reference's solver, since both are the same relaxation.
#[test]
fn bounds_are_those_of_the_unsplit_relaxation() {
    let reference: Reference = serde_json::from_str(include_str!("relaxation.json")).unwrap();
    assert!(reference.cases.len() >= 30);
    let (mut looser, mut tighter) = (0.0f64, 0.0f64);
    for case in &reference.cases {
        let scenario: Scenario = serde_json::from_value(json!({
            "preparations": case.behaviour.len(), "measurements": case.behaviour[0].len(), "outcomes": case.behaviour[0][0].len(),
            "carrier_dimension": case.dimension, "leakage": case.leakage, "leakage_holds": case.reading, "targets": [case.target],
        }))
        .unwrap();
        let answer = guessing_probability(&scenario, case.target, Place::Behaviour(&case.behaviour), case.level, Limits::default());
        let Answer::Bounded(found) = answer else { panic!("{}: {answer:?}", case.name) };
        assert_eq!(found.level, case.level, "{}", case.name);
        let difference = found.bound.rounded_up() - case.value;
        println!("{:40} {:.9} {difference:+.1e}", case.name, case.value);
        (looser, tighter) = (looser.max(difference), tighter.max(-difference));
        assert!(difference <= 2e-6, "{} is looser by {difference}", case.name);
        assert!(-difference <= reference.accuracy, "{} is tighter by {}", case.name, -difference);
    }
    println!("{} cases: looser by {looser:.1e} at most, tighter by {tighter:.1e} at most", reference.cases.len());
}
