//! scratch
use crate::codes::{code, scenario};
use bitassay::{commitment::*, relaxation::level::LevelChoice, request::Failure};
#[test]
fn scratch() {
    for n in [100_000u64, 1_000_000, 10_000_000, 100_000_000] {
        let t = std::time::Instant::now();
        let doc = CommitmentDocument {
            scenario: scenario(4, 2, 2, 2, 1e-3).into(),
            expected_behaviour: code(2, 0.99),
            setting_distribution: vec![vec![0.125; 2]; 4],
            rounds: n,
            failure: Failure { estimation: 1e-10, hashing: 1e-10 },
            level: LevelChoice::Standard,
        };
        let (c, w) = commit(&Plan::try_from(doc).unwrap()).unwrap();
        println!(
            "{n}: {} + {} bits per target round {:?} curve {:?} {:?}",
            c.expected_bits_per_target_round,
            (c.expected_bits + 67.0 + 8.0 * 20.0) / (n as f64 / 8.0),
            c.power,
            c.curve,
            t.elapsed()
        );
        c.confirm(&w.iter().collect::<Vec<_>>()).unwrap();
    }
}
