//! Kept witnesses: what they certify for other batches, when they are good enough, and which are dropped.

use std::sync::Arc;

use bitassay::{
    certificate::Verdict,
    certify::{FromPool, certify, certify_from, keepable},
    counts::Table,
    request::{EntropyChoice, Request, RequestDocument},
    scenario::Setting,
    verify::verify,
    witness::{
        check::complete,
        pool::{Kept, MadeFor, Pool, Subject},
        witness::Witness,
    },
};

use crate::rig::{Numbers, code, counts, document, run};

const ROUNDS: u64 = 1_000_000;
const GUESS: Subject = Subject::Guess(Setting { x: 0, y: 0 });

/// Counts that fluctuate about the code's by up to two standard deviations.
fn noisy(visibility: f64, numbers: &mut Numbers) -> Table<u64> {
    let mut table = counts(&code(visibility), ROUNDS);
    for outcomes in table.iter_mut().flatten() {
        let [first, second] = outcomes[..] else { panic!("two outcomes") };
        let deviation = (first as f64 * second as f64 / ROUNDS as f64).sqrt();
        let moved = (first as f64 + 2.0 * deviation * numbers.symmetric()).round() as u64;
        *outcomes = vec![moved, ROUNDS - moved];
    }
    table
}

fn request(document: &RequestDocument) -> Request {
    Request::try_from(document.clone()).unwrap()
}

/// What a solve leaves for later batches.
fn solved(document: &RequestDocument) -> Vec<(Witness, MadeFor)> {
    let request = request(document);
    keepable(&request, &certify(&request))
}

fn pool_of(solved: &[(Witness, MadeFor)]) -> Pool {
    let mut pool = Pool::default();
    for (witness, made_for) in solved {
        pool.add(Arc::new(Kept::try_new(witness, made_for.clone()).unwrap()));
    }
    pool
}

#[test]
fn what_kept_witnesses_certify_is_confirmed_and_loses_no_more_than_estimated() {
    let mut numbers = Numbers(7);
    for (visibility, leakage) in [(0.99, 1e-3), (0.95, 1e-3), (0.99, 1e-2), (0.97, 0.0)] {
        let first = document(noisy(visibility, &mut numbers), 2, leakage);
        let solved = solved(&first);
        let pool = pool_of(&solved);
        let second = document(noisy(visibility, &mut numbers), 2, leakage);
        let FromPool { certificate, loss, .. } = certify_from(&pool, &request(&second), 1e-2).expect("near enough");
        assert_eq!(certificate.verdict, Verdict::Certified);
        let witnesses: Vec<Witness> = solved.iter().map(|(witness, _)| witness.clone()).collect();
        assert_eq!(verify(&certificate, None, &witnesses), Ok(()));
        let fresh = run(second).certificate;
        let lost = fresh.targets[0].min_entropy_per_round - certificate.targets[0].min_entropy_per_round;
        eprintln!("{visibility} {leakage}: lost {lost:.2e} bits, estimated {loss:.2e}");
        // Solves end within 2e-6 in guessing probability.
        assert!((-1e-5..=loss + 1e-5).contains(&lost), "{visibility} {leakage}: lost {lost}, estimated {loss}");
    }
}

#[test]
fn what_was_not_solved_nearby_is_not_certified() {
    let solved = solved(&document(counts(&code(0.99), ROUNDS), 2, 1e-3));
    let pool = pool_of(&solved);
    let certified =
        |visibility: f64, leakage: f64| certify_from(&pool, &request(&document(counts(&code(visibility), ROUNDS), 2, leakage)), 1e-3);
    assert!(certified(0.99, 1e-3).is_some());
    assert!(certified(0.95, 1e-3).is_none(), "a drift");
    assert!(certified(1.01, 1e-3).is_none(), "numbers that no model may have");
    assert!(certified(0.99, 1e-4).is_none(), "a model that was not solved");
    assert!(certified(0.99, 5e-2).is_none(), "a leakage far from the one solved");
    let mut plug_in = document(counts(&code(0.99), ROUNDS), 2, 1e-3);
    plug_in.rounds = bitassay::request::RoundModel::PlugIn;
    assert!(certify_from(&pool, &request(&plug_in), 1.0).is_none(), "a diagnostic");
}

/// A bound below the likeliest outcome proves a contradiction. It is never taken for entropy, whatever loss is acceptable.
#[test]
fn a_vacuous_bound_is_never_taken() {
    let pool = pool_of(&solved(&document(counts(&code(0.99), ROUNDS), 2, 0.0)));
    // Better than any qubit, everywhere: the bound falls below the likeliest outcome, which is more likely than ever.
    let impossible = request(&document(counts(&code(1.05), ROUNDS), 2, 0.0));
    assert!(certify_from(&pool, &impossible, f64::INFINITY).is_none());
}

#[test]
fn a_witness_for_no_leakage_says_nothing_about_leaking_carriers() {
    let exact = solved(&document(counts(&code(0.97), ROUNDS), 2, 0.0));
    let leaking = request(&document(counts(&code(0.97), ROUNDS), 2, 1e-9));
    assert!(certify_from(&pool_of(&exact), &leaking, f64::INFINITY).is_none());
    // The other way round it holds.
    let general = solved(&document(counts(&code(0.97), ROUNDS), 2, 1e-9));
    let exactly = request(&document(counts(&code(0.97), ROUNDS), 2, 0.0));
    assert!(certify_from(&pool_of(&general), &exactly, f64::INFINITY).is_some());
}

#[test]
fn a_power_witness_serves_smaller_powers_only() {
    let with_rounds = |rounds: u64| {
        let mut document = document(counts(&code(0.95), rounds), 2, 1e-3);
        document.entropy = EntropyChoice::Power;
        document
    };
    let solved = solved(&with_rounds(ROUNDS));
    assert_eq!(solved.len(), 2, "one for the guessing probability, one for the power entropy");
    let pool = pool_of(&solved);
    let witnesses: Vec<Witness> = solved.iter().map(|(witness, _)| witness.clone()).collect();
    // More rounds have a smaller power. Their intervals overlap, and lie within.
    let more = certify_from(&pool, &request(&with_rounds(2 * ROUNDS)), f64::MAX).expect("the witness holds");
    assert_eq!(verify(&more.certificate, None, &witnesses), Ok(()));
    let power = more.certificate.targets[0].power.clone().expect("a power entropy");
    assert!(power.min_entropy.unwrap() > 0.0);
    assert!(certify_from(&pool, &request(&with_rounds(ROUNDS / 2)), f64::MAX).is_none(), "a larger power");
}

/// Witnesses that differ, by a multiplier that the constants pay for: the further it is moved, the worse they are.
fn variants(number: usize) -> Vec<Arc<Kept>> {
    let (witness, made_for) = solved(&document(counts(&code(0.99), ROUNDS), 2, 1e-3)).remove(0);
    let variant = |by: usize| {
        let mut variant = witness.clone();
        variant.behaviour[0][0][0] += (by as i64) << 30;
        Arc::new(Kept::try_new(complete(variant).unwrap().witness(), made_for.clone()).unwrap())
    };
    (0..number).map(variant).collect()
}

#[test]
fn the_pool_is_bounded_and_drops_what_is_never_best() {
    let variants = variants(12);
    let mut pool = Pool::new(4, 100);
    let batch = request(&document(counts(&code(0.99), ROUNDS), 2, 1e-3));
    let best = variants[0].witness().digest();
    for kept in &variants {
        let dropped = pool.add(Arc::clone(kept)).expect("new");
        assert!(dropped.iter().all(|dropped| dropped.witness().digest() != best), "the one in use was dropped");
        assert!(pool.len() <= 4);
        let served = certify_from(&pool, &batch, f64::MAX).unwrap();
        assert_eq!(served.kept[0].witness().digest(), best);
        assert_eq!(served.kept[0].subject(), GUESS);
    }
    assert_eq!((pool.len(), pool.add(Arc::clone(&variants[0])).is_none()), (4, true));
    // Over all families together.
    let mut pool = Pool::new(100, 3);
    variants.iter().for_each(|kept| drop(pool.add(Arc::clone(kept))));
    assert_eq!(pool.len(), 3);
}
