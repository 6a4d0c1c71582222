//! Weights outside the carrier, the limits they are inferred from, and chi-squared values, against handbooks and direct sums.

use bitassay::{
    leakage::{coherent, g2, heralded, thermal},
    statistics::{chi_squared::survival, poisson::garwood},
};
use statrs::distribution::{ChiSquared, ContinuousCDF, Discrete, DiscreteCDF, Gamma, Poisson};

/// A value is not below what it bounds, which itself is known within a tolerance, and within the tolerance of it.
fn assert_just_above(value: f64, expected: f64, tolerance: f64, what: &str) {
    assert!((value - expected).abs() <= tolerance, "{what}: {value} {expected}");
    assert!(value >= expected * (1.0 - 4.0 * f64::EPSILON), "{what} is below: {value} {expected}");
}

/// Poisson tails `P(n ≥ d)`. The handbook value for μ = 0.1, d = 2 is 0.00468; the further digits are the tail summed directly.
#[test]
fn coherent_pulses() {
    let cases = [
        (0.01, 2, 4.966791334026596e-05),
        (0.1, 2, 0.004678840160444474),
        (0.1, 3, 0.00015465307026467172),
        (0.2, 2, 0.017523096306421772),
        (0.5, 2, 0.09020401043104986),
        (1.0, 2, 0.2642411176571153),
        (0.1, 1, 0.09516258196404044),
        (1e-6, 2, 4.999996666667916e-13),
    ];
    for (mean, levels, expected) in cases {
        let value = coherent::leakage(mean, levels);
        assert_just_above(value, expected, 1e-12 * expected, &format!("{mean} {levels}"));
    }
    assert!((coherent::leakage(0.1, 2) - 0.00468).abs() < 5e-6);
}

/// The Poisson law of a general-purpose library (statrs), summed term by term.
#[test]
fn coherent_pulses_by_summing_a_library_law() {
    for mean in [1e-9, 1e-6, 0.03, 0.7, 2.5, 9.0] {
        let law = Poisson::new(mean).unwrap();
        for levels in [1u32, 2, 3, 4] {
            let sum: f64 = (u64::from(levels)..120).rev().map(|k| law.pmf(k)).sum();
            let value = coherent::leakage(mean, levels);
            assert!((value / sum - 1.0).abs() < 1e-12, "{mean} {levels}: {value} {sum}");
        }
    }
}

/// Geometric tails `(μ/(1+μ))^d`: 1/121 and 1/1331 for μ = 1/10, 1/10201 for μ = 1/100; and the law summed term by term.
#[test]
fn thermal_light() {
    for (mean, levels, expected) in [(0.1, 2, 0.008264462809917356), (0.01, 2, 9.80296049406921e-05), (0.1, 3, 0.0007513148009015778)] {
        assert_just_above(thermal::leakage(mean, levels), expected, 1e-14, &format!("{mean} {levels}"));
    }
    for mean in [1e-9, 1e-6, 0.03, 0.7, 2.5] {
        let t: f64 = mean / (1.0 + mean);
        for levels in [1u32, 2, 5] {
            let sum: f64 = (levels as i32..2000).rev().map(|k| t.powi(k) / (1.0 + mean)).sum();
            let value = thermal::leakage(mean, levels);
            assert!((value / sum - 1.0).abs() < 1e-12, "{mean} {levels}: {value} {sum}");
        }
    }
}

/// `⟨n(n−1)⟩ ≥ 2 P(n ≥ 2)`: 0.02 · 0.05² / 2 = 2.5e-5.
#[test]
fn second_order_correlation() {
    assert_just_above(g2::leakage(0.02, 0.05), 2.5e-05, 1e-15, "g2");
}

/// Mean pair number 0.1 and herald efficiency 0.3, from the closed forms; and both laws summed over the pair number.
#[test]
fn heralded_pairs() {
    assert_just_above(heralded::thermal(0.1, 0.3), 0.14876033057851235, 1e-12, "thermal");
    assert_just_above(heralded::poissonian(0.1, 0.3), 0.08152215890506942, 1e-12, "Poissonian");
    for mean in [1e-9, 1e-6, 0.01, 0.4, 2.0] {
        for efficiency in [0.01, 0.3, 1.0f64] {
            let click = |n: i32| 1.0 - (1.0 - efficiency).powi(n);
            let t: f64 = mean / (1.0 + mean);
            let weight = |law: &dyn Fn(i32) -> f64| {
                let joint = |n: i32| law(n) * click(n);
                let outside: f64 = (2..400).rev().map(joint).sum();
                outside / (outside + joint(1))
            };
            let poisson = Poisson::new(mean).unwrap();
            let cases = [
                (heralded::thermal(mean, efficiency), weight(&|n| t.powi(n))),
                (heralded::poissonian(mean, efficiency), weight(&|n| poisson.pmf(n as u64))),
            ];
            for (value, sum) in cases {
                assert!((value / sum - 1.0).abs() < 1e-12, "{mean} {efficiency}: {value} {sum}");
            }
        }
    }
}

/// F. Garwood's exact intervals at 95 %: 5 events give 1.6235 to 11.6683 in the handbooks, 0 events 0 to 3.6889, 100 events 81.36 to 121.63;
/// the further digits are quantiles of the gamma distribution.
#[test]
fn poisson_intervals() {
    let cases =
        [(0u64, [0.0, 3.6888794541139354]), (5, [1.6234863901184207, 11.66833207932267]), (100, [81.36399125092314, 121.62679379242638])];
    for (k, expected) in cases {
        let [low, high] = garwood(k, 0.05);
        assert!((low - expected[0]).abs() < 1e-6 && (high - expected[1]).abs() < 1e-6, "{k}: {low} {high}");
        assert!(low <= expected[0] && high >= expected[1], "{k} is not rounded outwards: {low} {high}");
    }
}

/// Gamma quantiles and the Poisson law of a general-purpose library (statrs): never narrower, and hardly wider.
#[test]
fn poisson_intervals_are_never_narrower_than_gamma_quantiles() {
    for k in [1u64, 3, 40, 1_000, 100_000] {
        for alpha in [0.05, 1e-4, 1e-8] {
            let [low, high] = garwood(k, alpha);
            let quantile = |shape: u64, p: f64| Gamma::new(shape as f64, 1.0).unwrap().inverse_cdf(p);
            let (below, above) = (quantile(k, alpha / 2.0), quantile(k + 1, 1.0 - alpha / 2.0));
            let allowance = 1e-3 * (above - below);
            assert!(low <= below * (1.0 + 1e-7) && low >= below - allowance, "{k} at {alpha}: {low} {below}");
            assert!(high >= above * (1.0 - 1e-7) && high <= above + allowance, "{k} at {alpha}: {high} {above}");
            assert!(Poisson::new(high).unwrap().cdf(k) <= alpha / 2.0 * (1.0 + 1e-6));
            assert!(Poisson::new(low).unwrap().sf(k - 1) <= alpha / 2.0 * (1.0 + 1e-6));
        }
    }
}

/// Critical values of the standard tables.
#[test]
fn chi_squared_critical_values() {
    let table = [(1u32, 0.95, 3.841), (2, 0.95, 5.991), (5, 0.95, 11.070), (10, 0.95, 18.307), (1, 0.99, 6.635), (10, 0.99, 23.209)];
    for (nu, confidence, value) in table {
        let significance = 1.0 - confidence;
        // The true critical value lies within half a unit of the last printed digit.
        assert!(survival(value - 0.0006, nu) > significance && survival(value + 0.0006, nu) < significance, "{nu} {confidence}");
    }
}

/// Tails against a general-purpose library (statrs), down to where it still resolves them; beyond, against the leading terms of the
/// asymptotic expansion (Abramowitz and Stegun, 6.5.32): `Q(a, h) ≈ h^{a−1} e^{−h} / Γ(a) · (1 + (a−1)/h + (a−1)(a−2)/h²)`.
#[test]
fn chi_squared_tails() {
    for nu in [1u32, 2, 3, 4, 9, 20] {
        let law = ChiSquared::new(f64::from(nu)).unwrap();
        for x in [0.1, 1.0, 5.0, 20.0, 60.0] {
            let (ours, theirs) = (survival(x, nu), law.sf(x));
            assert!((ours - theirs).abs() <= 1e-9 * theirs + 1e-14, "{nu} {x}: {ours} {theirs}");
        }
        let (a, h) = (0.5 * f64::from(nu), 600.0f64);
        let leading = ((a - 1.0) * h.ln() - h - libm::lgamma(a)).exp();
        let expected = leading * (1.0 + (a - 1.0) / h * (1.0 + (a - 2.0) / h * (1.0 + (a - 3.0) / h)));
        assert!((survival(2.0 * h, nu) / expected - 1.0).abs() < 1e-6, "{nu}: {} {expected}", survival(2.0 * h, nu));
    }
}
