//! Explicit attacks on behaviours with known ones.

use bitassay::{
    attack::{Effort, Hints, attack, objective::Objective},
    bound::{Answer, guessing_probability, power_entropy},
    counts::Table,
    entropy::power::POWER_BITS,
    relaxation::level::Level,
    scenario::Setting,
    solver::Limits,
    witness::check::Place,
};

use crate::codes::{code, scenario};

const TARGET: Setting = Setting { x: 0, y: 0 };

/// Without a hint the search takes longer, and arrives at the same.
#[test]
fn a_search_without_hints_finds_the_same() {
    let behaviour = code(2, 0.99);
    let place = Place::Behaviour(&behaviour);
    let found = attack(&scenario(4, 2, 2, 2, 0.0), TARGET, place, Objective::Guess, Hints::default(), Effort::default()).unwrap();
    assert!(found.residual < 1e-10 && (found.guessing_probability() - 0.8818577).abs() < 2e-6, "{}", found.guessing_probability());
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
