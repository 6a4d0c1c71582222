//! Mean photon numbers: stated, or from detector counts with an exact upper confidence limit.
//!
//! Light of mean photon number μ that is detected with efficiency η gives, in N pulses,
//!
//! | light | counting detector: all detections | threshold detector: pulses with a click |
//! |---|---|---|
//! | Poissonian | `Poi(N η μ)` | `Bin(N, 1 − e^{−ημ})` |
//! | geometric (thermal, one mode) | `P(≤ k) = P(Bin(N + k, q) ≤ k)` with `q = ημ/(1 + ημ)` | `Bin(N, q)` |
//!
//! (The sum of N geometric numbers is negative binomial; it is at most k exactly if among `N + k` trials there are at most k
//! failures.) So every limit is a Garwood or a Clopper–Pearson limit, confirmed by its tail, and then
//!
//! ```text
//! μ ≤ λ/(N η),     μ ≤ −ln(1 − p)/η,     μ ≤ q/((1 − q) η).
//! ```
//!
//! A Garwood limit on the clicks of a threshold detector, or on thermal counts, would be too low: clicks miss the second photon of a
//! pulse, and thermal counts scatter more than a Poisson law.
//!
//! *Pulses that are not alike.* All these laws grow with μ, so counts from unequal pulses are stochastically above those of as many pulses
//! like the faintest one: the limit holds for the faintest pulse at least. With an *intensity spread* r, the brightest pulse over the faintest less
//! one, `(1 + r)` times the limit holds for every pulse. This matters: for `d ≥ 2` the weight outside the carrier is convex in μ where μ is
//! small, so a fluctuating source leaks more than a steady one of the same mean.
//!
//! Dark counts and background are not subtracted, which can only raise the limit; an efficiency that is a lower limit does the same.

use num_rational::BigRational;
use num_traits::One;
use serde::{Deserialize, Serialize};

use super::{
    estimate::{Input, REPRESENTATIVE, check_among, check_efficiency, check_failure, check_not_negative, check_trials},
    measured::Measured,
};
use crate::{
    counts::MAX_ROUNDS,
    exact::{decimal, round_up},
    fault::Fault,
    statistics::{interval, poisson},
};

/// Counts that a mean photon number is inferred from.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct PhotonCounts {
    /// Detections (counting detector) or pulses with a click (threshold detector).
    pub counts: u64,
    /// Pulses that were looked at.
    pub pulses: u64,
    /// Lower limit of the probability that a photon is detected, in `(0, 1]`.
    pub efficiency: f64,
    #[serde(default)]
    pub detector: Detector,
    /// Probability that the limit is below the true value, in `[1e-100, 0.5]`.
    pub failure: f64,
}

#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Default, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Detector {
    /// Clicks at most once a pulse, however many photons arrive. The default, since it gives the larger limit.
    #[default]
    Threshold,
    /// Counts every photon that it detects.
    Counting,
}

/// Photon-number law of the light.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub enum Law {
    Poissonian,
    /// Thermal light of one mode.
    Geometric,
    /// Nothing is known but that its detections scatter no more than a Poisson law.
    AtMostPoissonian,
}

/// A mean photon number that is not exceeded, with where it comes from.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct Limit {
    pub mean: f64,
    pub inputs: Vec<Input>,
    pub assumptions: Vec<String>,
}

/// Upper limit of the mean photon number of every pulse, for formulas that need it; with no `spread` the limit of the mean over all
/// pulses, for formulas that hold on average.
///
/// # Errors
/// Values out of range; pointers start with `/{name}` or `/intensity_spread`.
pub(super) fn limit(measured: &Measured<PhotonCounts>, law: Law, spread: Option<f64>, name: &str) -> Result<Limit, Fault> {
    const QUANTITY: &str = "mean photon number";
    let (mean, input, mut assumptions) = match measured {
        Measured::Stated(mean) => {
            check_not_negative(*mean, &format!("/{name}"), "a mean photon number")?;
            (*mean, Input::stated(QUANTITY, *mean), vec!["the mean photon number is at most the stated one".to_owned()])
        }
        Measured::Counted(counts) => {
            let mean = upper_limit(counts, law).map_err(|fault| fault.under(&format!("/{name}")))?;
            (mean, Input::upper_limit(QUANTITY, mean, counts.failure), counted_assumptions(counts, law))
        }
    };
    let mut inputs = vec![input];
    let Some(spread) = spread else { return Ok(Limit { mean, inputs, assumptions }) };
    check_not_negative(spread, "/intensity_spread", "an intensity spread")?;
    if spread == 0.0 {
        assumptions.push("all pulses have the same mean photon number, whatever the preparation".to_owned());
        return Ok(Limit { mean, inputs, assumptions });
    }
    inputs.push(Input::stated("intensity spread", spread));
    assumptions.push(format!("the brightest pulse of any preparation exceeds the faintest by a fraction of at most {spread}"));
    let brightest = round_up(&(decimal(mean) * (BigRational::one() + decimal(spread))));
    if !brightest.is_finite() {
        return Err(Fault::new(format!("/{name}"), "the mean photon number is too large"));
    }
    Ok(Limit { mean: brightest, inputs, assumptions })
}

fn counted_assumptions(counts: &PhotonCounts, law: Law) -> Vec<String> {
    let detector = match counts.detector {
        Detector::Threshold => "the detector clicks with at least the stated efficiency for one photon, in every pulse counted",
        Detector::Counting => "the detector counts every photon with at least the stated efficiency, without dead time",
    };
    let mut assumptions = vec![REPRESENTATIVE.to_owned(), detector.to_owned()];
    if law == Law::AtMostPoissonian {
        assumptions.push("the detections scatter no more than a Poisson law, as those of at most one photon a pulse do".to_owned());
    }
    assumptions
}

/// Upper confidence limit of the mean photon number per pulse, rounded up; see the formulas of this module.
///
/// # Errors
/// Values out of range, counts to which no finite limit belongs, or a threshold detector on light of unknown law; pointers are relative
/// to the counts.
pub fn upper_limit(counts: &PhotonCounts, law: Law) -> Result<f64, Fault> {
    let PhotonCounts { counts: k, pulses, efficiency, detector, failure } = *counts;
    check_trials(pulses, "/pulses")?;
    check_efficiency(efficiency, "/efficiency")?;
    check_failure(failure, "/failure")?;
    if k > MAX_ROUNDS - pulses {
        return Err(Fault::new("/counts", format!("counts and pulses are together at most {MAX_ROUNDS}")));
    }
    let per_photon = decimal(efficiency);
    let binomial = |trials: u64| {
        let p = interval::upper_limit(k, trials, failure);
        if p < 1.0 { Ok(p) } else { Err(Fault::new("/counts", "every pulse has a click: there is no upper limit")) }
    };
    let odds = |q: f64| {
        let q = decimal(q);
        round_up(&(&q / ((BigRational::one() - &q) * &per_photon)))
    };
    match (law, detector) {
        (Law::Poissonian | Law::AtMostPoissonian, Detector::Counting) => {
            let events = decimal(poisson::upper_limit(k, failure));
            Ok(round_up(&(events / (BigRational::from_integer(pulses.into()) * per_photon))))
        }
        (Law::Poissonian, Detector::Threshold) => {
            check_among(k, pulses, "/counts")?;
            let mean = -libm::log1p(-binomial(pulses)?) / efficiency;
            Ok((mean * (1.0 + 8.0 * f64::EPSILON)).next_up().next_up())
        }
        (Law::Geometric, Detector::Threshold) => {
            check_among(k, pulses, "/counts")?;
            Ok(odds(binomial(pulses)?))
        }
        (Law::Geometric, Detector::Counting) => Ok(odds(binomial(pulses + k)?)),
        (Law::AtMostPoissonian, Detector::Threshold) => Err(Fault::new(
            "/detector",
            "a threshold detector gives no upper limit for light of unknown statistics: state the mean photon number, or use coincidences",
        )),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn counts(k: u64, pulses: u64, efficiency: f64, detector: Detector, failure: f64) -> PhotonCounts {
        PhotonCounts { counts: k, pulses, efficiency, detector, failure }
    }

    /// `P(counts ≤ k)` for N pulses by convolution of the detected photon-number distribution of one pulse.
    fn tail(k: usize, pulses: usize, single: &[f64]) -> f64 {
        let mut law = vec![1.0];
        for _ in 0..pulses {
            let mut next = vec![0.0; k + 1];
            for (i, p) in law.iter().enumerate() {
                for (j, q) in single.iter().enumerate().take(k + 1 - i.min(k + 1)) {
                    if i + j <= k {
                        next[i + j] += p * q;
                    }
                }
            }
            law = next;
        }
        law.iter().take(k + 1).sum()
    }

    /// Distribution of the detections of one pulse: photons by their law, thinned one by one, at most one click for a threshold detector.
    fn detections(law: Law, mean: f64, efficiency: f64, detector: Detector) -> Vec<f64> {
        let mut photons = vec![];
        let mut p = if law == Law::Geometric { 1.0 / (1.0 + mean) } else { (-mean).exp() };
        for n in 0..120 {
            photons.push(p);
            p *= if law == Law::Geometric { mean / (1.0 + mean) } else { mean / (n as f64 + 1.0) };
        }
        let mut detected = vec![0.0; photons.len()];
        for (n, p) in photons.iter().enumerate() {
            let mut thinned = p * (1.0 - efficiency).powi(n as i32);
            for (m, entry) in detected.iter_mut().enumerate().take(n + 1) {
                *entry += thinned;
                thinned *= (n - m) as f64 / (m as f64 + 1.0) * efficiency / (1.0 - efficiency);
            }
        }
        match detector {
            Detector::Counting => detected,
            Detector::Threshold => vec![detected[0], detected[1..].iter().sum()],
        }
    }

    /// At the limit the counts have exactly the failure probability: the definition, from the photon-number distribution up.
    #[test]
    fn limits_have_their_failure_probability() {
        for law in [Law::Poissonian, Law::Geometric] {
            for detector in [Detector::Threshold, Detector::Counting] {
                for (k, pulses, efficiency) in [(0u64, 8u64, 0.6), (3, 12, 0.35), (9, 20, 0.9)] {
                    let failure = 0.01;
                    let mean = upper_limit(&counts(k, pulses, efficiency, detector, failure), law).unwrap();
                    let tail = tail(k as usize, pulses as usize, &detections(law, mean, efficiency, detector));
                    assert!((tail / failure - 1.0).abs() < 1e-6, "{law:?} {detector:?} {k} of {pulses}: {tail}");
                }
            }
        }
    }

    #[test]
    fn a_threshold_detector_gives_the_larger_limit() {
        for law in [Law::Poissonian, Law::Geometric] {
            let limit = |detector| upper_limit(&counts(4_000, 10_000, 0.5, detector, 1e-6), law).unwrap();
            assert!(limit(Detector::Threshold) > limit(Detector::Counting));
        }
    }

    /// Thermal counts scatter more than Poissonian ones, so the same counts leave room for a larger mean.
    #[test]
    fn thermal_counts_leave_more_room() {
        let limit = |law| upper_limit(&counts(40, 20, 1.0, Detector::Counting, 1e-6), law).unwrap();
        assert!(limit(Law::Geometric) > 1.2 * limit(Law::Poissonian));
    }

    #[test]
    fn no_counts_in_many_pulses_still_leave_a_limit() {
        let mean = upper_limit(&counts(0, 1_000_000_000, 0.25, Detector::Threshold, 1e-10), Law::Poissonian).unwrap();
        let expected = -(1e-10f64.ln()) / (1e9 * 0.25);
        assert!((mean / expected - 1.0).abs() < 1e-10, "{mean} {expected}");
    }

    #[test]
    fn the_spread_carries_the_limit_to_the_brightest_pulse() {
        let steady = limit(&Measured::Stated(0.2), Law::Poissonian, Some(0.0), "mean_photon_number").unwrap();
        let unsteady = limit(&Measured::Stated(0.2), Law::Poissonian, Some(0.05), "mean_photon_number").unwrap();
        assert_eq!((steady.mean, unsteady.mean), (0.2, 0.21));
    }

    #[test]
    fn impossible_counts_are_refused_with_their_place() {
        let pointer = |counts: PhotonCounts, law| upper_limit(&counts, law).unwrap_err().pointer;
        let threshold = Detector::Threshold;
        assert_eq!(pointer(counts(1, 0, 0.5, threshold, 0.1), Law::Poissonian), "/pulses");
        assert_eq!(pointer(counts(1, u64::MAX, 0.5, threshold, 0.1), Law::Poissonian), "/pulses");
        assert_eq!(pointer(counts(1, 9, 0.0, threshold, 0.1), Law::Poissonian), "/efficiency");
        assert_eq!(pointer(counts(1, 9, 1.01, threshold, 0.1), Law::Poissonian), "/efficiency");
        assert_eq!(pointer(counts(1, 9, 0.5, threshold, 0.0), Law::Poissonian), "/failure");
        assert_eq!(pointer(counts(1, 9, 0.5, threshold, 0.6), Law::Poissonian), "/failure");
        assert_eq!(pointer(counts(10, 9, 0.5, threshold, 0.1), Law::Poissonian), "/counts");
        assert_eq!(pointer(counts(9, 9, 0.5, threshold, 0.1), Law::Geometric), "/counts");
        assert_eq!(pointer(counts(u64::MAX, 9, 0.5, Detector::Counting, 0.1), Law::Poissonian), "/counts");
        assert_eq!(pointer(counts(1, 9, 0.5, threshold, 0.1), Law::AtMostPoissonian), "/detector");
        let fault = limit(&Measured::Stated(-0.1), Law::Poissonian, Some(0.0), "mean_photon_number").unwrap_err();
        assert_eq!(fault.pointer, "/mean_photon_number");
        let fault = limit(&Measured::Stated(0.1), Law::Poissonian, Some(-0.5), "mean_photon_number").unwrap_err();
        assert_eq!(fault.pointer, "/intensity_spread");
    }
}
