//! Scenarios and behaviours that the tests share.

use bitassay::{
    bound::{Answer, Found, guessing_probability},
    counts::Table,
    relaxation::level::Level,
    scenario::{LeakageDocument, LeakageReading, Scenario, ScenarioDocument, Setting},
    solver::Limits,
    witness::check::Place,
};

/// A scenario with uniform leakage, on average, and the target (0, 0).
pub fn scenario(preparations: usize, measurements: usize, outcomes: usize, carrier_dimension: u32, leakage: f64) -> Scenario {
    let document = ScenarioDocument {
        preparations,
        measurements,
        outcomes,
        carrier_dimension,
        leakage: LeakageDocument::Uniform(leakage),
        leakage_holds: LeakageReading::OnAverage,
        targets: vec![Setting { x: 0, y: 0 }],
    };
    Scenario::try_from(document).unwrap()
}

/// The same with the leakage holding for every emission.
pub fn every_emission(scenario: Scenario) -> Scenario {
    let document = ScenarioDocument { leakage_holds: LeakageReading::EveryEmission, ..scenario.into() };
    Scenario::try_from(document).unwrap()
}

/// The n→1 random access code, in which one of n encoded bits is to be read: preparation x encodes the bits of x, measurement y
/// asks for bit y, and each answer is right with probability `(1 + v/√n)/2`.
pub fn code(bits: usize, visibility: f64) -> Table<f64> {
    let right = 0.5 * (1.0 + visibility / (bits as f64).sqrt());
    let answers = |x: usize, y: usize| if x >> y & 1 == 0 { vec![right, 1.0 - right] } else { vec![1.0 - right, right] };
    (0..1usize << bits).map(|x| (0..bits).map(|y| answers(x, y)).collect()).collect()
}

/// Checked bound at a level for the target (0, 0); fails the test if the level itself gives none.
pub fn bound(scenario: &Scenario, behaviour: &Table<f64>, level: Level) -> Found {
    match guessing_probability(scenario, Setting { x: 0, y: 0 }, Place::Behaviour(behaviour), level, Limits::default()) {
        Answer::Bounded(found) if found.level == level => *found,
        other => panic!("no bound at {level:?}: {other:?}"),
    }
}
