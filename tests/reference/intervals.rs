//! Confidence intervals against handbook tables and a general-purpose statistics library.

use bitassay::statistics::interval::clopper_pearson;
use statrs::distribution::{Beta, ContinuousCDF};

/// Handbook tables: 4 of 20 at 90 % gives 0.0714 to 0.4010; 0 of 10 at 95 % has the upper limit 0.3085. The further digits were computed
/// with the inverse incomplete beta function of SciPy 1.x.
#[test]
fn handbook_intervals() {
    let cases = [
        (4u64, 20u64, 0.10, [0.0713538843086182, 0.4010281173319745]),
        (0, 10, 0.05, [0.0, 0.3084971078187607]),
        (5, 10, 0.05, [0.18708602844739855, 0.8129139715526015]),
        (10, 10, 0.05, [0.6915028921812392, 1.0]),
    ];
    for (k, n, alpha, expected) in cases {
        let [low, high] = clopper_pearson(k, n, alpha);
        assert!((low - expected[0]).abs() < 1e-9 && (high - expected[1]).abs() < 1e-9, "{k} of {n}: {low} {high}");
        assert!(low <= expected[0] + 1e-15 && high >= expected[1] - 1e-15, "{k} of {n} is not rounded outwards");
    }
}

/// Beta quantiles of a general-purpose library (statrs) at sizes where its own algorithm is reliable: never narrower, and wider by less
/// than one part in a thousand of the interval.
#[test]
fn intervals_are_never_narrower_than_beta_quantiles() {
    for (k, n) in [(3u64, 40u64), (150, 1000), (4_000, 10_000), (99_000, 100_000)] {
        for alpha in [0.05, 1e-4, 1e-8] {
            let [low, high] = clopper_pearson(k, n, alpha);
            let quantile = |a: u64, b: u64, p: f64| Beta::new(a as f64, b as f64).unwrap().inverse_cdf(p);
            let (below, above) = (quantile(k, n - k + 1, alpha / 2.0), quantile(k + 1, n - k, 1.0 - alpha / 2.0));
            let allowance = 1e-3 * (above - below);
            assert!(low <= below + 1e-7 * below && low >= below - allowance, "{k} of {n} at {alpha}: {low} {below}");
            assert!(high >= above - 1e-7 * above && high <= above + allowance, "{k} of {n} at {alpha}: {high} {above}");
        }
    }
}
