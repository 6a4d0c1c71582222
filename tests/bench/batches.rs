//! Batches of one rig: the 2→1 code on a qubit at visibility 0.99, with a leakage of 1e-3 and a million rounds per setting.

use rand::{SeedableRng, rngs::SmallRng};
use rand_distr::{Binomial, Distribution};
use serde_json::{Value, json};

const VISIBILITY: f64 = 0.99;
const ROUNDS: u64 = 1_000_000;

pub fn scenario() -> Value {
    json!({ "preparations": 4, "measurements": 2, "outcomes": 2, "carrier_dimension": 2, "leakage": 0.001, "targets": [[0, 0]] })
}

pub fn profile() -> Value {
    json!({ "scenario": scenario(), "rounds": "independent" })
}

/// Draws batches, no two alike.
pub struct Batches {
    random: SmallRng,
    right: Binomial,
}

impl Batches {
    pub fn new(seed: u64) -> Self {
        let right = 0.5 + VISIBILITY * (0.5f64.sqrt() / 2.0);
        Self { random: SmallRng::seed_from_u64(seed), right: Binomial::new(ROUNDS, right).expect("a probability") }
    }

    /// Counts `[x][y][b]`.
    pub fn draw(&mut self) -> Vec<Vec<[u64; 2]>> {
        let mut setting = |x: usize, y: usize| {
            let right = self.right.sample(&mut self.random);
            if x >> y & 1 == 0 { [right, ROUNDS - right] } else { [ROUNDS - right, right] }
        };
        (0..4).map(|x| (0..2).map(|y| setting(x, y)).collect()).collect()
    }

    /// The body of a post.
    pub fn body(&mut self) -> String {
        let counts = self.draw();
        format!("{{\"counts\":{counts:?},\"started_at\":\"2026-05-01T06:00:00Z\",\"ended_at\":\"2026-05-01T18:00:00Z\"}}")
    }
}
