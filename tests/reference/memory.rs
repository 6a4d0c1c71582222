//! Rounds with memory.

use bitassay::{
    certificate::Certificate,
    certify::certify_block,
    commitment::{Commitment, CommitmentDocument, Plan, commit},
    counts::Counts,
    relaxation::level::LevelChoice,
    request::{Failure, LostRounds, LostTreatment},
    verify::verify,
    witness::witness::Witness,
};

use crate::codes::{code, scenario};

fn committed(rounds: u64, level: LevelChoice) -> (Commitment, Vec<Witness>) {
    let document = CommitmentDocument {
        scenario: scenario(4, 2, 2, 2, 1e-3).into(),
        expected_behaviour: code(2, 0.99),
        setting_distribution: vec![vec![0.125; 2]; 4],
        rounds,
        failure: Failure::default(),
        level,
    };
    commit(&Plan::try_from(document).unwrap()).unwrap()
}

/// An independent implementation with fixed cells: 0.414 bit per target round at a million rounds (noisy 2→1 code, visibility 0.99,
/// leakage 1e-3, level standard, δ = 1e-10, uniform settings) and 0.480 asymptotically. Better placed cells give a little more, also
/// after publication and hashing.
#[test]
fn a_million_rounds_of_the_noisy_code() {
    let (commitment, witnesses) = committed(1_000_000, LevelChoice::Standard);
    println!("{} bits per target round, power {}", commitment.expected_bits_per_target_round, commitment.power);
    assert!((0.414..0.4803).contains(&commitment.expected_bits_per_target_round));
    assert_eq!(commitment.confirm(&witnesses.iter().collect::<Vec<_>>()), Ok(()));
}

/// The account of a block against a sum with a calculator's precision.
#[test]
fn a_block_is_accounted_for_as_written() {
    let (commitment, witnesses) = committed(8_000_000, LevelChoice::Lean);
    let right = |p: f64| (p * 1e6f64).round() as u64;
    let table = code(2, 0.99).iter().map(|t| t.iter().map(|p| vec![right(p[0]), 1_000_000 - right(p[0])]).collect()).collect();
    let counts = Counts::try_new(table, commitment.scenario.geometry()).unwrap();
    assert!(commitment.accepts(&counts).is_ok());
    let account = commitment.account(&counts);
    let cells = counts.table().iter().flatten().flatten().zip(commitment.factors.iter().flatten().flatten());
    let sum: f64 = cells.map(|(n, factor)| *n as f64 * factor.log2()).sum();
    let beta = f64::from(commitment.power) / 2f64.powi(30);
    let entropy = (sum - 1e10f64.log2()) / beta;
    let publication = 8.0 * 1_000_001f64.log2();
    let hashing = 2.0 * 1e10f64.log2();
    let bits = entropy - publication - hashing;
    assert!((account.certified_bits as f64) <= bits && (account.certified_bits as f64) > bits - 2.0, "{account:?} {bits}");
    assert!((account.certified_bits as f64 - commitment.expected_bits).abs() < 10.0);
    // Three bits of uniform settings a round, far more than comes out of one target in eight.
    assert!((account.setting_cost_per_round - 3.0).abs() < 1e-12 && account.net_bits_per_round < -2.9);
    // The record is confirmed from commitment and counts; not without its assumptions, nor with a warning hidden.
    let lost = LostRounds { counts: vec![vec![3; 2]; 4], treatment: LostTreatment::FairSampling };
    let certificate = certify_block(&commitment, LevelChoice::Lean, counts.table().clone(), Some(lost), true).unwrap();
    assert_eq!(verify(&certificate, Some(&commitment), &witnesses), Ok(()));
    assert_eq!(certificate.warnings.len(), 1);
    for hide in [|c: &mut Certificate| drop(c.assumptions.pop()), |c: &mut Certificate| c.warnings.clear()] {
        let mut silent = certificate.clone();
        hide(&mut silent);
        assert!(verify(&silent, Some(&commitment), &witnesses).is_err());
    }
    // A changed factor does not follow from the witness.
    let mut changed = commitment.clone();
    changed.factors[0][0][0] = changed.factors[0][0][0].next_up();
    assert!(changed.confirm(&witnesses.iter().collect::<Vec<_>>()).is_err());
    assert!(commitment.confirm(&[]).is_err());
}
