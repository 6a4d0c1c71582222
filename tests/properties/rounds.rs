//! The one-round inequality behind rounds with memory, tried on explicit strategies: none may violate it, and some should come close.

use bitassay::{
    attack::{
        Effort, Hints, attack,
        objective::Objective,
        strategy::{Part, Vector},
    },
    commitment::{Commitment, CommitmentDocument, Plan, commit},
    counts::Table,
    relaxation::level::LevelChoice,
    request::Failure,
    scenario::{LeakageDocument, LeakageReading, ScenarioDocument, Setting},
    witness::{
        check::{Place, check},
        witness::Witness,
    },
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

    fn round(&self) -> Round {
        let first = |x: usize, y: usize| (self.states[x].transpose() * &self.measurements[y] * &self.states[x])[(0, 0)].clamp(0.0, 1.0);
        let behaviour = (0..4).map(|x| (0..2).map(|y| vec![first(x, y), 1.0 - first(x, y)]).collect()).collect();
        Round { behaviour, leakage: self.leakage.clone() }
    }
}

/// What counts of a strategy in one round.
struct Round {
    behaviour: Table<f64>,
    leakage: Vec<f64>,
}

fn random_rounds(number: usize) -> Vec<Round> {
    let mut numbers = Numbers(7);
    (0..number).map(|_| Strategy::random(&mut numbers).round()).collect()
}

/// The parts of an explicit attack: models of the committed behaviour which leave as little entropy as the search could find.
fn worst_rounds(commitment: &Commitment) -> Vec<Round> {
    let (scenario, behaviour, target) = (&commitment.scenario, code(0.99), commitment.scenario.targets()[0]);
    let objective = Objective::PowerEntropy { power: commitment.power };
    let found = attack(scenario, target, Place::Behaviour(&behaviour), objective, Hints::default(), Effort::default()).unwrap();
    let round = |part: &Part| {
        // The carrier need not lie along the first axes.
        let inside = |state: &Vector| state.dotc(&(&part.carrier * state)).re;
        let leakage = part.strategy.states.iter().map(|state| (1.0 - inside(state)).max(0.0)).collect();
        Round { behaviour: part.strategy.behaviour(), leakage }
    };
    found.model.parts.iter().filter(|part| part.weight > 1e-3).map(round).collect()
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

/// The largest excess over `E[F p^{β[target]}] ≤ 1 + g Σ_t τ_t μ^t·(ε_i − ε)`, in units of β, with g read off the factors.
fn largest_excess(commitment: &Commitment, witnesses: &[Witness], rounds: &[Round]) -> f64 {
    let beta = f64::from(commitment.power) / 2f64.powi(30);
    let targets = commitment.scenario.targets();
    let mu: Vec<Vec<f64>> = witnesses
        .iter()
        .map(|witness| {
            check(witness).unwrap();
            witness.leakage[0].iter().map(|m| beta * *m as f64 / 2f64.powi(witness.multiplier_bits as i32)).collect()
        })
        .collect();
    let mut largest = f64::NEG_INFINITY;
    for Round { behaviour, leakage } in rounds {
        let mut expectation = 0.0;
        for Setting { x, y } in commitment.scenario.geometry().settings() {
            for (p, factor) in behaviour[x][y].iter().zip(&commitment.factors[x][y]) {
                let reward = if targets.contains(&Setting { x, y }) { p.powf(beta) } else { 1.0 };
                expectation += commitment.setting_distribution[x][y] * p * factor * reward;
            }
        }
        // g is close to 1; for leakages above the declared one the larger value of g, below it the smaller one is on the safe side.
        let mut allowed = 1.0;
        for (target, mu) in targets.iter().zip(&mu) {
            let excess: f64 = mu.iter().zip(leakage).map(|(m, leak)| m * (leak - 1e-3)).sum();
            let g = if excess > 0.0 { 1.1 } else { 0.9 };
            allowed += g * commitment.setting_distribution[target.x][target.y] * excess;
        }
        largest = largest.max((expectation - allowed) / beta);
    }
    largest
}

/// Factors by a share of β too large.
fn bolder(commitment: &Commitment, share: f64) -> Commitment {
    let mut bolder = commitment.clone();
    bolder.factors.iter_mut().flatten().flatten().for_each(|factor| *factor *= 1.0 + share * f64::from(commitment.power) / 2f64.powi(30));
    bolder
}

#[test]
fn no_strategy_beats_the_factors() {
    let rounds = random_rounds(20_000);
    for targets in [vec![Setting { x: 0, y: 0 }], vec![Setting { x: 0, y: 0 }, Setting { x: 3, y: 1 }]] {
        let (commitment, witnesses) = committed(targets.clone());
        let excess = largest_excess(&commitment, &witnesses, &rounds);
        println!("{} targets: largest excess over β {excess:.2e}, {} bits expected", targets.len(), commitment.expected_bits);
        assert!(excess <= 1e-9, "{excess}");
        assert!(excess > -0.02, "nothing comes close: {excess}");
        // The test can fail.
        assert!(largest_excess(&bolder(&commitment, 0.2), &witnesses, &rounds) > 0.0);
    }
}

#[test]
fn the_worst_strategies_do_not_beat_the_factors() {
    let (commitment, witnesses) = committed(vec![Setting { x: 0, y: 0 }]);
    let rounds = worst_rounds(&commitment);
    let excess = largest_excess(&commitment, &witnesses, &rounds);
    println!("{} strategies: largest excess over β {excess:.2e}", rounds.len());
    assert!(excess <= 1e-9, "{excess}");
    // They were made to come close: much less is too much for them than for random ones.
    assert!(largest_excess(&bolder(&commitment, 0.01), &witnesses, &rounds) > 0.0, "{excess}");
}
