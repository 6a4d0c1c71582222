//! Explicit attacks on behaviours with known ones.

use bitassay::{
    attack::{Attack, Effort, Hints, attack, objective::Objective},
    bound::{Answer, guessing_probability, power_entropy},
    counts::Table,
    entropy::power::POWER_BITS,
    relaxation::level::Level,
    scenario::{Scenario, Setting},
    solver::Limits,
    witness::check::Place,
};

use crate::codes::{bound, code, every_emission, scenario};

const TARGET: Setting = Setting { x: 0, y: 0 };

/// The bound at a level and the attack that its witness hints at.
fn bracket(scenario: &Scenario, behaviour: &Table<f64>, level: Level) -> (f64, Attack) {
    let found = bound(scenario, behaviour, level);
    let hints = Hints { witness: Some(&found.witness), known: &[] };
    let place = Place::Behaviour(behaviour);
    let attack = attack(scenario, TARGET, place, Objective::Guess, hints, Effort::default()).unwrap();
    let reached = attack.guessing_probability();
    println!("attack {reached:.9}, bound {:.9}, residual {:.1e}, {} rounds", found.bound.rounded_up(), attack.residual, attack.rounds);
    assert!(attack.residual < 1e-10);
    assert!(reached <= found.bound.rounded_up() + 1e-9);
    (found.bound.rounded_up(), attack)
}

/// An independent column generation (another language, another linear-programming library) found these; noisy 2→1 code on a qubit.
#[test]
fn noisy_two_to_one_code() {
    for (leakage, known, most) in [(0.0, 0.8818572, 1e-5), (1e-3, 0.8917125, 1e-4), (1e-2, 0.9440455, 1e-3)] {
        let (bound, attack) = bracket(&scenario(4, 2, 2, 2, leakage), &code(2, 0.99), Level::Sharp);
        assert!(attack.guessing_probability() > known - 1e-6, "an attack with {known} is known");
        assert!(bound - attack.guessing_probability() < most);
        assert!(attack.attained.mean_leakage.iter().all(|found| *found <= leakage));
    }
}

/// The level made for leakage leaves nothing between bound and attack.
#[test]
fn noisy_two_to_one_code_to_the_last_digits() {
    let (bound, attack) = bracket(&scenario(4, 2, 2, 2, 1e-2), &code(2, 0.99), Level::Keen);
    assert!(bound - attack.guessing_probability() < 1e-5, "{bound}");
}

/// Without a hint the search takes longer, and arrives at the same.
#[test]
fn a_search_without_hints_finds_the_same() {
    let behaviour = code(2, 0.99);
    let place = Place::Behaviour(&behaviour);
    let found = attack(&scenario(4, 2, 2, 2, 0.0), TARGET, place, Objective::Guess, Hints::default(), Effort::default()).unwrap();
    assert!(found.residual < 1e-10 && (found.guessing_probability() - 0.8818577).abs() < 2e-6, "{}", found.guessing_probability());
}

/// Two states, bounded vacuum (d = 1), one two-outcome measurement: an independent implementation of the relaxation and explicit strategies
/// agree to 1e-6 on average; for every emission the values are those of the relaxation alone.
#[test]
fn two_states_with_bounded_vacuum() {
    let two_states = |success: f64| vec![vec![vec![success, 1.0 - success]], vec![vec![1.0 - success, success]]];
    let on_average =
        [(0.01, 0.597499, 0.645016), (0.01, 0.589499, 0.753777), (0.1, 0.798, 0.809762), (0.1, 0.79, 0.844484), (0.1, 0.75, 0.948554)];
    for (leakage, success, expected) in on_average {
        let (bound, attack) = bracket(&scenario(2, 1, 2, 1, leakage), &two_states(success), Level::Sharp);
        assert!(bound - attack.guessing_probability() < 1e-5 && (attack.guessing_probability() - expected).abs() < 1e-5);
    }
    for (leakage, success, expected) in [(0.1, 0.79, 0.822481), (0.1, 0.75, 0.896723), (0.01, 0.5895, 0.736075)] {
        let scenario = every_emission(scenario(2, 1, 2, 1, leakage));
        let (bound, attack) = bracket(&scenario, &two_states(success), Level::Sharp);
        assert!(bound - attack.guessing_probability() < 1e-5 && (attack.guessing_probability() - expected).abs() < 1e-5);
        assert!(attack.attained.largest_leakage.iter().all(|found| *found <= leakage));
    }
}

/// Unambiguous discrimination, leakage on average: an adversary imitates it with orthogonal states sent now and then, and guesses always.
#[test]
fn unambiguous_discrimination_is_imitated() {
    let (overlap, noise) = (0.9, 0.01 / 3.0);
    let (conclusive, inconclusive) = (0.99 * (1.0 - overlap) + noise, 0.99 * overlap + noise);
    let behaviour = vec![vec![vec![conclusive, noise, inconclusive]], vec![vec![noise, conclusive, inconclusive]]];
    let place = Place::Behaviour(&behaviour);
    let scenario = scenario(2, 1, 3, 1, (1.0 - overlap) / 2.0);
    let found = attack(&scenario, TARGET, place, Objective::Guess, Hints::default(), Effort::default()).unwrap();
    assert!(found.residual < 1e-10 && found.guessing_probability() > 1.0 - 1e-6, "{}", found.guessing_probability());
}

/// An attack on a region may have any behaviour in it: it guesses more than one on its middle, and no more than the bound over the region.
#[test]
fn regions_are_attacked_as_regions() {
    let middle = code(2, 0.99);
    let around = |p: &f64| [p - 1e-3, p + 1e-3];
    let region: Table<[f64; 2]> = middle.iter().map(|t| t.iter().map(|v| v.iter().map(around).collect()).collect()).collect();
    let scenario = scenario(4, 2, 2, 2, 0.0);
    let Answer::Bounded(found) = guessing_probability(&scenario, TARGET, Place::Region(&region), Level::Sharp, Limits::default()) else {
        panic!("no bound")
    };
    let hints = Hints { witness: Some(&found.witness), known: &[] };
    let attack = attack(&scenario, TARGET, Place::Region(&region), Objective::Guess, hints, Effort::default()).unwrap();
    let (reached, bound) = (attack.guessing_probability(), found.bound.rounded_up());
    println!("attack {reached}, bound {bound}");
    assert_eq!(attack.residual, 0.0);
    assert!(reached <= bound && bound - reached < 1e-4 && reached > 0.8818577 + 1e-4);
}

/// The power entropy of the noisy code: an independent search reached 0.490 bit at a leakage of 1e-3 as β → 0.
#[test]
fn power_entropy_of_the_noisy_code() {
    let behaviour = code(2, 0.99);
    let (scenario, place, power) = (scenario(4, 2, 2, 2, 1e-3), Place::Behaviour(&behaviour), 1 << (POWER_BITS - 10));
    let found = power_entropy(&scenario, TARGET, place, power, Level::Standard, Limits::default()).unwrap();
    let hints = Hints { witness: Some(&found.witness), known: &[] };
    let effort = Effort { gain: 1e-6, ..Effort::default() };
    let attack = attack(&scenario, TARGET, place, Objective::PowerEntropy { power }, hints, effort).unwrap();
    let bits = |nats: f64| nats * std::f64::consts::LOG2_E;
    let (reached, bound) = (bits(-attack.attained.value), bits(-found.bound.rounded_up()));
    println!("attack {reached}, bound {bound} bit");
    assert!(attack.residual < 1e-10);
    assert!(bound <= reached && reached < 0.4905 && reached - bound < 0.02);
}

/// With a dimension for every preparation the outcomes can be written into the carrier: the adversary knows them all. A carrier larger than that
/// is no different.
#[test]
fn large_carriers_give_everything_away() {
    for (dimension, leakage) in [(4, 0.0), (5, 0.01)] {
        let behaviour = code(2, 0.99);
        let (scenario, place) = (scenario(4, 2, 2, dimension, leakage), Place::Behaviour(&behaviour));
        let found = attack(&scenario, TARGET, place, Objective::Guess, Hints::default(), Effort::default()).unwrap();
        assert!(found.residual < 1e-10 && found.guessing_probability() > 1.0 - 1e-6, "{}", found.guessing_probability());
    }
}
