//! What explicit models do is never called impossible, and never bounded below what its maker can guess.

use bitassay::{
    bound::{Answer, contradiction, guessing_probability, power_entropy, score},
    counts::Table,
    relaxation::level::Level,
    scenario::{LeakageDocument, LeakageReading, Scenario, ScenarioDocument, Setting},
    solver::Limits,
    witness::check::Place,
};
use nalgebra::{DMatrix, DVector};

use crate::rig::Numbers;

/// A model with real amplitudes: the carrier is spanned by the first d of `d + 2` axes; outcomes are groups of columns of a random basis.
/// Weights outside the carrier are exactly the tolerances.
fn strategy(numbers: &mut Numbers, sizes: (usize, usize, usize), dimension: usize, leakage: &[f64]) -> Table<f64> {
    let (preparations, measurements, outcomes) = sizes;
    let whole = dimension + 2;
    let mut unit = |from: usize, to: usize| {
        DVector::from_fn(whole, |i, _| if (from..to).contains(&i) { numbers.symmetric() } else { 0.0 }).normalize()
    };
    let states: Vec<DVector<f64>> =
        (0..preparations).map(|x| unit(0, dimension) * (1.0 - leakage[x]).sqrt() + unit(dimension, whole) * leakage[x].sqrt()).collect();
    let bases: Vec<DMatrix<f64>> = (0..measurements).map(|_| DMatrix::from_fn(whole, whole, |_, _| numbers.symmetric()).qr().q()).collect();
    let probability = |x: usize, y: usize, b: usize| -> f64 {
        (0..whole).filter(|column| column % outcomes == b).map(|column| bases[y].column(column).dot(&states[x]).powi(2)).sum()
    };
    let normalised = |values: Vec<f64>| {
        let sum: f64 = values.iter().sum();
        values.iter().map(|value| value / sum).collect()
    };
    (0..preparations)
        .map(|x| (0..measurements).map(|y| normalised((0..outcomes).map(|b| probability(x, y, b)).collect())).collect())
        .collect()
}

/// The adversary plays `one` with weight 1 − share and `other` with the rest, and knows which.
fn mixed(one: &Table<f64>, other: &Table<f64>, share: f64) -> Table<f64> {
    let values = |a: &Vec<f64>, b: &Vec<f64>| a.iter().zip(b).map(|(a, b)| a * (1.0 - share) + b * share).collect();
    one.iter().zip(other).map(|(a, b)| a.iter().zip(b).map(|(a, b)| values(a, b)).collect()).collect()
}

#[test]
fn explicit_models_are_possible_and_are_not_undercut() {
    let mut numbers = Numbers(3);
    let mut gaps = Vec::new();
    for (sizes, dimension, leakage, reading) in [
        ((2, 1, 2), 1, vec![0.05, 0.0], LeakageReading::OnAverage),
        ((2, 1, 3), 1, vec![0.05, 0.05], LeakageReading::EveryEmission),
        ((3, 2, 2), 2, vec![0.0; 3], LeakageReading::OnAverage),
        ((3, 2, 2), 2, vec![0.01, 0.0, 0.02], LeakageReading::OnAverage),
        ((3, 2, 2), 1, vec![0.1; 3], LeakageReading::EveryEmission),
        ((4, 2, 2), 3, vec![0.0; 4], LeakageReading::OnAverage),
        ((3, 1, 3), 2, vec![0.0; 3], LeakageReading::OnAverage),
        ((3, 2, 3), 2, vec![0.0; 3], LeakageReading::EveryEmission),
        ((3, 2, 3), 2, vec![0.01; 3], LeakageReading::OnAverage),
        ((2, 2, 4), 1, vec![0.02; 2], LeakageReading::OnAverage),
        ((5, 1, 2), 2, vec![1e-4; 5], LeakageReading::OnAverage),
    ] {
        for level in [Level::Lean, Level::Standard] {
            let (one, other) = (strategy(&mut numbers, sizes, dimension, &leakage), strategy(&mut numbers, sizes, dimension, &leakage));
            let share = 0.5 + 0.4 * numbers.symmetric();
            let behaviour = mixed(&one, &other, share);
            let scenario = Scenario::try_from(ScenarioDocument {
                preparations: sizes.0,
                measurements: sizes.1,
                outcomes: sizes.2,
                carrier_dimension: dimension as u32,
                leakage: LeakageDocument::PerPreparation(leakage.clone()),
                leakage_holds: reading,
                targets: vec![Setting { x: 0, y: 0 }],
            })
            .unwrap();
            let likeliest = |table: &Table<f64>| table[0][0].iter().fold(0.0f64, |most, p| most.max(*p));
            let guessed = likeliest(&one) * (1.0 - share) + likeliest(&other) * share;
            let place = Place::Behaviour(&behaviour);
            assert!(contradiction(&scenario, place, level, Limits::default()).is_none(), "{sizes:?} d = {dimension} {leakage:?} {level:?}");
            match guessing_probability(&scenario, Setting { x: 0, y: 0 }, place, level, Limits::default()) {
                Answer::Bounded(found) => {
                    let bound = found.bound.rounded_up();
                    assert!(bound >= guessed - 1e-12, "{sizes:?} d = {dimension} {leakage:?} {level:?}: {bound} below {guessed}");
                    gaps.push(bound.min(1.0) - guessed);
                }
                other => panic!("{sizes:?} d = {dimension} {leakage:?} {level:?}: {other:?}"),
            }
        }
    }
    let largest = gaps.iter().fold(0.0f64, |most, gap| most.max(*gap));
    println!("{} models; the adversary of a random mixture falls short of the bound by up to {largest:.3}", gaps.len());
}

/// A solver that is stopped before its first step leaves nothing, and nothing is what is claimed.
#[test]
fn a_solver_without_an_answer_leaves_a_target_unverified() {
    let behaviour = vec![vec![vec![0.7, 0.3]], vec![vec![0.3, 0.7]]];
    let scenario = Scenario::try_from(ScenarioDocument {
        preparations: 2,
        measurements: 1,
        outcomes: 2,
        carrier_dimension: 1,
        leakage: LeakageDocument::Uniform(0.1),
        leakage_holds: LeakageReading::OnAverage,
        targets: vec![Setting { x: 0, y: 0 }],
    })
    .unwrap();
    let stopped = Limits { iterations: 0, ..Limits::default() };
    let answer = guessing_probability(&scenario, Setting { x: 0, y: 0 }, Place::Behaviour(&behaviour), Level::Sharp, stopped);
    match answer {
        Answer::Unverified => {}
        // What a solver leaves behind before its first step may pass the check; it is a true bound then, and a useless one.
        Answer::Bounded(found) => assert!(found.bound.rounded_up() >= 1.0),
        Answer::Outside(_) => panic!("nothing was proved"),
    }
}

/// Tables and targets that do not fit the scenario are left unanswered, without a panic.
#[test]
fn questions_of_another_shape_are_left_unanswered() {
    let scenario = Scenario::try_from(ScenarioDocument {
        preparations: 2,
        measurements: 1,
        outcomes: 2,
        carrier_dimension: 1,
        leakage: LeakageDocument::Uniform(0.1),
        leakage_holds: LeakageReading::OnAverage,
        targets: vec![Setting { x: 0, y: 0 }],
    })
    .unwrap();
    let (good, short) = (vec![vec![vec![0.7, 0.3]]; 2], vec![vec![vec![0.7, 0.3]]]);
    let (inside, outside, limits) = (Setting { x: 0, y: 0 }, Setting { x: 2, y: 0 }, Limits::default());
    for (target, table) in [(inside, &short), (outside, &good)] {
        let place = Place::Behaviour(table);
        assert_eq!(guessing_probability(&scenario, target, place, Level::Lean, limits), Answer::Unverified);
        assert_eq!(power_entropy(&scenario, target, place, 1 << 20, Level::Lean, limits), None);
    }
    assert_eq!(score(&scenario, vec![vec![vec![1, 0]]], Level::Lean, limits), None);
    assert!(contradiction(&scenario, Place::Behaviour(&short), Level::Lean, limits).is_none());
}
