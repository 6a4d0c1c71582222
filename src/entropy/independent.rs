//! Min-entropy of a block of independent rounds from a bound on a power entropy.
//!
//! Given everything classical, λ, drawn anew in every round, a target round has the outcome probabilities `p_λ(b|t)`. If
//! `Σ_λ q(λ) η_β(p_λ) ≥ E`, then `Σ_λ q(λ) Σ_b p_λ(b|t)^{1+β} ≤ Φ = 1 − βE`, which is the mean of `p_λ(b|t)^β` over one round. Rounds being
//! independent, `Π p_i^β` has a mean of at most `Φ^n`, and by Markov's inequality, except with probability δ',
//!
//! ```text
//! −log2 Π p_i  ≥  (1/β) (−n log2 Φ − log2(1/δ'))  =: H.
//! ```
//!
//! As for rounds with memory, nobody then guesses the string of target outcomes with a probability above `2^{-H}`, up to δ'.

use num_rational::BigRational;
use num_traits::One;

use super::{
    logarithm::log2_up,
    power::{POWER_BITS, power_value},
};
use crate::exact::{dyadic, round_down, round_up};

/// Assumed variance of `ln p` over target rounds, from which the power is chosen. It decides how good the bound is, not whether it holds.
const VARIANCE: f64 = 0.4;

/// Steps of the power in a factor of two.
const STEPS: f64 = 16.0;

/// The power for n target rounds, `√(2 ln(1/δ') / (n v))` and at most 1, in units of `2^-30`. It depends on nothing that was observed but the
/// number of rounds.
///
/// Rounded down to one of a few values, sixteen in a factor of two, so that batches with almost as many rounds have the same power and share
/// witnesses. The bound is flat around the best power: a few per cent off, it is worse by a thousandth of what finite rounds cost.
pub fn power_for(rounds: u64, failure: f64) -> u32 {
    let beta = (2.0 * (1.0 / failure).ln() / (rounds as f64 * VARIANCE)).sqrt().min(1.0);
    let stepped = libm::exp2((libm::log2(beta) * STEPS).floor() / STEPS);
    let scale = f64::from(1u32 << POWER_BITS);
    (stepped * scale).round().clamp(1.0, scale) as u32
}

/// `E` in bits, rounded down, never negative, from an upper bound on `−E` in nats.
pub fn entropy_in_bits(negative: &BigRational) -> f64 {
    (round_down(&-negative).next_down() * std::f64::consts::LOG2_E.next_down()).next_down().max(0.0)
}

/// `H` in bits, rounded down, never negative, from an upper bound on `−E` in nats.
pub fn block_min_entropy(negative: &BigRational, rounds: u64, power: u32, failure: f64) -> f64 {
    let phi = round_up(&(BigRational::one() + dyadic(power, POWER_BITS) * negative));
    let per_round = (-log2_up(phi.next_up())).max(0.0);
    let proved = (rounds as f64 * per_round).next_down();
    let paid = log2_up(failure.next_down().recip().next_up());
    ((proved - paid).next_down() / power_value(power)).next_down().max(0.0)
}

/// Upper bound on `η_β` over the distributions with `low_b ≤ p_b ≤ high_b`, in nats: each term at its largest, and at most `ln B`.
pub fn largest_power_entropy(intervals: &[[f64; 2]], power: u32) -> f64 {
    let beta = power_value(power);
    let term = |p: f64| if p > 0.0 { p * -libm::expm1(beta * libm::log(p)) / beta } else { 0.0 };
    // The term p (1 − p^β)/β rises up to (1+β)^{-1/β} and falls from there.
    let summit = libm::exp(-libm::log1p(beta) / beta);
    let most = |[low, high]: &[f64; 2]| term(summit.clamp(low.max(0.0), high.clamp(low.max(0.0), 1.0)));
    let sum: f64 = intervals.iter().map(most).sum();
    sum.min((intervals.len() as f64).ln()) * (1.0 + 1e-12)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::exact::decimal;

    /// A fair coin: at β = 1 the collision probability is 1/2, and a thousand rounds have a thousand bits less what Markov costs.
    #[test]
    fn a_fair_coin_has_a_bit_a_round() {
        let power = 1u32 << POWER_BITS;
        let entropy = block_min_entropy(&decimal(-0.5), 1000, power, 2f64.powi(-20));
        assert!(entropy < 980.0 && entropy > 980.0 - 1e-9, "{entropy}");
        assert_eq!(block_min_entropy(&decimal(0.1), 1000, power, 0.1), 0.0);
        assert_eq!(block_min_entropy(&decimal(-0.5), 10, power, 2f64.powi(-20)), 0.0);
    }

    #[test]
    fn the_power_falls_with_the_rounds() {
        let powers = [100u64, 10_000, 1_000_000, 1_000_000_000].map(|rounds| power_for(rounds, 1e-10));
        assert!(powers.windows(2).all(|pair| pair[0] > pair[1]), "{powers:?}");
        assert_eq!(powers[0], 1 << POWER_BITS);
    }

    #[test]
    fn the_largest_entropy_is_one() {
        for intervals in [[[0.2, 0.3], [0.7, 0.8]], [[0.0, 1.0], [0.0, 1.0]], [[0.9, 0.9], [0.1, 0.1]]] {
            let bound = largest_power_entropy(&intervals, 1 << 20);
            for i in 0..=100 {
                let p: f64 = f64::from(i) / 100.0;
                if (intervals[0][0]..=intervals[0][1]).contains(&p) && (intervals[1][0]..=intervals[1][1]).contains(&(1.0 - p)) {
                    let shannon: f64 = [p, 1.0 - p].iter().filter(|p| **p > 0.0).map(|p| -p * p.ln()).sum();
                    assert!(shannon <= bound + 1e-3, "{p}: {shannon} {bound}");
                }
            }
        }
    }

    /// At β = 1/2 the number 2 in 1/β counts: Φ = 3/4 for `E = 1/2`, and `log2(4/3) = 2 − log2 3`.
    #[test]
    fn a_smaller_power_multiplies_what_is_left() {
        let entropy = block_min_entropy(&decimal(-0.5), 1000, 1 << 29, 2f64.powi(-20));
        let exact = 2.0 * (415.037_499_278_843_8 - 20.0);
        assert!(entropy < exact && entropy > exact - 1e-9, "{entropy}");
    }

    /// `√(2 · 23.02585 / (10⁶ · 0.4)) = 0.0107298…`, rounded down to a sixteenth of an octave.
    #[test]
    fn the_power_is_that_of_the_formula_or_a_step_below() {
        let beta = power_value(power_for(1_000_000, 1e-10));
        assert!(beta <= 0.010_729_83 && beta >= 0.010_729_82 * 2f64.powf(-1.0 / 16.0), "{beta}");
        let steps = beta.log2() * 16.0;
        assert!((steps - steps.round()).abs() < 1e-5, "{steps}");
        // Almost as many rounds, the same power.
        assert_eq!(power_for(1_000_000, 1e-10), power_for(1_002_000, 1e-10));
    }

    #[test]
    fn nats_are_turned_into_bits() {
        // ln 2 to more digits than a number holds, a little below it.
        let bits = entropy_in_bits(&decimal(-0.693_147_180_559_945_2));
        assert!(bits < 1.0 && bits > 1.0 - 1e-15 * 4.0, "{bits}");
        assert_eq!(entropy_in_bits(&decimal(0.1)), 0.0);
    }

    /// By hand: at β = 1 a term is `p − p²`, at β = 1/2 it is `2 (p − p^{3/2})`, largest at 4/9 with 8/27; in sum no more than `ln B`.
    #[test]
    fn the_largest_entropy_is_attained() {
        let half = 1u32 << 29;
        for (intervals, power, exact) in [
            (vec![[0.2, 0.3], [0.7, 0.8]], 1 << 30, 0.42),
            (vec![[0.0, 1.0], [0.0, 1.0]], 1 << 30, 0.5),
            (vec![[0.9, 0.9], [0.1, 0.1]], 1 << 30, 0.18),
            (vec![[0.0, 0.0], [1.0, 1.0]], 1 << 30, 0.0),
            (vec![[0.0, 1.0]; 3], half, 8.0 / 9.0),
            (vec![[0.0, 1.0]; 2], 1 << 10, std::f64::consts::LN_2),
        ] {
            let bound = largest_power_entropy(&intervals, power);
            assert!(bound >= exact && bound <= exact * (1.0 + 1e-11), "{intervals:?} {power}: {bound} {exact}");
        }
    }
}
