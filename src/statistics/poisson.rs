//! Exact (Garwood) confidence limits of the mean of a Poisson law, rounded outwards.
//!
//! For k events and failure probability α the upper limit is the least λ with `P(Poi(λ) ≤ k) ≤ α`, the lower limit the largest λ with
//! `P(Poi(λ) ≥ k) ≤ α` (F. Garwood, Biometrika 28, 437 (1936)). As with the binomial intervals no inverse function is trusted: every
//! limit is one at which an upper bound on the tail was evaluated and found small enough. The bounds are the tails' own series,
//!
//! ```text
//! P(X ≤ k) = pmf(k) (1 + r_0 + r_0 r_1 + …),   r_i = (k−i) / λ         (λ > k),
//! P(X ≥ k) = pmf(k) (1 + s_1 + s_1 s_2 + …),   s_i = λ / (k+i)         (λ < k + 1),
//! ```
//!
//! whose ratios decrease, so that what is cut off is bounded by a geometric series; `ln pmf(k) = −λ + k ln λ − ln k!` takes a library's
//! log-gamma function and an allowance for its rounding errors.

/// Terms of a series that are summed one by one.
const TERMS: u64 = 500;
/// Allowance for rounding, relative to the size of the summands of `ln pmf`: 64 units in the last place.
const ALLOWANCE: f64 = 64.0 * f64::EPSILON;

/// Upper bound on `ln P(Poi(λ) ≤ k)` for `λ > 0`; 0 where `λ ≤ k`, on which side the series is of no use.
pub fn ln_lower_tail_bound(k: u64, mean: f64) -> f64 {
    let count = k as f64;
    ln_tail_bound(k, mean, k, |i| (count - i) / mean)
}

/// Upper bound on `ln P(Poi(λ) ≥ k)` for `λ > 0`; 0 where `λ ≥ k + 1`, on which side the series is of no use.
pub fn ln_upper_tail_bound(k: u64, mean: f64) -> f64 {
    let count = k as f64;
    ln_tail_bound(k, mean, u64::MAX, |i| mean / (count + 1.0 + i))
}

/// `ln pmf(k)` plus the logarithm of a series of `last + 1` terms whose successive ratios are given and decrease.
fn ln_tail_bound(k: u64, mean: f64, last: u64, ratio: impl Fn(f64) -> f64) -> f64 {
    if ratio(0.0) >= 1.0 {
        return 0.0;
    }
    let count = k as f64;
    let pieces = [-mean, count * libm::log(mean), -libm::lgamma(count + 1.0)];
    let size: f64 = pieces.iter().map(|piece| piece.abs()).sum();
    let ln_pmf = pieces.iter().sum::<f64>() + ALLOWANCE * (1.0 + size);
    let (mut term, mut sum) = (1.0, 1.0);
    let mut i = 0u64;
    while i < last.min(TERMS) && term > f64::EPSILON * sum {
        term *= ratio(i as f64);
        sum += term;
        i += 1;
    }
    if i < last {
        let next = ratio(i as f64);
        sum += term * next / (1.0 - next);
    }
    (ln_pmf + libm::log(sum * (1.0 + ALLOWANCE))).min(0.0)
}

/// One-sided upper limit: the mean behind k events exceeds it with probability at most `failure`, in `(0, 0.5]`. Events, rounded up;
/// k at most 2⁵³. `−ln failure` for `k = 0`.
pub fn upper_limit(k: u64, failure: f64) -> f64 {
    let allowed = libm::log(failure);
    let confirmed = |mean: f64| ln_lower_tail_bound(k, mean) <= allowed;
    let low = k as f64;
    let mut step = 1.0;
    while !confirmed(low + step) {
        step *= 2.0;
    }
    // Two units more, since the number is also read as a decimal.
    bisect(low, low + step, confirmed).next_up().next_up()
}

/// One-sided lower limit: the mean behind k events is below it with probability at most `failure`, in `(0, 0.5]`. Events, rounded down;
/// k at most 2⁵³. Zero for `k = 0`.
pub fn lower_limit(k: u64, failure: f64) -> f64 {
    if k == 0 {
        return 0.0;
    }
    let allowed = libm::log(failure);
    // Searched over the distance from the count, so that the confirmed end is the upper one here too; a mean of zero needs no proof.
    let count = k as f64;
    let confirmed = |distance: f64| distance >= count || ln_upper_tail_bound(k, count - distance) <= allowed;
    let distance = bisect(0.0, count, confirmed);
    (count - distance).next_down().next_down().max(0.0)
}

/// Two-sided interval for the mean behind k events, missing it with probability at most `alpha`, in `(0, 1)`. Rounded outwards.
pub fn garwood(k: u64, alpha: f64) -> [f64; 2] {
    [lower_limit(k, 0.5 * alpha), upper_limit(k, 0.5 * alpha)]
}

/// A confirmed value in `(low, high]`, as small as bisection finds; `high` is confirmed already.
fn bisect(mut low: f64, mut high: f64, confirmed: impl Fn(f64) -> bool) -> f64 {
    loop {
        let middle = 0.5 * (low + high);
        if middle <= low || middle >= high || high - low <= 1e-14 * high {
            return high;
        }
        if confirmed(middle) {
            high = middle;
        } else {
            low = middle;
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::exact::{decimal, round_up};
    use num_rational::BigRational;
    use num_traits::{One, Zero};

    /// Bounds on `e^λ` for a rational λ, from its series.
    fn exponential(mean: &BigRational) -> [BigRational; 2] {
        let (mut term, mut sum) = (BigRational::one(), BigRational::zero());
        let mut i = 0u64;
        loop {
            sum += &term;
            i += 1;
            term = term * mean / BigRational::from_integer(i.into());
            let ratio = mean / BigRational::from_integer((i + 1).into());
            if ratio < BigRational::new(1.into(), 2.into()) && term < BigRational::new(1.into(), num_bigint::BigInt::from(10).pow(40)) {
                // The rest is below twice its first term.
                let rest = &term + &term;
                return [sum.clone(), sum + rest];
            }
        }
    }

    /// `e^λ P(X ≤ k)`.
    fn partial(k: u64, mean: &BigRational) -> BigRational {
        let (mut term, mut sum) = (BigRational::one(), BigRational::one());
        for i in 1..=k {
            term = term * mean / BigRational::from_integer(i.into());
            sum += &term;
        }
        sum
    }

    /// The defining property, in exact arithmetic, and that the limit is not needlessly wide.
    #[test]
    fn limits_satisfy_their_definition_exactly() {
        for k in [0u64, 1, 2, 5, 12] {
            for failure in [0.5, 0.025, 1e-6, 1e-12] {
                let alpha = decimal(failure);
                let high = decimal(upper_limit(k, failure));
                let shift = decimal(1e-9);
                assert!(partial(k, &high) <= &alpha * &exponential(&high)[0], "{k} at {failure}");
                let inside = &high - &shift;
                assert!(partial(k, &inside) > &alpha * &exponential(&inside)[1], "{k} at {failure} is too wide");
                if k == 0 {
                    assert_eq!(lower_limit(k, failure), 0.0);
                    continue;
                }
                let low = decimal(lower_limit(k, failure));
                let above = BigRational::one() - &alpha;
                assert!(partial(k - 1, &low) >= &above * &exponential(&low)[1], "{k} at {failure}");
                let inside = &low + &shift;
                assert!(partial(k - 1, &inside) < &above * &exponential(&inside)[0], "{k} at {failure} is too wide");
            }
        }
    }

    #[test]
    fn tail_bounds_are_above_the_tails_and_close_to_them() {
        for (k, mean) in [(0u64, 0.3f64), (3, 9.5), (40, 60.0), (90, 110.0)] {
            let exact = decimal(mean);
            let tail = round_up(&(partial(k, &exact) / &exponential(&exact)[0])).ln();
            let bound = ln_lower_tail_bound(k, mean);
            assert!(bound >= tail && bound <= tail + 0.01, "{k} {mean}: {bound} {tail}");
        }
        for (k, mean) in [(1u64, 0.3f64), (9, 3.5), (60, 40.0), (110, 90.0)] {
            let exact = decimal(mean);
            let tail = round_up(&(BigRational::one() - partial(k - 1, &exact) / &exponential(&exact)[0])).ln();
            let bound = ln_upper_tail_bound(k, mean);
            assert!(bound >= tail - 1e-13 && bound <= tail + 0.01, "{k} {mean}: {bound} {tail}");
        }
    }

    /// Where more terms matter than are summed one by one, against a plain sum of them all.
    #[test]
    fn what_is_cut_off_is_bounded() {
        let (k, mean) = (100_000u64, 101_000.0f64);
        let ln_pmf = -mean + k as f64 * mean.ln() - libm::lgamma(k as f64 + 1.0);
        let (mut term, mut sum) = (1.0, 0.0);
        for i in 0..=k {
            sum += term;
            term *= (k - i) as f64 / mean;
        }
        let (tail, bound) = (ln_pmf + sum.ln(), ln_lower_tail_bound(k, mean));
        assert!(bound >= tail && bound <= tail + 0.1, "{bound} {tail}");
    }

    #[test]
    fn large_counts_stay_close_to_the_normal_approximation() {
        // At k = 1e9 and α = 1e-12 one-sided the limits are about 7.03 standard deviations away.
        let k = 1_000_000_000u64;
        let deviation = (k as f64).sqrt();
        for distance in [(k as f64 - lower_limit(k, 1e-12)) / deviation, (upper_limit(k, 1e-12) - k as f64) / deviation] {
            assert!((7.02..7.06).contains(&distance), "{distance}");
        }
    }

    /// As `P(X ≤ k)` sums all its terms, nothing is above the exact tail but the allowance: 64 units in the last place of the summands.
    #[test]
    fn rounding_errors_have_their_allowance() {
        for (k, mean) in [(0u64, 0.5f64), (3, 9.5), (40, 60.0), (90, 150.0)] {
            let size = mean + k as f64 * mean.ln() + (1..=k).map(|i| (i as f64).ln()).sum::<f64>();
            let exact = decimal(mean);
            let over = ln_lower_tail_bound(k, mean) - round_up(&(partial(k, &exact) / &exponential(&exact)[0])).ln();
            // Of the series, too; what the errors came to this time is a small part.
            let (units, expected) = (over / f64::EPSILON, 64.0 * (2.0 + size));
            assert!((units - expected).abs() < 20.0 + size, "{k} {mean}: {units} {expected}");
        }
    }

    #[test]
    fn an_interval_spends_half_of_the_failure_at_each_end() {
        assert_eq!(garwood(12, 1e-6), [lower_limit(12, 5e-7), upper_limit(12, 5e-7)]);
    }
}
