//! Assuming less, knowing less or computing less never certifies more.

use bitassay::{
    certificate::{Certificate, Reason, Verdict},
    relaxation::level::LevelChoice,
    request::{Failure, RequestDocument},
    scenario::{LeakageDocument, LeakageReading},
};

use crate::rig::{behaviour, code, counts, document, guess, run};

/// Solves of different problems end within this of their optimum.
const SOLVER: f64 = 1e-6;

/// Bounds do not fall, and bits do not rise, along a sequence of ever weaker assumptions.
fn never_more(certificates: &[Certificate]) {
    let bounds: Vec<f64> = certificates.iter().map(guess).collect();
    println!("{bounds:?} {:?}", certificates.iter().map(|c| c.certified_bits).collect::<Vec<_>>());
    assert!(bounds[0] < 1.0, "the first of the sequence should certify something");
    for pair in certificates.windows(2) {
        assert!(guess(&pair[1]) >= guess(&pair[0]) - SOLVER);
        let allowance = SOLVER * 2.0 * pair[0].total_rounds.unwrap() as f64;
        assert!(pair[1].certified_bits as f64 <= pair[0].certified_bits as f64 + allowance);
    }
}

#[test]
fn more_leakage_never_certifies_more() {
    let with = |leakage: f64| run(document(counts(&code(0.99), 1_000_000), 2, leakage)).certificate;
    never_more(&[0.0, 1e-6, 1e-4, 1e-3, 1e-2, 0.1, 0.5].map(with));
}

#[test]
fn leakage_of_one_preparation_more_never_certifies_more() {
    let with = |leakage: [f64; 4]| {
        let mut document = document(counts(&code(0.99), 1_000_000), 2, 0.0);
        document.scenario.leakage = LeakageDocument::PerPreparation(leakage.to_vec());
        run(document).certificate
    };
    never_more(&[[0.0; 4], [0.0, 0.0, 1e-3, 0.0], [0.0, 1e-3, 1e-3, 0.0], [1e-3; 4]].map(with));
}

#[test]
fn a_leakage_on_average_never_certifies_more_than_in_every_emission() {
    let with = |reading| {
        let mut document = document(counts(&behaviour(&[0.9, -0.9], &[1.5], 0.98), 1_000_000), 1, 0.2);
        document.scenario.leakage_holds = reading;
        run(document).certificate
    };
    never_more(&[LeakageReading::EveryEmission, LeakageReading::OnAverage].map(with));
}

#[test]
fn more_confidence_never_certifies_more() {
    let with = |estimation: f64| {
        let failure = Failure { estimation, ..Failure::default() };
        run(RequestDocument { failure, ..document(counts(&code(0.99), 1_000_000), 2, 1e-3) }).certificate
    };
    never_more(&[0.1, 1e-3, 1e-6, 1e-12, 1e-30].map(with));
}

#[test]
fn fewer_rounds_never_certify_more_per_round() {
    let with = |rounds: u64| run(document(counts(&code(0.99), rounds), 2, 1e-3)).certificate;
    never_more(&[100_000_000, 10_000_000, 1_000_000, 100_000, 10_000].map(with));
}

#[test]
fn a_coarser_level_never_certifies_more() {
    for (data, dimension, leakage) in
        [(code(0.99), 2, 1e-3), (code(0.995), 2, 0.0), (behaviour(&[0.3, 1.9, -2.0], &[0.0, 1.2], 0.99), 2, 1e-4)]
    {
        let at = |level| run(RequestDocument { level, ..document(counts(&data, 10_000_000), dimension, leakage) }).certificate;
        never_more(&[LevelChoice::Sharp, LevelChoice::Standard, LevelChoice::Lean].map(at));
    }
}

/// With one dimension per preparation the outcomes can be written into the carrier.
#[test]
fn a_carrier_with_a_dimension_for_every_preparation_certifies_nothing() {
    for (data, dimension) in
        [(code(1.0), 4), (code(1.0), 5), (behaviour(&[0.3, 1.9, -2.0], &[0.0, 1.2], 1.0), 3), (behaviour(&[0.4, 2.0], &[0.0], 1.0), 2)]
    {
        for leakage in [0.0, 1e-3] {
            let certificate =
                run(RequestDocument { level: LevelChoice::Sharp, ..document(counts(&data, 1_000_000), dimension, leakage) }).certificate;
            assert_eq!((certificate.verdict, certificate.reason), (Verdict::Refused, Some(Reason::ZeroBound)));
            assert!(guess(&certificate) >= 1.0 - 1e-12 && certificate.certified_bits == 0);
        }
    }
}
