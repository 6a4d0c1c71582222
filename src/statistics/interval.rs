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
//! with the logarithm of `pmf(k)` from a library's log-gamma function and an allowance for its rounding errors. What follows the terms
//! that are summed is bounded in closed form. From one `r` to the next there is a factor of at most `e^{−s}`, `s = 1/(k−i) + 1/(n+2)`, hence
//! `r_i … r_{i+j−1} ≤ exp(−λj − sj²/2)` with `λ = −ln r_i − s/2`. That decreases in j, so its sum over `j ≥ 1` is at most
//!
//! ```text
//! ∫_0^∞ exp(−λj − sj²/2) dj = M(λ/√s)/√s ≤ 4 / (3λ + √(λ² + 8s)),
//! ```
//!
//! M being Mills' ratio and the last step M. R. Sampford's (Ann. Math. Stat. 24, 130 (1953)). With a failure probability of 1e-9 or less the
//! interval is wider than the least one by less than one part in a thousand; at 1e-3 by about one part in a hundred.

use std::f64::consts::LN_2;

/// Terms of the series that are summed one by one.
const TERMS: u64 = 64;
/// With a first ratio above this many terms matter, and to sum a few of them is of no use.
const SLOW: f64 = 0.97;
/// Binomial coefficients of so few factors are multiplied out.
const FACTORS: u64 = 500;
/// Allowance for rounding, relative to the size of the summands of `ln pmf`: 64 units in the last place.
const ALLOWANCE: f64 = 64.0 * f64::EPSILON;
/// Steps towards an endpoint before bisection takes over.
const STEPS: usize = 16;

/// Upper bound on `ln P(Bin(n, p) ≤ k)`, for `k ≤ n` and `0 < p < 1`; 0 where `k ≥ np`, on which side the series does not converge
/// fast enough to be of use.
pub fn ln_lower_tail_bound(k: u64, n: u64, p: f64) -> f64 {
    LowerTail::new(k, n).at(p).ln_bound
}

/// `P(Bin(n, p) ≤ k)` as a function of p; `k ≤ n`.
struct LowerTail {
    k: u64,
    n: u64,
    ln_choices: f64,
    choices_size: f64,
}

/// A bound on a tail at one p.
struct TailBound {
    ln_bound: f64,
    /// Approximate derivative of the logarithm by p; zero where it is of no use.
    slope: f64,
    /// Rounding errors are proportional to this.
    size: f64,
}

impl LowerTail {
    fn new(k: u64, n: u64) -> Self {
        let (ln_choices, choices_size) = ln_choices(k, n);
        Self { k, n, ln_choices, choices_size }
    }

    fn at(&self, p: f64) -> TailBound {
        let (k, n) = (self.k, self.n);
        let (successes, trials, q) = (k as f64, n as f64, 1.0 - p);
        let failures = trials - successes;
        let ratio = |i: f64| (successes - i) * q / ((failures + i + 1.0) * p);
        let first = ratio(0.0);
        if k >= n || first >= 1.0 {
            return TailBound { ln_bound: 0.0, slope: 0.0, size: 0.0 };
        }
        let (hits, misses) = (successes * libm::log(p), failures * libm::log1p(-p));
        let size = self.choices_size + hits.abs() + misses.abs();
        let ln_pmf = self.ln_choices + hits + misses + ALLOWANCE * (1.0 + size);
        let (mut term, mut sum) = (1.0, 1.0);
        let mut i = 0u64;
        let terms = if k > TERMS && first > SLOW { 0 } else { k.min(TERMS) };
        while i < terms && term > f64::EPSILON * sum {
            term *= ratio(i as f64);
            sum += term;
            i += 1;
        }
        if i < k {
            sum += term * following(ratio(i as f64), (successes - i as f64).recip() + (trials + 2.0).recip());
        }
        TailBound { ln_bound: ln_pmf + libm::log(sum * (1.0 + ALLOWANCE)), slope: -failures / (q * sum), size }
    }
}

/// Upper bound on `r_i + r_i r_{i+1} + …`, given `0 ≤ r_i < 1` and the logarithm `s` of the least factor between one `r` and the next.
fn following(ratio: f64, s: f64) -> f64 {
    let geometric = ratio / (1.0 - ratio);
    let lambda = -libm::log(ratio) - 0.5 * s;
    if lambda > 0.0 { geometric.min(4.0 / (3.0 * lambda + (lambda * lambda + 8.0 * s).sqrt())) } else { geometric }
}

/// `ln C(n, k)` and the size of the summands it was made of, to which its rounding errors are proportional.
///
/// Near the ends the factors are taken one by one: the logarithms of the factorials would be of size `n ln n`, and their allowance would
/// widen the interval of rare events in very many trials.
fn ln_choices(k: u64, n: u64) -> (f64, f64) {
    let few = k.min(n - k);
    if few <= FACTORS {
        let sum: f64 = (0..few).map(|j| libm::log((n - j) as f64 / (j + 1) as f64)).sum();
        // Every logarithm is at least 0 and every partial sum is rounded once.
        return (sum, few as f64 * (1.0 + sum));
    }
    let [all, hits, misses] = [n, k, n - k].map(|count| libm::lgamma(count as f64 + 1.0));
    (all - hits - misses, all + hits + misses)
}

/// Upper endpoint `u(k)`: a p, as small as can be told, with `P(Bin(n, p) ≤ k) ≤ α/2` confirmed. Exactly 1 for `k = n`.
///
/// Newton's method finds it in a few steps; where it leaves the bracket, or does not settle, the bracket is halved. What is returned
/// was confirmed in any case.
fn upper(k: u64, n: u64, alpha: f64) -> f64 {
    if k == n {
        return 1.0;
    }
    let allowed = libm::log(alpha) - LN_2;
    let tail = LowerTail::new(k, n);
    let (mut low, mut high) = (k as f64 / n as f64, 1.0);
    let mut p = likely_endpoint(k as f64, n as f64, allowed);
    let mut steps = 0;
    loop {
        if steps >= STEPS || !(low < p && p < high) {
            p = 0.5 * (low + high);
        }
        steps += 1;
        if p <= low || p >= high || high - low <= 1e-14 * high {
            // Two units more, since the number is also read as a decimal.
            return high.next_up().next_up().min(1.0);
        }
        let TailBound { ln_bound, slope, size } = tail.at(p);
        let excess = ln_bound - allowed;
        let tolerance = 1e-11 + 8.0 * f64::EPSILON * size;
        if excess <= 0.0 {
            high = p;
            if excess >= -tolerance {
                return high.next_up().next_up().min(1.0);
            }
        } else {
            low = p;
        }
        // Out of the bracket where there is no slope.
        p -= (excess + 0.5 * tolerance) / slope;
    }
}

/// Where to look first: E. B. Wilson's endpoint, at the deviation whose normal tail is about the allowed one.
fn likely_endpoint(successes: f64, trials: f64, ln_tail: f64) -> f64 {
    let w = -2.0 * ln_tail;
    let square = (w - libm::log(w.max(1.0)) - 1.8379).max(0.1);
    let spread = (square * (successes * (trials - successes) / trials + square / 4.0)).sqrt();
    (successes + square / 2.0 + spread) / (trials + square)
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

    /// `C(n, k) = C(n, n − k)`, and a few factors make small errors however large the other number is.
    #[test]
    fn choices_are_those_of_the_complement() {
        for (k, n) in [(1u64, 401u64), (200, 450), (700, 2000)] {
            assert_eq!(ln_choices(k, n).0, ln_choices(n - k, n).0);
            assert_eq!(ln_choices(k, n).1, ln_choices(n - k, n).1);
        }
    }

    #[test]
    fn there_is_no_bound_where_the_series_does_not_fall() {
        for (k, n, p) in [(50u64, 100u64, 0.4), (50, 100, 0.49), (99, 100, 1e-9), (10, 10, 0.5), (10, 10, 0.999)] {
            assert_eq!(ln_lower_tail_bound(k, n, p), 0.0, "{k} of {n} at {p}");
        }
    }

    /// Mills' ratio from a library's complementary error function.
    #[test]
    fn what_follows_is_bounded_closely() {
        for step in 1..120 {
            let t = 0.05 * f64::from(step);
            let mills = statrs::function::erf::erfc(t / 2f64.sqrt()) * (std::f64::consts::PI / 2.0).sqrt() * (t * t / 2.0).exp();
            // s = 1 and λ = t; the geometric series is far above.
            let bound = following((-t - 0.5f64).exp(), 1.0);
            let closed = 4.0 / (3.0 * t + (t * t + 8.0).sqrt());
            assert!(closed >= mills * (1.0 - 1e-12) && closed <= mills * 1.15, "{t}: {closed} {mills}");
            assert!(bound <= closed * (1.0 + 1e-9));
        }
        // With s = 1 what is bounded is Σ exp(−tj − j²/2).
        for t in [0.05f64, 0.3, 1.0, 3.0] {
            let sum: f64 = (1..40).map(f64::from).map(|j| (-t * j - j * j / 2.0).exp()).sum();
            assert!(following((-t - 0.5).exp(), 1.0) >= sum, "{t}");
        }
        // Summed one by one, to the end.
        let cases = [
            (500_000u64, 1_000_000u64, 0.5035, 1.04),
            (850_000, 1_000_000, 0.8525, 1.04),
            (20_000, 1_000_000, 0.021, 1.04),
            // One standard deviation away, where s is not quite what the ratios fall by.
            (500_000, 1_000_000, 0.5005, 1.1),
        ];
        for (k, n, p, most) in cases {
            let ratio = |i: u64| (k - i) as f64 * (1.0 - p) / ((n - k + i + 1) as f64 * p);
            let (mut term, mut sum) = (1.0, 0.0);
            for i in 0..k {
                term *= ratio(i);
                sum += term;
            }
            let bound = following(ratio(0), 1.0 / k as f64 + 1.0 / (n + 2) as f64);
            assert!(bound >= sum && bound <= most * sum, "{k} of {n}: {bound} {sum}");
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

    /// Where the series ends by itself nothing is above the exact tail but the allowance for rounding errors: 64 units in the last place of the
    /// summands, whose sizes are computed here by adding logarithms one by one.
    #[test]
    fn rounding_errors_have_their_allowance() {
        let ln_factorial = |n: u64| (1..=n).map(|i| (i as f64).ln()).sum::<f64>();
        for (k, n, p) in [(0u64, 10u64, 0.1f64), (3, 50, 0.3), (40, 400, 0.3), (600, 1200, 0.9)] {
            let logarithms = k as f64 * p.ln().abs() + (n - k) as f64 * (1.0 - p).ln().abs();
            let [all, hits, misses] = [n, k, n - k].map(ln_factorial);
            // Few factors are multiplied out, and every partial sum is rounded.
            let choices = if k <= FACTORS { k as f64 * (1.0 + all - hits - misses) } else { all + hits + misses };
            let size = logarithms + choices;
            let over = ln_lower_tail_bound(k, n, p) - crate::exact::round_up(&exact_tail(k, n, p)).ln();
            // Of the series, too; what the errors came to this time is a small part.
            let (units, expected) = (over / f64::EPSILON, 64.0 * (2.0 + size));
            assert!((units - expected).abs() < 20.0 + size, "{k} of {n}: {units} {expected}");
        }
    }

    /// Towards the ends of the interval Newton's steps and the first guess decide how long it takes, never what is confirmed; wherever they
    /// lead, the endpoint is one at which the tail is small enough, and hardly beyond the first such.
    #[test]
    fn endpoints_are_confirmed_and_close_for_all_sizes() {
        for (k, n) in [(0u64, 1u64), (1, 2), (7, 4000), (64, 300), (3999, 4000), (100_000, 1 << 26), (1 << 25, 1 << 26)] {
            for alpha in [0.9f64, 1e-2, 1e-9, 1e-200] {
                let high = upper(k, n, alpha);
                if high == 1.0 {
                    assert!(k + 1 >= n && alpha == 1e-200, "{k} of {n} at {alpha}");
                    continue;
                }
                let allowed = alpha.ln() - LN_2;
                assert!(ln_lower_tail_bound(k, n, high) <= allowed, "{k} of {n} at {alpha}");
                // A thousandth of the way to the frequency, and more than rounding moves it.
                let inside = high - 1e-3 * (high - k as f64 / n as f64) - 1e-13 * high;
                assert!(ln_lower_tail_bound(k, n, inside) > allowed, "{k} of {n} at {alpha} is too wide: {high}");
            }
        }
    }
}
