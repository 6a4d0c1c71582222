//! A small made-up rig: planar qubits, projective measurements along other directions, white noise.

use bitassay::{
    certificate::Certificate,
    certify::{Certification, certify},
    counts::Table,
    relaxation::level::LevelChoice,
    request::{EntropyChoice, Failure, Request, RequestDocument, RoundModel},
    scenario::{LeakageDocument, LeakageReading, ScenarioDocument, Setting},
};

/// `p(0|x,y) = ½(1 + v cos(a_x − b_y))` for preparation angles a and measurement angles b.
pub fn behaviour(preparations: &[f64], measurements: &[f64], visibility: f64) -> Table<f64> {
    let first = |a: f64, b: f64| 0.5 * (1.0 + visibility * (a - b).cos());
    preparations.iter().map(|a| measurements.iter().map(|b| vec![first(*a, *b), 1.0 - first(*a, *b)]).collect()).collect()
}

/// The 2→1 code on a qubit: preparations at odd multiples of 45°, measurements at 0° and 90°.
pub fn code(visibility: f64) -> Table<f64> {
    use std::f64::consts::FRAC_PI_4;
    behaviour(&[FRAC_PI_4, -FRAC_PI_4, 3.0 * FRAC_PI_4, -3.0 * FRAC_PI_4], &[0.0, 2.0 * FRAC_PI_4], visibility)
}

/// Expected counts, rounded.
pub fn counts(behaviour: &Table<f64>, rounds_per_setting: u64) -> Table<u64> {
    let setting = |p: &Vec<f64>| {
        let rest: Vec<u64> = p[1..].iter().map(|p| (p * rounds_per_setting as f64).round() as u64).collect();
        std::iter::once(rounds_per_setting - rest.iter().sum::<u64>()).chain(rest).collect()
    };
    behaviour.iter().map(|table| table.iter().map(setting).collect()).collect()
}

pub fn document(counts: Table<u64>, dimension: u32, leakage: f64) -> RequestDocument {
    RequestDocument {
        scenario: ScenarioDocument {
            preparations: counts.len(),
            measurements: counts[0].len(),
            outcomes: counts[0][0].len(),
            carrier_dimension: dimension,
            leakage: LeakageDocument::Uniform(leakage),
            leakage_holds: LeakageReading::OnAverage,
            targets: vec![Setting { x: 0, y: 0 }],
        },
        counts: Some(counts),
        behaviour: None,
        scores: None,
        rounds: RoundModel::Independent,
        failure: Failure::default(),
        level: LevelChoice::Lean,
        entropy: EntropyChoice::Guessing,
        lost_rounds: None,
        bracket: false,
    }
}

pub fn run(document: RequestDocument) -> Certification {
    certify(&Request::try_from(document).unwrap())
}

pub fn guess(certificate: &Certificate) -> f64 {
    certificate.targets[0].guessing_probability_bound.expect("a checked bound")
}

/// Uniform numbers, splitmix64.
pub struct Numbers(pub u64);

impl Numbers {
    /// In [0, 1).
    pub fn next(&mut self) -> f64 {
        self.0 = self.0.wrapping_add(0x9e37_79b9_7f4a_7c15);
        let mut z = self.0;
        z = (z ^ (z >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
        z = (z ^ (z >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
        ((z ^ (z >> 31)) >> 11) as f64 / 2f64.powi(53)
    }

    /// In [−1, 1).
    pub fn symmetric(&mut self) -> f64 {
        2.0 * self.next() - 1.0
    }
}
