//! How many bits a two-universal hash may take from the outcomes of one target setting.
//!
//! With independent rounds the min-entropy of n target outcomes is `H = −n log2 P_g`. Publishing the counts, and letting the
//! length depend on them, costs at most `log2 C(n+B−1, B−1)` bits. A two-universal hash to
//!
//! ```text
//! ℓ = ⌊H − log2 C(n+B−1, B−1) − 2 log2(1/ε_hash)⌋,   never below 0,
//! ```
//!
//! bits leaves them within `ε_hash` of uniform given classical side information (leftover hash lemma, IEEE Trans. Inf. Theory 57,
//! 5524 (2011), arXiv:1002.2436; the conservative form without its +2).

use super::logarithm::{log2_down, log2_up};

/// Min-entropy per round, `−log2 P_g` in bits, rounded down, for a bound `P_g` in `(0, 1]`. Never negative.
pub fn min_entropy_per_round(guessing_probability: f64) -> f64 {
    // The bound is a decimal; the binary fraction next above it is not below it.
    (-log2_up(guessing_probability.next_up())).max(0.0)
}

/// `n · h` bits, rounded down; n at most 2⁵³.
pub fn min_entropy(rounds: u64, per_round: f64) -> f64 {
    if per_round > 0.0 { (rounds as f64 * per_round).next_down().max(0.0) } else { 0.0 }
}

/// `log2 C(n+B−1, B−1)`, rounded up: bits given away by publishing the counts of one setting.
pub fn publication_cost(rounds: u64, outcomes: usize) -> f64 {
    let factor = |j: f64| log2_up(((rounds as f64 + j).next_up() / j).next_up());
    (1..outcomes).fold(0.0, |sum: f64, j| (sum + factor(j as f64)).next_up())
}

/// `2 log2(1/ε_hash)`, rounded up.
pub fn hashing_cost(failure: f64) -> f64 {
    // The failure probability is a decimal, perhaps a little smaller than the binary fraction that stands for it.
    (-2.0 * log2_down(failure.next_down())).next_up()
}

/// Whole bits that remain of `min_entropy` bits after the costs.
pub fn extractable(min_entropy: f64, costs: &[f64]) -> u64 {
    let left = costs.iter().fold(min_entropy, |left, cost| (left - cost).next_down());
    // A float cast to an integer saturates: below zero, and for NaN, it is 0.
    left.floor() as u64
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn entropy_of_a_fair_coin_is_just_below_one_bit() {
        let h = min_entropy_per_round(0.5);
        assert!(h < 1.0 && h > 1.0 - 1e-14);
        assert_eq!(min_entropy_per_round(1.0), 0.0);
        assert_eq!(min_entropy(1_000, 0.0), 0.0);
    }

    #[test]
    fn publication_cost_is_the_logarithm_of_the_number_of_count_vectors() {
        // C(10+1, 1) = 11, C(10+2, 2) = 66, C(5+3, 3) = 56
        for (rounds, outcomes, vectors) in [(10u64, 2usize, 11.0f64), (10, 3, 66.0), (5, 4, 56.0)] {
            let cost = publication_cost(rounds, outcomes);
            assert!(cost >= vectors.log2() && cost < vectors.log2() + 1e-12);
        }
    }

    #[test]
    fn nothing_is_extracted_from_less_than_the_costs() {
        assert_eq!(extractable(100.0, &[60.0, 41.0]), 0);
        assert_eq!(extractable(100.5, &[40.0, 20.0]), 40);
        assert_eq!(extractable(f64::NAN, &[]), 0);
    }

    #[test]
    fn entropies_and_costs_are_rounded_against_the_user() {
        let bits = min_entropy(1_000, 0.5);
        assert!(bits < 500.0 && bits > 500.0 - 1e-12);
        // −log2 0.8 = log2 5 − 2.
        let h = min_entropy_per_round(0.8);
        assert!(h < 0.321_928_094_887_362_4 && h > 0.321_928_094_887_362_4 - 1e-14, "{h}");
        // 2 · 10 bits for a failure probability of 2⁻¹⁰.
        let cost = hashing_cost(2f64.powi(-10));
        assert!(cost > 20.0 && cost < 20.0 + 1e-13, "{cost}");
    }
}
