//! The one-round inequality behind rounds with memory, tried on explicit strategies: none may violate it, and some should come close.

use bitassay::{
    commitment::{Commitment, CommitmentDocument, Plan, commit},
    relaxation::level::LevelChoice,
    request::Failure,
    scenario::{LeakageDocument, LeakageReading, ScenarioDocument, Setting},
    witness::{check::check, witness::Witness},
};
use nalgebra::{DMatrix, DVector, SymmetricEigen};

use crate::rig::{Numbers, code};

const DIMENSION: usize = 4;

fn unit(numbers: &mut Numbers, support: std::ops::Range<usize>) -> DVector<f64> {
    DVector::from_fn(DIMENSION, |i, _| if support.contains(&i) { numbers.symmetric() } else { 0.0 }).normalize()
}

/// Projector on the positive part of a symmetric matrix.
fn positive_part(matrix: DMatrix<f64>) -> DMatrix<f64> {
    let eigen = SymmetricEigen::new(matrix);
    let kept = eigen.eigenvalues.map(|value| f64::from(u8::from(value > 0.0)));
    &eigen.eigenvectors * DMatrix::from_diagonal(&kept) * eigen.eigenvectors.transpose()
}

/// States with a given weight outside the plane of the first two axes, and projective measurements.
struct Strategy {
    states: Vec<DVector<f64>>,
    measurements: Vec<DMatrix<f64>>,
    leakage: Vec<f64>,
}

impl Strategy {
    fn random(numbers: &mut Numbers) -> Self {
        let most = [0.0, 1e-4, 1e-3, 1e-2][(numbers.symmetric().abs() * 4.0) as usize % 4];
        let leakage: Vec<f64> = (0..4).map(|_| most * numbers.symmetric().abs()).collect();
        // From the ideal code, turned a little, to anything at all.
        let spread = [0.0, 0.02, 0.1, 0.5, 4.0][(numbers.symmetric().abs() * 5.0) as usize % 5];
        let ideal = [1.0, -1.0, 3.0, -3.0].map(|eighths| eighths * std::f64::consts::PI / 8.0);
        let mut states = Vec::new();
        for (angle, leak) in ideal.iter().zip(&leakage) {
            let turned: f64 = angle + spread * numbers.symmetric();
            let inside = DVector::from_vec(vec![turned.cos(), turned.sin(), 0.0, 0.0]);
            states.push(inside * (1.0f64 - leak).sqrt() + unit(numbers, 2..4) * leak.sqrt());
        }
        let score = |y: usize, numbers: &mut Numbers| {
            // As good as possible at a random mixture of the code's question and noise.
            let weight = |x: usize, noise: f64| if (x >> (1 - y)) & 1 == 0 { 1.0 + noise } else { noise - 1.0 };
            let noise = spread * numbers.symmetric();
            states.iter().enumerate().map(|(x, s)| s * s.transpose() * weight(x, noise)).sum::<DMatrix<f64>>()
        };
        let measurements = (0..2).map(|y| positive_part(score(y, numbers))).collect();
        Self { states, measurements, leakage }
    }

    fn probability(&self, x: usize, y: usize) -> f64 {
        (self.states[x].transpose() * &self.measurements[y] * &self.states[x])[(0, 0)].clamp(0.0, 1.0)
    }
}

fn committed(targets: Vec<Setting>) -> (Commitment, Vec<Witness>) {
    let document = CommitmentDocument {
        scenario: ScenarioDocument {
            preparations: 4,
            measurements: 2,
            outcomes: 2,
            carrier_dimension: 2,
            leakage: LeakageDocument::Uniform(1e-3),
            leakage_holds: LeakageReading::OnAverage,
            targets,
        },
        expected_behaviour: code(0.99),
        setting_distribution: vec![vec![0.2, 0.1], vec![0.1, 0.1], vec![0.15, 0.1], vec![0.15, 0.1]],
        rounds: 3_000_000,
        failure: Failure::default(),
        level: LevelChoice::Lean,
    };
    commit(&Plan::try_from(document).unwrap()).unwrap()
}

/// `E[F p^{β[target]}] ≤ 1 + g Σ_t τ_t μ^t·(ε_i − ε)`, with g read off the factors.
fn largest_excess(commitment: &Commitment, witnesses: &[Witness], strategies: usize) -> f64 {
    let beta = f64::from(commitment.power) / 2f64.powi(30);
    let targets = commitment.scenario.targets();
    let mu: Vec<Vec<f64>> = witnesses
        .iter()
        .map(|witness| {
            check(witness).unwrap();
            witness.leakage[0].iter().map(|m| beta * *m as f64 / 2f64.powi(witness.multiplier_bits as i32)).collect()
        })
        .collect();
    let mut numbers = Numbers(7);
    let mut largest = f64::NEG_INFINITY;
    for _ in 0..strategies {
        let strategy = Strategy::random(&mut numbers);
        let mut expectation = 0.0;
        for x in 0..4 {
            for y in 0..2 {
                let first = strategy.probability(x, y);
                for (p, factor) in [first, 1.0 - first].into_iter().zip(&commitment.factors[x][y]) {
                    let reward = if targets.contains(&Setting { x, y }) { p.powf(beta) } else { 1.0 };
                    expectation += commitment.setting_distribution[x][y] * p * factor * reward;
                }
            }
        }
        // g is close to 1; for leakages above the declared one the larger value of g, below it the smaller one is on the safe side.
        let mut allowed = 1.0;
        for (target, mu) in targets.iter().zip(&mu) {
            let excess: f64 = mu.iter().zip(&strategy.leakage).map(|(m, leak)| m * (leak - 1e-3)).sum();
            let g = if excess > 0.0 { 1.1 } else { 0.9 };
            allowed += g * commitment.setting_distribution[target.x][target.y] * excess;
        }
        largest = largest.max((expectation - allowed) / beta);
    }
    largest
}

#[test]
fn no_strategy_beats_the_factors() {
    for targets in [vec![Setting { x: 0, y: 0 }], vec![Setting { x: 0, y: 0 }, Setting { x: 3, y: 1 }]] {
        let (commitment, witnesses) = committed(targets.clone());
        let excess = largest_excess(&commitment, &witnesses, 20_000);
        println!("{} targets: largest excess over β {excess:.2e}, {} bits expected", targets.len(), commitment.expected_bits);
        assert!(excess <= 1e-9, "{excess}");
        assert!(excess > -0.02, "nothing comes close: {excess}");
        // Factors a little larger are beaten: the test can fail.
        let mut bolder = commitment.clone();
        bolder.factors.iter_mut().flatten().flatten().for_each(|factor| *factor *= 1.0 + 0.2 * f64::from(commitment.power) / 2f64.powi(30));
        assert!(largest_excess(&bolder, &witnesses, 20_000) > 0.0);
    }
}
