//! Several targets, lost rounds, and what is said about them.

use bitassay::{
    certificate::Verdict,
    request::{EntropyChoice, LostRounds, LostTreatment, Request, RequestDocument},
    scenario::Setting,
    verify::verify,
};

use crate::rig::{code, counts, document, run};

#[test]
fn several_targets_have_their_own_bounds_and_add_up() {
    let mut several = document(counts(&code(0.99), 1_000_000), 2, 0.0);
    several.scenario.targets = vec![Setting { x: 0, y: 0 }, Setting { x: 2, y: 1 }];
    let certification = run(several);
    let certificate = &certification.certificate;
    assert_eq!(certificate.verdict, Verdict::Certified);
    assert_eq!(certificate.targets.len(), 2);
    assert_eq!(certificate.certified_bits, certificate.targets.iter().map(|target| target.certified_bits).sum::<u64>());
    // One region serves both, so the estimation failure is counted once; the two hashes share theirs.
    assert!((certificate.failure.unwrap().total - 2e-10).abs() < 1e-24);
    let hashing = certificate.targets[0].hashing_cost.unwrap();
    assert!((hashing - 2.0 * (2e10f64).log2()).abs() < 1e-9, "{hashing}");
    assert_eq!(verify(certificate, None, &certification.witnesses), Ok(()));
    // A record that leaves out a target of its scenario is not confirmed.
    let mut fewer = certificate.clone();
    fewer.targets.pop();
    fewer.certified_bits = fewer.targets[0].certified_bits;
    fewer.bits_per_round = (fewer.certified_bits as f64 / 8e6).next_down();
    assert!(verify(&fewer, None, &certification.witnesses).is_err());
    let alone = run(document(counts(&code(0.99), 1_000_000), 2, 0.0)).certificate;
    let of_two = certificate.targets[0].guessing_probability_bound.unwrap();
    assert!((of_two - alone.targets[0].guessing_probability_bound.unwrap()).abs() < 1e-9);
    assert!(certificate.targets[0].certified_bits < alone.certified_bits);
}

fn lost(treatment: LostTreatment) -> RequestDocument {
    let lost_rounds = Some(LostRounds { counts: vec![vec![5_000; 2]; 4], treatment });
    RequestDocument { lost_rounds, ..document(counts(&code(0.99), 1_000_000), 2, 0.0) }
}

#[test]
fn lost_rounds_are_counted_or_said_to_be_left_out() {
    let plain = run(document(counts(&code(0.99), 1_000_000), 2, 0.0)).certificate;
    let counted = run(lost(LostTreatment::AsOutcome(1)));
    assert_eq!(counted.certificate.total_rounds, Some(8_040_000));
    assert!(counted.certificate.certified_bits < plain.certified_bits, "counting losses as an outcome costs something");
    assert!(counted.certificate.warnings.is_empty());
    assert_eq!(verify(&counted.certificate, None, &counted.witnesses), Ok(()));
    let left_out = run(lost(LostTreatment::FairSampling));
    assert_eq!(left_out.certificate.certified_bits, plain.certified_bits);
    assert!(left_out.certificate.warnings[0].contains("40000 lost rounds"), "{:?}", left_out.certificate.warnings);
    assert!(left_out.certificate.assumptions.iter().any(|text| text.starts_with("Fair sampling")));
    assert_eq!(verify(&left_out.certificate, None, &left_out.witnesses), Ok(()));
    // A record that hides the assumption is not confirmed.
    let mut silent = left_out.certificate.clone();
    silent.warnings.clear();
    assert!(verify(&silent, None, &left_out.witnesses).is_err());
}

#[test]
fn lost_rounds_of_another_shape_are_turned_away() {
    let mut wrong = lost(LostTreatment::AsOutcome(2));
    assert_eq!(Request::try_from(wrong.clone()).unwrap_err().pointer, "/lost_rounds/treatment/as-outcome");
    wrong.lost_rounds = Some(LostRounds { counts: vec![vec![1; 2]; 3], treatment: LostTreatment::FairSampling });
    assert_eq!(Request::try_from(wrong).unwrap_err().pointer, "/lost_rounds/counts");
}

/// A power entropy gives more bits from the same counts, and is confirmed without a solver.
#[test]
fn a_power_entropy_gives_more_bits() {
    let plain = document(counts(&code(0.99), 1_000_000), 2, 0.0);
    let guessing = run(RequestDocument { entropy: EntropyChoice::Guessing, ..plain.clone() }).certificate;
    assert!(guessing.targets[0].power.as_ref().is_some_and(|power| power.min_entropy.is_none()), "shown, but no bits from it");
    let certification = run(RequestDocument { entropy: EntropyChoice::Auto, ..plain });
    let certificate = &certification.certificate;
    let power = certificate.targets[0].power.as_ref().expect("a power entropy");
    println!("{} bits by guessing, {} by {power:?}", guessing.certified_bits, certificate.certified_bits);
    assert!(certificate.certified_bits > 2 * guessing.certified_bits);
    assert_eq!(certificate.failure, guessing.failure);
    // H = (1/β)(−n log2 Φ − log2(1/δ')) with Φ = 1 − βE, in a calculator's precision.
    let beta = f64::from(power.power) / 2f64.powi(30);
    let phi = 1.0 - beta * power.entropy_per_round * std::f64::consts::LN_2;
    let block = (-1e6 * phi.log2() - (1.0 / power.failure.unwrap()).log2()) / beta;
    let found = power.min_entropy.unwrap();
    assert!((found - block).abs() < 1e-6 * block && found <= block + 1e-6 * block);
    // Not more than Shannon allows at these frequencies.
    let p: f64 = 0.5 * (1.0 + 0.99 / 2f64.sqrt());
    assert!(power.entropy_per_round < -p * p.log2() - (1.0 - p) * (1.0 - p).log2());
    assert_eq!(verify(certificate, None, &certification.witnesses), Ok(()));

    let mut changed = certificate.clone();
    *changed.targets[0].power.as_mut().unwrap().min_entropy.as_mut().unwrap() += 1.0;
    assert!(verify(&changed, None, &certification.witnesses).is_err());
    let mut changed = certificate.clone();
    changed.targets[0].power.as_mut().unwrap().power *= 2;
    assert!(verify(&changed, None, &certification.witnesses).is_err());
    let mut changed = certificate.clone();
    changed.entropy = EntropyChoice::Guessing;
    assert!(verify(&changed, None, &certification.witnesses).is_err());
}

/// Where no bits are to be had by guessing, none come from elsewhere.
#[test]
fn a_power_entropy_finds_nothing_where_there_is_nothing() {
    let request = RequestDocument { entropy: EntropyChoice::Power, ..document(counts(&code(0.7), 1_000_000), 2, 0.0) };
    let certification = run(request);
    assert_eq!(certification.certificate.verdict, Verdict::Refused);
    assert_eq!(verify(&certification.certificate, None, &certification.witnesses), Ok(()));
}
