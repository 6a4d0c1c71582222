//! Random access codes: n random bits are encoded in one carrier, one of them, chosen at random, is to be read.

use bitassay::{
    counts::Table,
    scenario::{LeakageDocument, LeakageReading, Scenario, ScenarioDocument, Setting},
};

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

/// The n→1 code: preparation x encodes the bits of x, measurement y asks for bit y. Each answer is right with probability
/// `(1 + v/√n)/2`.
pub fn code(bits: usize, visibility: f64) -> Table<f64> {
    let right = 0.5 * (1.0 + visibility / (bits as f64).sqrt());
    (0..1usize << bits)
        .map(|x| (0..bits).map(|y| if x >> y & 1 == 0 { vec![right, 1.0 - right] } else { vec![1.0 - right, right] }).collect())
        .collect()
}

/// Coefficients of the success probability times `n 2^n`.
pub fn code_score(bits: usize) -> Table<i64> {
    (0..1usize << bits).map(|x| (0..bits).map(|y| if x >> y & 1 == 0 { vec![1, 0] } else { vec![0, 1] }).collect()).collect()
}
