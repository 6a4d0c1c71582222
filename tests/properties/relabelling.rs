//! Names of preparations, measurements and outcomes mean nothing.

use bitassay::{
    counts::Table,
    request::RequestDocument,
    scenario::{LeakageDocument, Setting},
};

use crate::rig::{behaviour, counts, document, guess, run};

/// `new[x][y][b] = old[px[x]][py[y]][pb[y][b]]`.
fn relabelled(table: &Table<u64>, px: &[usize], py: &[usize], pb: &[Vec<usize>]) -> Table<u64> {
    px.iter().map(|x| py.iter().enumerate().map(|(y, old)| pb[y].iter().map(|b| table[*x][*old][*b]).collect()).collect()).collect()
}

/// The same experiment under other names: the target and the leakages move with their preparation.
fn renamed(original: &RequestDocument, px: &[usize], py: &[usize], pb: &[Vec<usize>]) -> RequestDocument {
    let mut document = original.clone();
    document.counts = original.counts.as_ref().map(|table| relabelled(table, px, py, pb));
    let Setting { x, y } = original.scenario.targets[0];
    let position = |order: &[usize], of: usize| order.iter().position(|old| *old == of).unwrap();
    document.scenario.targets = vec![Setting { x: position(px, x), y: position(py, y) }];
    if let LeakageDocument::PerPreparation(values) = &original.scenario.leakage {
        document.scenario.leakage = LeakageDocument::PerPreparation(px.iter().map(|old| values[*old]).collect());
    }
    document
}

fn assert_same(original: &RequestDocument, others: &[RequestDocument]) {
    let certificate = run(original.clone()).certificate;
    assert!(certificate.certified_bits > 0, "the test should certify something");
    for other in others {
        let renamed = run(other.clone()).certificate;
        assert_eq!(renamed.verdict, certificate.verdict);
        // The solver takes another path to the same optimum.
        assert!((guess(&renamed) - guess(&certificate)).abs() < 5e-7, "{} {}", guess(&renamed), guess(&certificate));
        let difference = renamed.certified_bits.abs_diff(certificate.certified_bits);
        assert!(difference as f64 <= 1e-6 * certificate.total_rounds.unwrap() as f64);
    }
}

#[test]
fn two_outcomes() {
    let mut original = document(counts(&behaviour(&[0.7, -0.8, 2.4, -2.3], &[0.0, 1.6], 0.995), 10_000_000), 2, 0.0);
    original.scenario.leakage = LeakageDocument::PerPreparation(vec![1e-4, 0.0, 2e-4, 1e-3]);
    let keep = vec![vec![0, 1]; 2];
    assert_same(
        &original,
        &[
            renamed(&original, &[2, 0, 3, 1], &[0, 1], &keep),
            renamed(&original, &[0, 1, 2, 3], &[1, 0], &keep),
            renamed(&original, &[0, 1, 2, 3], &[0, 1], &[vec![1, 0], vec![0, 1]]),
            renamed(&original, &[3, 2, 1, 0], &[1, 0], &[vec![1, 0], vec![1, 0]]),
        ],
    );
}

/// With three outcomes the last one has no letter of its own, so that renaming outcomes changes the programme.
#[test]
fn three_outcomes() {
    let behaviour = vec![vec![vec![0.21, 0.01, 0.78]], vec![vec![0.01, 0.21, 0.78]]];
    let mut original = document(counts(&behaviour, 50_000_000), 1, 0.1);
    original.scenario.leakage_holds = bitassay::scenario::LeakageReading::EveryEmission;
    let renamings = [vec![1, 0, 2], vec![2, 0, 1], vec![0, 2, 1]];
    let others = renamings.map(|order| renamed(&original, &[0, 1], &[0], &[order]));
    assert_same(&original, &others);
}
