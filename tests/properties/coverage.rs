//! Coverage by simulation: certified bits exceed what the devices really give in no more than the claimed fraction of batches.
//!
//! The devices are made up and known to the adversary down to every round. At a failure probability of 0.05 violations would show if the
//! claim were wrong. The long form: `BITASSAY_COVERAGE_BATCHES=2000 cargo test --test properties coverage -- --nocapture`.

use bitassay::{
    bound::{Answer, guessing_probability},
    commitment::{Commitment, CommitmentDocument, Plan, commit},
    counts::{Counts, Table},
    entropy::{
        extraction::min_entropy_per_round,
        memory::{block_min_entropy, log2_product},
    },
    relaxation::level::{Level, LevelChoice},
    request::Failure,
    scenario::{Geometry, LeakageDocument, LeakageReading, Scenario, ScenarioDocument, Setting},
    solver::Limits,
    statistics::region::region,
    witness::check::Place,
};

use crate::rig::{Numbers, behaviour, code};

const FAILURE: f64 = 0.05;
const ROUNDS: u64 = 40_000;
const TARGET: Setting = Setting { x: 0, y: 0 };
const GEOMETRY: Geometry = Geometry { preparations: 4, measurements: 2, outcomes: 2, carrier_dimension: 2 };

fn batches() -> usize {
    std::env::var("BITASSAY_COVERAGE_BATCHES").ok().and_then(|text| text.parse().ok()).unwrap_or(200)
}

/// Half of the rounds at the target.
fn distribution() -> Vec<Vec<f64>> {
    let rest = 0.0714285;
    let mut table = vec![vec![rest; 2]; 4];
    table[0][0] = 1.0 - 7.0 * rest;
    table
}

fn scenario() -> ScenarioDocument {
    ScenarioDocument {
        preparations: 4,
        measurements: 2,
        outcomes: 2,
        carrier_dimension: 2,
        leakage: LeakageDocument::Uniform(0.0),
        leakage_holds: LeakageReading::OnAverage,
        targets: vec![TARGET],
    }
}

fn drawn_setting(numbers: &mut Numbers, distribution: &[Vec<f64>]) -> Setting {
    let mut left = numbers.next();
    for (x, row) in distribution.iter().enumerate() {
        for (y, p) in row.iter().enumerate() {
            left -= p;
            if left < 0.0 {
                return Setting { x, y };
            }
        }
    }
    TARGET
}

/// Strategies on a qubit that the adversary switches between: the honest code, both measurements turned towards the target state,
/// and everything fixed.
fn strategies() -> [Table<f64>; 3] {
    use std::f64::consts::FRAC_PI_4;
    let turned = behaviour(&[FRAC_PI_4, -FRAC_PI_4, 3.0 * FRAC_PI_4, -3.0 * FRAC_PI_4], &[0.35, 1.22], 1.0);
    [code(1.0), turned, vec![vec![vec![1.0, 0.0]; 2]; 4]]
}

#[derive(Clone, Copy, Debug)]
enum Device {
    /// A strategy is drawn anew in every round.
    Alike,
    /// From honest to mostly fixed over the batch.
    Drifting,
    /// Plays fixed outcomes after a run that looked good, and reacts to the setting before.
    Reacting,
}

/// Weights of the strategies in round i, given the past.
fn weights(device: Device, i: u64, before: Option<(Setting, usize)>) -> [f64; 3] {
    match (device, before) {
        (Device::Alike, _) => [0.93, 0.06, 0.01],
        (Device::Drifting, _) => {
            let share = i as f64 / ROUNDS as f64;
            [1.0 - 0.2 * share, 0.12 * share, 0.08 * share]
        }
        (Device::Reacting, Some((TARGET, 0))) => [0.9, 0.05, 0.05],
        (Device::Reacting, Some((Setting { x: 3, .. }, _))) => [0.8, 0.2, 0.0],
        (Device::Reacting, _) => [0.98, 0.02, 0.0],
    }
}

/// Counts of a batch, and `−log2` of the probability that an adversary who knows each round's strategy gave to the target outcomes.
fn play(device: Device, numbers: &mut Numbers) -> (Counts, f64) {
    let (strategies, distribution) = (strategies(), distribution());
    let mut table = vec![vec![vec![0u64; 2]; 2]; 4];
    let mut surprise = 0.0;
    let mut before = None;
    for i in 0..ROUNDS {
        let [honest, turned, _] = weights(device, i, before);
        let drawn = numbers.next();
        let strategy = if drawn < honest {
            &strategies[0]
        } else if drawn < honest + turned {
            &strategies[1]
        } else {
            &strategies[2]
        };
        let setting = drawn_setting(numbers, &distribution);
        let p = strategy[setting.x][setting.y][0];
        let b = usize::from(numbers.next() >= p);
        table[setting.x][setting.y][b] += 1;
        if setting == TARGET {
            surprise -= [p, 1.0 - p][b].log2();
        }
        before = Some((setting, b));
    }
    (Counts::try_new(table, GEOMETRY).unwrap(), surprise)
}

fn commitment() -> Commitment {
    let mut expected = code(1.0);
    for (x, table) in expected.iter_mut().enumerate() {
        for (y, values) in table.iter_mut().enumerate() {
            let mixed = strategies().iter().zip(weights(Device::Alike, 0, None)).map(|(s, w)| w * s[x][y][0]).sum::<f64>();
            *values = vec![mixed, 1.0 - mixed];
        }
    }
    let document = CommitmentDocument {
        scenario: scenario(),
        expected_behaviour: expected,
        setting_distribution: distribution(),
        rounds: ROUNDS,
        failure: Failure { estimation: FAILURE, hashing: 0.5 },
        level: LevelChoice::Lean,
    };
    commit(&Plan::try_from(document).unwrap()).unwrap().0
}

fn report(name: &str, violations: usize, batches: usize, ratio: f64) {
    println!(
        "{name}: {violations} of {batches} batches exceed the truth (claimed at most {FAILURE}); certified over true {ratio:.3} on average"
    );
    // Three standard deviations of the count at the claimed fraction.
    let allowed = FAILURE * batches as f64 + 3.0 * (FAILURE * batches as f64).sqrt();
    assert!((violations as f64) <= allowed);
    assert!(ratio > 0.1, "nothing is certified, so nothing is tested");
}

#[test]
fn rounds_with_memory() {
    let commitment = commitment();
    for device in [Device::Alike, Device::Drifting, Device::Reacting] {
        let mut numbers = Numbers(11);
        let (mut violations, mut ratio) = (0, 0.0);
        for _ in 0..batches() {
            let (counts, truth) = play(device, &mut numbers);
            let certified = block_min_entropy(log2_product(counts.table(), &commitment.factors), commitment.power, FAILURE);
            violations += usize::from(certified > truth);
            ratio += certified / truth / batches() as f64;
        }
        report(&format!("memory, {device:?}"), violations, batches(), ratio);
    }
}

#[test]
fn independent_rounds() {
    let scenario = Scenario::try_from(scenario()).unwrap();
    let mut numbers = Numbers(12);
    // What the adversary really guesses: each strategy's likelier outcome.
    let truth: f64 = strategies().iter().zip(weights(Device::Alike, 0, None)).map(|(s, w)| w * s[0][0][0].max(s[0][0][1])).sum();
    let (first, _) = play(Device::Alike, &mut numbers);
    let place = region(&first, FAILURE);
    let answer = guessing_probability(&scenario, TARGET, Place::Region(&place), Level::Lean, Limits::default());
    let Answer::Bounded(found) = answer else { panic!("no bound") };
    let (mut violations, mut ratio) = (0, 0.0);
    for _ in 0..batches() {
        let (counts, _) = play(Device::Alike, &mut numbers);
        let place = region(&counts, FAILURE);
        let bound = found.witness.bound(Place::Region(&place), scenario.leakage(), scenario.leakage_holds()).unwrap().rounded_up();
        violations += usize::from(bound < truth);
        ratio += min_entropy_per_round(bound.min(1.0)) / -truth.log2() / batches() as f64;
    }
    report("independent, Alike", violations, batches(), ratio);
}
