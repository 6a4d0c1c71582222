//! Rounds with memory: bits from factors that were fixed before the data, with no assumption that rounds are alike or independent.
//!
//! The method is probability estimation, Phys. Rev. A 98, 040304 (2018); the factor made here from affine witnesses is derived below.
//!
//! # Setting
//!
//! Given everything classical, λ, and the past, round i has a behaviour `p(b|x,y)` and leakages `ε^i_x`. Its setting is drawn from
//! `π(x,y)`, independently of the devices, of λ and of the past. T is the set of target settings, `τ_t = π(t)`. For every target t there is a
//! bound that holds for every single behaviour and leakage,
//!
//! ```text
//! Σ_b p(b|t)^{1+β}  ≤  ν₀ᵗ + ν^t·p + μ^t·(ε^i − ε),                                                        (1)
//! ```
//!
//! with the declared leakage ε already in `ν₀ᵗ`. From a power witness, `−η_β ≤ κ + ν·p + μ·(ε^i − ε)`, it follows with
//! `η_β = (1 − Σ_b p^{1+β})/β`: `ν₀ = 1 + βκ`, and `ν` and `μ` are multiplied by β. Since `Σ_b p(b|x,y) = 1`, a constant may be moved from
//! the `ν_{bxy}` of one setting to `ν₀`; this is used to centre them on the behaviour that is expected.
//!
//! # Factors
//!
//! Let `m = max_{0≤q≤1} (q − q^{1+β}) = β/(1+β)^{1+1/β}`, `L_{bxy} = Σ_t τ_t ν^t_{bxy}`, and
//!
//! ```text
//! g = Σ_t τ_t / Σ_t (τ_t ν₀ᵗ + m Σ_b max(L_{bt}, 0)),
//! F(b,x,y) = g (1 − L_{bxy}/τ)                    for a target, τ = π(x,y),
//! F(b,x,y) = 1 − g L_{bxy}/π(x,y)                 for any other setting.
//! ```
//!
//! All factors have to be positive. **Claim:** over one round, given λ and the past,
//!
//! ```text
//! E[F · p(b|x,y)^{β·[target]}]  ≤  1 + g Σ_t τ_t μ^t·(ε^i − ε).                                           (2)
//! ```
//!
//! *Proof.* The expectation is `g Σ_t Σ_b p(b|t)^{1+β} (τ_t − L_{bt}) + Σ_{other} (π − g Σ_b L_{bxy} p(b|x,y))`. By (1), summed with weights
//! `τ_t`, `Σ_t τ_t Σ_b p(b|t)^{1+β} ≤ Σ_t τ_t ν₀ᵗ + L·p + Σ_t τ_t μ^t·(ε^i − ε)`, where `L·p` runs over all settings. The terms of the other
//! settings cancel. At the targets `Σ_b L_{bt} (p − p^{1+β}) ≤ m Σ_b max(L_{bt}, 0)` remains, because `0 ≤ p − p^{1+β} ≤ m`. Together,
//! `g [Σ_t τ_t ν₀ᵗ + m Σ_t Σ_b max(L_{bt}, 0)] + 1 − Σ_t τ_t + … = 1 + …` by the choice of g. ∎
//!
//! # Block
//!
//! As `1 + u ≤ exp(u)`, the product over the rounds of `F p^{β·[target]} exp(−g Σ_t τ_t μ^t·(ε^i − ε))` is a supermartingale that starts at 1. If the
//! mean leakage of the block is within the declared one (read on average), or that of each round is (every emission), the
//! exponentials multiply to at least 1. By Markov's inequality, except with probability δ,
//!
//! ```text
//! Π_{targets} p_i^β · Π F  ≤  1/δ,      so      −log2 Π_{targets} p_i  ≥  (1/β) (Σ_{bxy} n_{bxy} log2 F(b,x,y) − log2(1/δ))  =: H.
//! ```
//!
//! That bounds the guessing probability of the string of target outcomes: for a string s, summing over the outcomes of the other
//! settings, the probability of s together with the event above and a product of factors that gives at least H is at most
//! `2^{-H} Σ Π_{other} p_i`, and the sum of a causal product of probabilities is at most 1. So, up to δ, nobody guesses the target outcomes
//! better than `2^{-H}`, provided that the other outcomes are not published one by one. Publishing the counts of all settings, on which the
//! length depends as well, costs `Σ_{xy} log2 C(n_{xy}+B−1, B−1)` bits.

use num_rational::BigRational;
use num_traits::{One, Signed, Zero};

use super::{
    logarithm::{log2_down, log2_up},
    power::POWER_BITS,
};
use crate::{
    counts::Table,
    exact::{decimal, dyadic, round_down},
    scenario::Setting,
};

/// Settings may be drawn with probabilities that miss the declared ones by a relative `2^-38`: decimals rarely add up to 1 exactly. Each
/// expectation over a round grows by no more than that, and every factor is made smaller by as much.
pub const DISTRIBUTION_BITS: u32 = 38;

/// Bound (1) of one target, centred or not. Shapes: `linear` is `[x][y][b]`.
#[derive(Debug, Clone, PartialEq)]
pub struct RoundBound {
    pub target: Setting,
    /// `ν₀`, the declared leakage included.
    pub constant: BigRational,
    /// `ν`.
    pub linear: Table<BigRational>,
}

impl RoundBound {
    /// From the parts of a power witness: `−η_β ≤ κ + ν·p`.
    pub fn from_power(target: Setting, power: u32, kappa: &BigRational, nu: &Table<BigRational>) -> Self {
        let beta = dyadic(power, POWER_BITS);
        let scale = |values: &Vec<BigRational>| values.iter().map(|value| value * &beta).collect();
        let linear = nu.iter().map(|table| table.iter().map(scale).collect()).collect();
        Self { target, constant: BigRational::one() + &beta * kappa, linear }
    }

    /// The same bound with `ν` centred at every setting on the expected behaviour `[x][y][b]`.
    #[must_use]
    pub fn centred(mut self, expected: &Table<f64>) -> Self {
        for (rows, expected_rows) in self.linear.iter_mut().zip(expected) {
            for (values, probabilities) in rows.iter_mut().zip(expected_rows) {
                // Normalised, so that what is moved is a mean of the values.
                let total: BigRational = probabilities.iter().map(|p| decimal(*p)).sum();
                if total.is_zero() {
                    continue;
                }
                let mean = values.iter().zip(probabilities).map(|(value, p)| value * decimal(*p)).sum::<BigRational>() / total;
                values.iter_mut().for_each(|value| *value -= &mean);
                self.constant += mean;
            }
        }
        self
    }
}

/// Why bounds give no factors.
#[derive(Debug, Clone, Copy, PartialEq, Eq, thiserror::Error)]
pub enum FactorError {
    #[error("there is no target")]
    NoTarget,
    #[error("the bounds and the setting distribution have different shapes")]
    Shape,
    #[error("the factor of preparation {x}, measurement {y}, outcome {b} is not positive at this power")]
    NotPositive { x: usize, y: usize, b: usize },
}

/// `m = β/(1+β)^{1+1/β}`, rounded up.
fn largest_excess(power: u32) -> BigRational {
    let beta = f64::from(power) / 2f64.powi(POWER_BITS as i32);
    let exponent = -(1.0 + 1.0 / beta) * libm::log1p(beta);
    // Each step is good to a unit in the last place; a relative 2^-44 covers them all, the exponent being of order one.
    decimal(beta * libm::exp(exponent) * (1.0 + 2f64.powi(-44)))
}

/// The factors `F`, `[x][y][b]`, rounded down: a smaller factor is one as well. The setting distribution `π`, `[x][y]`, is positive
/// everywhere.
///
/// # Errors
/// A factor that is not positive, or no bounds at all.
pub fn factors(bounds: &[RoundBound], distribution: &[Vec<f64>], power: u32) -> Result<Table<f64>, FactorError> {
    let Some(first) = bounds.first() else { return Err(FactorError::NoTarget) };
    let shape = |bound: &RoundBound| {
        let rows = bound.linear.iter().map(Vec::len).eq(distribution.iter().map(Vec::len));
        rows && distribution.get(bound.target.x).is_some_and(|row| bound.target.y < row.len())
    };
    if !bounds.iter().all(shape) {
        return Err(FactorError::Shape);
    }
    let pi = |setting: Setting| decimal(distribution[setting.x][setting.y]);
    let mut weights: Table<BigRational> =
        first.linear.iter().map(|t| t.iter().map(|v| vec![BigRational::zero(); v.len()]).collect()).collect();
    for bound in bounds {
        let tau = pi(bound.target);
        for (rows, linear) in weights.iter_mut().flatten().zip(bound.linear.iter().flatten()) {
            rows.iter_mut().zip(linear).for_each(|(sum, value)| *sum += value * &tau);
        }
    }
    let excess = largest_excess(power);
    let (mut share, mut denominator) = (BigRational::zero(), BigRational::zero());
    for bound in bounds {
        let tau = pi(bound.target);
        denominator += &tau * &bound.constant;
        let positive = weights[bound.target.x][bound.target.y].iter().filter(|weight| weight.is_positive());
        denominator += positive.sum::<BigRational>() * &excess;
        share += tau;
    }
    if !denominator.is_positive() {
        return Err(FactorError::NoTarget);
    }
    let g = share / denominator;
    let slack = BigRational::one() - dyadic(1, DISTRIBUTION_BITS);
    let mut factors = Vec::new();
    for (x, rows) in weights.iter().enumerate() {
        let mut row_factors = Vec::new();
        for (y, values) in rows.iter().enumerate() {
            let setting = Setting { x, y };
            let is_target = bounds.iter().any(|bound| bound.target == setting);
            let unweighted = if is_target { g.clone() } else { BigRational::one() };
            let exact = values.iter().map(|weight| (&unweighted - &g * weight / pi(setting)) * &slack);
            let rounded: Vec<f64> = exact.map(|factor| round_down(&factor)).collect();
            if let Some(b) = rounded.iter().position(|factor| *factor <= 0.0) {
                return Err(FactorError::NotPositive { x, y, b });
            }
            row_factors.push(rounded);
        }
        factors.push(row_factors);
    }
    Ok(factors)
}

/// `Σ n log2 F`, rounded down. Shapes: both `[x][y][b]`, factors positive.
pub fn log2_product(counts: &Table<u64>, factors: &Table<f64>) -> f64 {
    let cells = counts.iter().flatten().flatten().zip(factors.iter().flatten().flatten());
    // A factor is a decimal; the binary fraction next below it is not above it. A setting without rounds adds nothing.
    let terms = cells.filter(|(n, _)| **n > 0).map(|(n, factor)| (*n as f64 * log2_down(factor.next_down())).next_down());
    terms.fold(0.0, |sum: f64, term| (sum + term).next_down())
}

/// `H = (1/β)(Σ n log2 F − log2(1/δ))` in bits, rounded down, never negative.
pub fn block_min_entropy(log2_product: f64, power: u32, failure: f64) -> f64 {
    let paid = log2_up(failure.next_down().recip().next_up());
    let beta = f64::from(power) / 2f64.powi(POWER_BITS as i32);
    (((log2_product - paid).next_down()) / beta).next_down().max(0.0)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_largest_excess_is_a_maximum_and_an_upper_bound() {
        for power in [1u32 << 10, 1 << 20, 1 << 26, 1 << 30] {
            let beta = f64::from(power) / 2f64.powi(30);
            let excess = crate::exact::round_up(&largest_excess(power));
            let at = |q: f64| -q * (beta * q.ln()).exp_m1();
            let found = (1..100_000).map(|i| at(f64::from(i) / 1e5)).fold(0.0, f64::max);
            assert!(excess >= found && excess < found * (1.0 + 1e-6), "{power}: {excess} {found}");
        }
    }

    /// A source whose outcome nobody can predict better than `q`: the trivial bound `Σ p^{1+β} ≤ 1` gives factors of 1 and nothing else.
    #[test]
    fn the_trivial_bound_certifies_nothing() {
        let linear = vec![vec![vec![BigRational::zero(); 2]; 2]; 2];
        let trivial = RoundBound { target: Setting { x: 0, y: 0 }, constant: BigRational::one(), linear };
        let factors = factors(&[trivial], &[vec![0.25; 2], vec![0.25; 2]], 1 << 20).unwrap();
        // Up to what is given away because settings may be drawn a little off.
        assert!(factors.iter().flatten().flatten().all(|factor| *factor < 1.0 && *factor > 1.0 - 1e-11));
        let counts = vec![vec![vec![1000, 2000]; 2]; 2];
        assert_eq!(block_min_entropy(log2_product(&counts, &factors), 1 << 20, 1e-10), 0.0);
    }

    #[test]
    fn sums_are_rounded_against_the_user() {
        let product = log2_product(&vec![vec![vec![3, 5]]], &vec![vec![vec![2.0, 0.5]]]);
        assert!(product < -2.0 && product > -2.0 - 1e-13);
        // 40 bits of product at β = 1/2, minus 10 bits of failure probability.
        let entropy = block_min_entropy(40.0, 1 << 29, 2f64.powi(-10));
        assert!(entropy < 60.0 && entropy > 60.0 - 1e-11);
    }

    /// At β = 1 the maximum of `q − q²` is 1/4: the bound is above it, by a relative `2⁻⁴⁴` and what the functions miss.
    #[test]
    fn the_largest_excess_is_rounded_up() {
        let over = crate::exact::round_up(&(largest_excess(1 << 30) - decimal(0.25)));
        assert!(over > 2f64.powi(-47) && over < 2f64.powi(-45), "{over}");
    }

    fn rational(value: f64) -> BigRational {
        BigRational::from_float(value).unwrap()
    }

    /// `ν₀ + ν·p`.
    fn value(bound: &RoundBound, behaviour: &Table<f64>) -> BigRational {
        let cells = bound.linear.iter().flatten().flatten().zip(behaviour.iter().flatten().flatten());
        &bound.constant + cells.map(|(value, p)| value * rational(*p)).sum::<BigRational>()
    }

    #[test]
    fn power_witnesses_become_bounds_and_centring_changes_nothing() {
        let nu: Table<BigRational> = [[3.0, -1.0], [0.5, 4.0]].iter().map(|row| vec![row.iter().map(|v| rational(*v)).collect()]).collect();
        let behaviour = vec![vec![vec![0.75, 0.25]], vec![vec![0.125, 0.875]]];
        // −η ≤ −1/4 + ν·p at β = 1/2 is Σ p^{1+β} = 1 − β η ≤ 7/8 + ν·p/2, and ν·p = 2 + 3.5625.
        let bound = RoundBound::from_power(Setting { x: 0, y: 0 }, 1 << 29, &rational(-0.25), &nu);
        assert_eq!(bound.constant, rational(0.875));
        assert_eq!(value(&bound, &behaviour), rational(0.875 + 2.78125));
        // The expected behaviour need not be normalised; where it is nothing, nothing is moved.
        let centred = bound.clone().centred(&vec![vec![vec![0.5, 0.125]], vec![vec![0.0, 0.0]]]);
        assert_eq!(value(&centred, &behaviour), value(&bound, &behaviour));
        let [first, last] = [0, 1].map(|b| centred.linear[0][0][b].clone());
        assert!((first * rational(0.5) + last * rational(0.125)).is_zero());
        assert_eq!(centred.linear[1], bound.linear[1]);
    }

    /// Claim (2) of the documentation, as a sum over outcomes: where (1) holds with equality and `p − p^{1+β}` is at its largest at every
    /// positive weight, nothing is given away but the slack for the setting distribution and the rounding of the excess.
    #[test]
    fn a_round_multiplies_by_one_at_most_and_nearly_so() {
        let beta = 2f64.powi(-10);
        let most = (-beta.ln_1p() / beta).exp();
        let target_row = vec![most, most, 1.0 - 2.0 * most];
        let behaviour = vec![vec![target_row.clone(), vec![0.5, 0.25, 0.25]], vec![target_row.clone(), vec![0.125, 0.5, 0.375]]];
        let distribution = [vec![0.125, 0.375], vec![0.25, 0.25]];
        let targets = [Setting { x: 0, y: 0 }, Setting { x: 1, y: 0 }];
        let linear = [
            [[[0.03, 0.02, 0.0], [0.1, -0.2, 0.05]], [[0.01, 0.04, 0.0], [-0.1, 0.3, 0.2]]],
            [[[0.02, 0.05, 0.0], [-0.04, 0.1, -0.3]], [[0.06, 0.01, 0.0], [0.15, -0.1, 0.02]]],
        ];
        let sum: f64 = target_row.iter().map(|p| p.powf(1.0 + beta)).sum();
        let bounds: Vec<RoundBound> = targets
            .iter()
            .zip(&linear)
            .map(|(target, table)| {
                let linear = table.iter().map(|t| t.iter().map(|row| row.iter().map(|v| rational(*v)).collect()).collect()).collect();
                let mut bound = RoundBound { target: *target, constant: BigRational::zero(), linear };
                bound.constant = rational(sum) - value(&bound, &behaviour);
                bound
            })
            .collect();
        let found = factors(&bounds, &distribution, 1 << 20).unwrap();
        let mut expectation = 0.0;
        for (x, y) in [(0, 0), (0, 1), (1, 0), (1, 1)] {
            for (factor, p) in found[x][y].iter().zip(&behaviour[x][y]) {
                let power = if targets.contains(&Setting { x, y }) { p.powf(1.0 + beta) } else { *p };
                expectation += distribution[x][y] * factor * power;
            }
        }
        let short = 1.0 - expectation;
        assert!(short > 0.9 * 2f64.powi(-38) && short < 1.2 * 2f64.powi(-38), "{short:e}");
    }

    #[test]
    fn what_gives_no_factors_is_refused() {
        let linear = |value: f64| vec![vec![vec![rational(value), rational(-value)]; 2]; 2];
        let bound = |x, y, value, constant| RoundBound { target: Setting { x, y }, constant: rational(constant), linear: linear(value) };
        let of = |bounds: &[RoundBound]| factors(bounds, &[vec![0.25; 2], vec![0.25; 2]], 1 << 20);
        assert!(of(&[bound(1, 1, 0.1, 1.0)]).is_ok());
        assert_eq!(of(&[]), Err(FactorError::NoTarget));
        assert_eq!(of(&[bound(1, 2, 0.1, 1.0)]), Err(FactorError::Shape));
        assert_eq!(of(&[bound(2, 1, 0.1, 1.0)]), Err(FactorError::Shape));
        let mut short = bound(1, 1, 0.1, 1.0);
        short.linear[1].pop();
        assert_eq!(of(&[bound(1, 1, 0.1, 1.0), short]), Err(FactorError::Shape));
        // 1 − g ν with g about 1: the first outcome's is negative.
        assert_eq!(of(&[bound(1, 1, 3.0, 1.0)]), Err(FactorError::NotPositive { x: 0, y: 0, b: 0 }));
        assert_eq!(of(&[bound(1, 1, 0.0, -1.0)]), Err(FactorError::NoTarget));
    }
}
