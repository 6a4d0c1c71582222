//! Power entropies.

use bitassay::{
    bound::{Found, power_entropy, power_entropy_in},
    certify::certify,
    entropy::power::POWER_BITS,
    relaxation::{
        cells::{CUT_BITS, Cut},
        level::{Level, LevelChoice},
    },
    request::{EntropyChoice, Failure, Request, RequestDocument, RoundModel},
    scenario::Setting,
    solver::Limits,
    verify::verify,
    witness::check::Place,
};

use crate::codes::{code, every_emission, scenario};

/// Brackets [relaxation at level standard with 12 fixed cells in an independent implementation, mixture of explicit strategies] for the
/// least mean Shannon entropy of the target outcome, bits; noisy 2→1 code on a qubit. 0.600876 is the binary entropy of ½(1+1/√2).
/// The cells made here are better placed than the fixed ones. At `β = 2^-20` the power entropy is the Shannon entropy to six digits.
#[test]
fn mean_shannon_entropy_of_the_two_to_one_code() {
    for (visibility, leakage, low, high) in [(1.0, 0.0, 0.5865, 0.600876), (0.99, 0.0, 0.5067, 0.518205), (0.99, 1e-3, 0.4803, 0.490386)] {
        let scenario = scenario(4, 2, 2, 2, leakage);
        let place = code(2, visibility);
        let found = power_entropy(&scenario, Setting { x: 0, y: 0 }, Place::Behaviour(&place), 1 << 10, Level::Standard, Limits::default())
            .unwrap();
        let bits = -found.bound.rounded_up() / 2f64.ln();
        println!("visibility {visibility}, leakage {leakage}: {bits} bit, rounding cost {:.1e}", found.witness.rounding_cost());
        assert!(bits >= low && bits <= high, "{bits}");
        assert!(found.witness.rounding_cost() < 5e-6);
    }
}

/// Nodes of `p(0|t)` as cuts, lowest first.
fn cover_with(nodes: &[f64]) -> Vec<Option<Cut>> {
    let (mut cuts, mut low) = (vec![], 0.0);
    for node in nodes {
        // The first vertex has p(0|t) = 1, the second is the lower end of what is left.
        let share = (1.0 - node) / (1.0 - low);
        let at = (share * f64::from(1 << CUT_BITS)).round() as u32;
        cuts.extend([Some(Cut { first: 0, second: 1, at }), None]);
        low = 1.0 - f64::from(at) / f64::from(1 << CUT_BITS) * (1.0 - low);
    }
    cuts.push(None);
    cuts
}

/// Least mean of `(1 − Σ p^{1+β})/β`, in nats, to 5e-5, from an independent implementation of the same relaxation: noisy 2→1 code, visibility 0.99,
/// leakage 1e-3, level standard, 12 cells with these nodes of `p(0|t)`.
#[test]
fn power_entropies_of_the_two_to_one_code_on_a_fixed_grid() {
    let cuts = cover_with(&[0.005, 0.02, 0.05, 0.1, 0.2, 0.5, 0.8, 0.9, 0.95, 0.98, 0.995]);
    let (scenario, place) = (scenario(4, 2, 2, 2, 1e-3), code(2, 0.99));
    for (beta, value) in [(0.0003, 0.33287), (0.001, 0.33268), (0.01, 0.33037), (0.1, 0.30874)] {
        let power = (beta * f64::from(1 << POWER_BITS)).round() as u32;
        let (target, place) = (Setting { x: 0, y: 0 }, Place::Behaviour(&place));
        let found = power_entropy_in(&scenario, target, place, power, cuts.clone(), Level::Standard, Limits::default()).unwrap();
        let nats = -found.bound.rounded_up();
        println!("power {beta}: {nats} nats");
        assert!((nats - value).abs() < 5e-5, "{beta}: {nats}, not {value}");
    }
}

/// Covers are made for the data, of few cells. They give what a fine cover made for no data gives, to a thousandth of a bit: 60 cells between
/// `sin²(πi/120)`, whose chords lie at most `(π/60)²/8` nats below Shannon's entropy anywhere, half a thousandth of a bit.
#[test]
fn covers_made_for_the_data_match_a_fine_grid() {
    let nodes: Vec<f64> = (1..60).map(|i| (std::f64::consts::PI * f64::from(i) / 120.0).sin().powi(2)).collect();
    let grid = cover_with(&nodes);
    for (visibility, leakage, beta) in [(0.99, 1e-3, 1e-6), (0.95, 1e-2, 0.01)] {
        let (scenario, place, target) = (scenario(4, 2, 2, 2, leakage), code(2, visibility), Setting { x: 0, y: 0 });
        let (place, power) = (Place::Behaviour(&place), (beta * f64::from(1 << POWER_BITS)).round() as u32);
        let bits = |found: Option<Found>| -found.unwrap().bound.rounded_up() / 2f64.ln();
        let fitted = bits(power_entropy(&scenario, target, place, power, Level::Standard, Limits::default()));
        let fine = bits(power_entropy_in(&scenario, target, place, power, grid.clone(), Level::Standard, Limits::default()));
        println!("visibility {visibility}, leakage {leakage}, power {beta}: {fitted} bit with few cells, {fine} with 60");
        assert!((fitted - fine).abs() < 1e-3, "{fitted} {fine}");
    }
}

/// Leakage 1e-2: the bracket, as above, is [0.2913, 0.305779] bit.
#[test]
fn mean_shannon_entropy_of_the_two_to_one_code_that_leaks_more() {
    let (scenario, place) = (scenario(4, 2, 2, 2, 1e-2), code(2, 0.99));
    let found = power_entropy(&scenario, Setting { x: 0, y: 0 }, Place::Behaviour(&place), 1 << 10, Level::Standard, Limits::default());
    let bits = -found.unwrap().bound.rounded_up() / 2f64.ln();
    println!("{bits} bit");
    assert!((0.2913..=0.305779).contains(&bits), "{bits}");
}

/// Two states with a carrier of dimension 1 that are told apart with success 0.79 at leakage 0.1; the most is 0.8. Three outcomes from two: one that
/// never occurs adds nothing, and one that is split in two by a coin which the adversary tosses adds nothing that she does not know.
/// Derived by hand: the models of two outcomes are among those of three.
#[test]
fn three_outcomes_hold_no_more_than_the_two_they_are_made_of() {
    let target = Setting { x: 0, y: 0 };
    let bound = |outcomes: usize, rows: [Vec<f64>; 2]| {
        let [first, second] = rows;
        let place = vec![vec![first], vec![second]];
        let scenario = every_emission(scenario(2, 1, outcomes, 1, 0.1));
        let found = power_entropy(&scenario, target, Place::Behaviour(&place), 1 << 20, Level::Sharp, Limits::default()).unwrap();
        -found.bound.rounded_up()
    };
    let two = bound(2, [vec![0.79, 0.21], vec![0.21, 0.79]]);
    let never = bound(3, [vec![0.79, 0.21, 0.0], vec![0.21, 0.79, 0.0]]);
    let split = bound(3, [vec![0.79, 0.105, 0.105], vec![0.21, 0.395, 0.395]]);
    println!("two outcomes {two}, one that never occurs {never}, one split {split} nats");
    assert!(two > 0.4 && (two - never).abs() < 1e-5, "{two} {never}");
    // The relaxation may give away more for three outcomes, but never less than nothing.
    assert!(split > 0.1 && split < two + 1e-5, "{two} {split}");
}

/// Three outcomes through the whole pipeline, and back: the power entropy counts, and what it says is confirmed without a solver.
#[test]
fn three_outcomes_are_certified_and_verified() {
    let mut document = RequestDocument {
        scenario: every_emission(scenario(2, 1, 3, 1, 0.1)).into(),
        counts: Some(vec![vec![vec![700_000, 200_000, 100_000]], vec![vec![200_000, 700_000, 100_000]]]),
        behaviour: None,
        rounds: RoundModel::Independent,
        failure: Failure::default(),
        level: LevelChoice::Lean,
        entropy: EntropyChoice::Guessing,
        lost_rounds: None,
        scores: None,
        bracket: false,
    };
    let guessing = certify(&Request::try_from(document.clone()).unwrap()).certificate;
    document.entropy = EntropyChoice::Power;
    let certified = certify(&Request::try_from(document).unwrap());
    let power = certified.certificate.targets[0].power.as_ref().unwrap();
    println!("{} bits, {} from the guessing probability", certified.certificate.certified_bits, guessing.certified_bits);
    assert!(power.min_entropy.is_some_and(|bits| bits > 0.0) && certified.certificate.certified_bits > guessing.certified_bits);
    // No outcome has more entropy than its distribution.
    let shannon: f64 = [0.7f64, 0.2, 0.1].iter().map(|p| -p * p.log2()).sum();
    assert!(power.entropy_per_round < shannon);
    assert_eq!(verify(&certified.certificate, None, &certified.witnesses), Ok(()));
    let mut boastful = certified.certificate.clone();
    boastful.targets[0].power.as_mut().unwrap().entropy_per_round += 1e-3;
    assert!(verify(&boastful, None, &certified.witnesses).is_err());
}
