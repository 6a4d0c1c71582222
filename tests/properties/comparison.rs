//! The table of both round models against what each model really gives.

use bitassay::{
    certify::certify,
    commitment::{CommitmentDocument, Plan, commit},
    comparison::{Comparison, ComparisonDocument, Draw},
    fault::parse,
    request::{EntropyChoice, Request, RequestDocument, RoundModel},
};

fn document() -> ComparisonDocument {
    let text = r#"{"scenario": {"preparations": 2, "measurements": 1, "outcomes": 2, "carrier_dimension": 1, "leakage": 0.1, "targets": [[0, 0]]},
        "expected_behaviour": [[[0.78, 0.22]], [[0.22, 0.78]]], "level": "lean"}"#;
    parse(text.as_bytes()).unwrap()
}

#[test]
fn the_table_shows_what_both_models_give() {
    let comparison = Comparison::try_from(document()).unwrap();
    let lines = comparison.table(&[100_000, 1_000_000], &[Draw::Uniform, Draw::TargetShare(0.9)], |_, _| {}).unwrap();
    assert_eq!(lines.len(), 4);
    for line in &lines {
        let distribution = vec![vec![line.target_share], vec![1.0 - line.target_share]];
        let ComparisonDocument { scenario, expected_behaviour, failure, level } = document();
        let plan =
            CommitmentDocument { scenario, expected_behaviour, setting_distribution: distribution, rounds: line.rounds, failure, level };
        let committed = commit(&Plan::try_from(plan).unwrap()).unwrap().0;
        let ratio = line.memory.bits as f64 / committed.expected_bits;
        println!("{line:?}: committed {}", committed.expected_bits);
        assert!(ratio > 0.97, "{line:?}: a commitment gives {}", committed.expected_bits);

        let rounds = |share: f64| (line.rounds as f64 * share * 0.78).round() as u64;
        let total = |share: f64| (line.rounds as f64 * share).round() as u64;
        let (first, second) = (line.target_share, 1.0 - line.target_share);
        let counts =
            vec![vec![vec![rounds(first), total(first) - rounds(first)]], vec![vec![total(second) - rounds(second), rounds(second)]]];
        let ComparisonDocument { scenario, failure, level, .. } = document();
        let request = RequestDocument {
            scenario,
            counts: Some(counts),
            behaviour: None,
            rounds: RoundModel::Independent,
            failure,
            level,
            entropy: EntropyChoice::Power,
            lost_rounds: None,
            scores: None,
            bracket: false,
        };
        let certified = certify(&Request::try_from(request).unwrap()).certificate.certified_bits;
        let ratio = line.independent.bits as f64 / certified as f64;
        println!("  independent {certified}");
        assert!((0.9..1.05).contains(&ratio), "{line:?}: a batch gives {certified}");
        // Settings cost what their entropy is.
        let entropy: f64 = [first, second].iter().map(|p| -p * p.log2()).sum();
        assert!((line.setting_cost_per_round - entropy).abs() < 1e-12);
        let net = line.memory.bits as f64 / line.rounds as f64 - entropy;
        assert!((line.memory.net_bits_per_round - net).abs() < 1e-12);
    }
}

#[test]
fn what_cannot_be_compared_is_refused() {
    let pointer = |change: fn(&mut ComparisonDocument)| {
        let mut changed = document();
        change(&mut changed);
        let table = Comparison::try_from(changed).and_then(|comparison| comparison.table(&[1000], &[Draw::Uniform], |_, _| {}));
        table.unwrap_err().pointer
    };
    assert_eq!(pointer(|d| d.scenario.targets.clear()), "/scenario/targets");
    assert_eq!(pointer(|d| d.expected_behaviour[0][0][0] = 0.9), "/expected_behaviour/0/0");
    assert_eq!(pointer(|d| d.failure.estimation = 2.0), "/failure/estimation");
    // No model tells the states apart so well.
    assert_eq!(pointer(|d| d.expected_behaviour = vec![vec![vec![0.99, 0.01]], vec![vec![0.01, 0.99]]]), "/expected_behaviour");
    let comparison = Comparison::try_from(document()).unwrap();
    for share in [0.0, 1.0, f64::NAN] {
        assert!(comparison.table(&[1000], &[Draw::TargetShare(share)], |_, _| {}).is_err(), "{share}");
    }
}
