//! Exact (Clopper–Pearson) confidence interval of a binomial probability, rounded outwards.
//!
//! For k successes in n trials and failure probability α the interval is `[1 − u(n−k), u(k)]`, where `u(k)` is the least p with
//! `P(Bin(n, p) ≤ k) ≤ α/2` (C. J. Clopper and E. S. Pearson, Biometrika 26, 404 (1934)). A library's inverse incomplete beta
//! function is not a proof at `α ~ 1e-12` and `n ~ 1e9`, so every endpoint is one at which an upper bound on the tail was evaluated
//! and found small enough. The bound is the tail's own series,
//!
//! ```text
//! P(X ≤ k) = pmf(k) (1 + r_0 + r_0 r_1 + …),   r_i = (k−i)(1−p) / ((n−k+i+1) p),
//! ```
//!
//! cut off where the rest is bounded by a geometric series (the `r_i` decrease), with the logarithm of `pmf(k)` from a library's
//! log-gamma function and an allowance for its rounding errors. It exceeds the tail by at most a few per cent of its value, which
//! widens the interval by less than one part in a thousand.

use std::f64::consts::LN_2;

/// Terms of the series that are summed one by one.
const TERMS: u64 = 500;
/// Allowance for rounding, relative to the size of the summands of `ln pmf`: 64 units in the last place.
const ALLOWANCE: f64 = 64.0 * f64::EPSILON;

/// Upper bound on `ln P(Bin(n, p) ≤ k)`, for `k ≤ n` and `0 < p < 1`; 0 where `k ≥ np`, on which side the series does not converge
/// fast enough to be of use.
pub fn ln_lower_tail_bound(k: u64, n: u64, p: f64) -> f64 {
    let (successes, trials, q) = (k as f64, n as f64, 1.0 - p);
    let failures = trials - successes;
    let ratio = |i: f64| (successes - i) * q / ((failures + i + 1.0) * p);
    if k >= n || ratio(0.0) >= 1.0 {
        return 0.0;
    }
    let (ln_choices, choices_size) = ln_choices(k, n);
    let (hits, misses) = (successes * libm::log(p), failures * libm::log1p(-p));
    let size = choices_size + hits.abs() + misses.abs();
    let ln_pmf = ln_choices + hits + misses + ALLOWANCE * (1.0 + size);
    let (mut term, mut sum) = (1.0, 1.0);
    let mut i = 0u64;
    while i < k.min(TERMS) && term > f64::EPSILON * sum {
        term *= ratio(i as f64);
        sum += term;
        i += 1;
    }
    if i < k {
        let next = ratio(i as f64);
        sum += term * next / (1.0 - next);
    }
    ln_pmf + libm::log(sum * (1.0 + ALLOWANCE))
}

/// `ln C(n, k)` and the size of the summands it was made of, to which its rounding errors are proportional.
///
/// Near the ends the factors are taken one by one: the logarithms of the factorials would be of size `n ln n`, and their allowance would
/// widen the interval of rare events in very many trials.
fn ln_choices(k: u64, n: u64) -> (f64, f64) {
    let few = k.min(n - k);
    if few <= TERMS {
        let sum: f64 = (0..few).map(|j| libm::log((n - j) as f64 / (j + 1) as f64)).sum();
        // Every logarithm is at least 0 and every partial sum is rounded once.
        return (sum, few as f64 * (1.0 + sum));
    }
    let [all, hits, misses] = [n, k, n - k].map(|count| libm::lgamma(count as f64 + 1.0));
    (all - hits - misses, all + hits + misses)
}

/// Upper endpoint `u(k)`: a p, as small as bisection finds, with `P(Bin(n, p) ≤ k) ≤ α/2` confirmed. Exactly 1 for `k = n`.
fn upper(k: u64, n: u64, alpha: f64) -> f64 {
    if k == n {
        return 1.0;
    }
    let allowed = libm::log(alpha) - LN_2;
    let (mut low, mut high) = (k as f64 / n as f64, 1.0);
    loop {
        let middle = 0.5 * (low + high);
        if middle <= low || middle >= high || high - low <= 1e-14 * high {
            // Two units more, since the number is also read as a decimal.
            return high.next_up().next_up().min(1.0);
        }
        if ln_lower_tail_bound(k, n, middle) <= allowed {
            high = middle;
        } else {
            low = middle;
        }
    }
}

/// Two-sided interval `[low, high]` for k successes in n trials, `n > 0`, missing the true probability with probability at most
/// `alpha`, in `(0, 1)`. Rounded outwards.
pub fn clopper_pearson(k: u64, n: u64, alpha: f64) -> [f64; 2] {
    let low = (1.0 - upper(n - k, n, alpha)).next_down().next_down();
    [low.max(0.0), upper(k, n, alpha)]
}

/// One-sided upper limit: the true probability of k successes in n trials, `n > 0`, exceeds it with probability at most `failure`, in
/// `(0, 0.5]`. Rounded up.
pub fn upper_limit(k: u64, n: u64, failure: f64) -> f64 {
    upper(k, n, 2.0 * failure)
}

/// One-sided lower limit: the true probability of k successes in n trials, `n > 0`, is below it with probability at most `failure`, in
/// `(0, 0.5]`. Rounded down, never negative.
pub fn lower_limit(k: u64, n: u64, failure: f64) -> f64 {
    (1.0 - upper(n - k, n, 2.0 * failure)).next_down().next_down().max(0.0)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::exact::decimal;
    use num_rational::BigRational;
    use num_traits::One;

    /// `P(Bin(n, p) ≤ k)` in exact arithmetic.
    fn exact_tail(k: u64, n: u64, p: f64) -> BigRational {
        let p = decimal(p);
        let ratio = &p / (BigRational::one() - &p);
        let mut term = (0..n).fold(BigRational::one(), |product, _| product * (BigRational::one() - &p));
        let mut sum = term.clone();
        for i in 0..k {
            term = term * &ratio * BigRational::new((n - i).into(), (i + 1).into());
            sum += &term;
        }
        sum
    }

    /// The defining property, in exact arithmetic, and that the endpoint is not needlessly wide.
    #[test]
    fn endpoints_satisfy_their_definition_exactly() {
        for (k, n) in [(0u64, 10u64), (1, 10), (4, 20), (19, 20), (37, 60), (60, 60)] {
            for alpha in [0.1, 1e-3, 1e-12] {
                let [low, high] = clopper_pearson(k, n, alpha);
                let half = decimal(alpha) / BigRational::from_integer(2.into());
                let tails = [(k, high, k < n), (n - k, 1.0 - low, k > 0)];
                for (k, endpoint, inside) in tails {
                    if !inside {
                        assert_eq!(endpoint, 1.0);
                        continue;
                    }
                    assert!(exact_tail(k, n, endpoint) <= half, "{k} of {n} at {alpha}");
                    assert!(exact_tail(k, n, endpoint - 1e-11) > half, "{k} of {n} at {alpha} is too wide");
                }
            }
        }
    }

    #[test]
    fn the_tail_bound_is_above_the_tail_and_close_to_it() {
        for (k, n, p) in [(3u64, 50u64, 0.3), (900, 2000, 0.6), (0, 100, 0.01), (1000, 2400, 0.44)] {
            let bound = ln_lower_tail_bound(k, n, p);
            let exact = crate::exact::round_up(&exact_tail(k, n, p)).ln();
            assert!(bound >= exact && bound <= exact + 0.05, "{bound} {exact}");
        }
    }

    #[test]
    fn one_sided_limits_spend_the_whole_failure_on_one_side() {
        for (k, n, failure) in [(0u64, 10u64, 0.5), (4, 20, 0.05), (9, 14, 1e-9)] {
            let tail = decimal(failure);
            let high = upper_limit(k, n, failure);
            assert!(exact_tail(k, n, high) <= tail && exact_tail(k, n, high - 1e-9) > tail, "{k} of {n} at {failure}");
            let low = lower_limit(n - k, n, failure);
            assert!(exact_tail(k, n, 1.0 - low) <= tail && exact_tail(k, n, 1.0 - low - 1e-9) > tail, "{k} of {n} at {failure}");
        }
        assert_eq!(lower_limit(0, 10, 0.1), 0.0);
        assert_eq!(upper_limit(10, 10, 0.1), 1.0);
    }

    #[test]
    fn rare_events_in_very_many_trials_have_narrow_intervals() {
        // (1 − p)^n = α/2, and for one event np close to the solution of (1 + λ) e^{−λ} = 5e-13.
        let n = 1u64 << 52;
        assert!((clopper_pearson(0, n, 1e-12)[1] * n as f64 / -(5e-13f64.ln()) - 1.0).abs() < 1e-10);
        let one = clopper_pearson(1, n, 1e-12)[1] * n as f64;
        assert!(((1.0 + one) * (-one).exp() / 5e-13 - 1.0).abs() < 1e-6, "{one}");
    }

    #[test]
    fn large_counts_stay_close_to_the_normal_approximation() {
        // At n = 1e9 and α = 1e-12 the endpoints are about 7.13 standard deviations away.
        let (n, p) = (1_000_000_000u64, 0.25f64);
        let [low, high] = clopper_pearson(250_000_000, n, 1e-12);
        let deviation = (p * (1.0 - p) / n as f64).sqrt();
        for distance in [(p - low) / deviation, (high - p) / deviation] {
            assert!((7.12..7.16).contains(&distance), "{distance}");
        }
    }
}
