//! Any light of measured second-order correlation `g²(0)` and mean photon number, for a carrier of vacuum and one photon (`d = 2`).
//!
//! As `n(n−1) ≥ 2` for every `n ≥ 2`,
//!
//! ```text
//! ε = P(n ≥ 2) ≤ ⟨n(n−1)⟩ / 2 = g²(0) n̄² / 2,    g²(0) = ⟨n(n−1)⟩ / n̄²
//! ```
//!
//! (R. Loudon, The Quantum Theory of Light, for the definition). The bound grows with both.
//!
//! *From counts.* Light is split between two threshold detectors that detect a photon with probabilities `η_A` and `η_B`, splitting
//! included, and in N pulses one sees the clicks `A` and `B` and the coincidences `C`. What a laboratory calls g² is
//! `p_C / (p_A p_B)`. With threshold detectors that is not exactly `g²(0)`, but it may be put in its place (derived here):
//!
//! - a pulse of `n ≥ 2` photons gives a coincidence with probability at least `2 η_A η_B`, the value for two photons, since further
//!   photons only add clicks: `p_C ≥ 2 η_A η_B P(n ≥ 2)`;
//! - a pulse of n photons gives a click in A with probability `1 − (1−η_A)^n ≤ n η_A`: clicks of photons have `p_A ≤ η_A n̄`, and so
//!   `1/η_A ≤ n̄/p_A`, likewise for B.
//!
//! Together `P(n ≥ 2) ≤ p_C / (2 η_A η_B) ≤ [p_C / (p_A p_B)] n̄² / 2`: the efficiencies cancel, and no photon-number law is assumed.
//! Clopper–Pearson limits are used, the upper one of `p_C` and the lower ones of `p_A` and `p_B`, each at a third of the failure
//! probability. Dark counts raise `p_C`, which is harmless, and `p_A` and `p_B`, which is not: their probability per pulse is subtracted
//! there. All three relations are linear in the pulse's state, so they hold for the average over pulses that are not alike; and for the
//! average only.

use num_rational::BigRational;
use num_traits::{One, Signed};
use serde::{Deserialize, Serialize};

use super::{
    coherent::one_or_two_modes,
    estimate::{Calculator, Estimate, Input, REPRESENTATIVE, check_among, check_failure, check_not_negative, check_trials, check_weight},
    measured::Measured,
    photons::{Law, PhotonCounts, limit},
    rounding::exact_weight_up,
};
use crate::{
    exact::{decimal, round_up},
    fault::Fault,
    scenario::LeakageReading,
    statistics::interval::{lower_limit, upper_limit},
};

/// Any light whose second-order correlation and mean photon number were measured.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct G2 {
    /// `g²(0)`.
    pub g2: Measured<CorrelationCounts>,
    /// Mean photon number per pulse where the carrier is defined; counts must be those of a counting detector.
    pub mean_photon_number: Measured<PhotonCounts>,
}

/// Counts of two threshold detectors behind a beam splitter.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct CorrelationCounts {
    pub pulses: u64,
    /// Pulses in which both detectors clicked.
    pub coincidences: u64,
    /// Pulses in which the one and in which the other clicked, coincidences included.
    pub singles: [u64; 2],
    /// Upper limit of the probability that a pulse without light makes a detector click.
    #[serde(default)]
    pub dark_probability: f64,
    /// Probability that a limit is violated, in `[1e-100, 0.5]`.
    pub failure: f64,
}

impl Calculator for G2 {
    fn estimate(&self, _: u32) -> Result<Estimate, Fault> {
        let mut assumptions = Vec::new();
        let (g2, mut inputs) = match &self.g2 {
            Measured::Stated(g2) => {
                check_not_negative(*g2, "/g2", "a second-order correlation")?;
                assumptions.push("the second-order correlation is at most the stated one".to_owned());
                (*g2, vec![Input::stated("second-order correlation", *g2)])
            }
            Measured::Counted(counts) => {
                let g2 = correlation_limit(counts).map_err(|fault| fault.under("/g2"))?;
                assumptions.push(REPRESENTATIVE.to_owned());
                assumptions.push("the two detectors see the same pulses, and a photon reaches one of them at most".to_owned());
                assumptions
                    .push(format!("a pulse without light makes a detector click with probability at most {}", counts.dark_probability));
                (g2, vec![Input::upper_limit("second-order correlation", g2, counts.failure)])
            }
        };
        let mean = limit(&self.mean_photon_number, Law::AtMostPoissonian, None, "mean_photon_number")?;
        inputs.extend(mean.inputs);
        assumptions.extend(mean.assumptions);
        assumptions.push(one_or_two_modes(2));
        Ok(Estimate { leakage: leakage(g2, mean.mean), levels: 2, holds: LeakageReading::OnAverage, inputs, assumptions })
    }
}

/// `min(1, g² n̄² / 2)` for finite `g² ≥ 0` and `n̄ ≥ 0`: a weight, evaluated exactly and rounded up.
pub fn leakage(g2: f64, mean: f64) -> f64 {
    let mean = decimal(mean);
    exact_weight_up(&(decimal(g2) * &mean * &mean / BigRational::from_integer(2.into())))
}

/// Upper confidence limit of `p_C / ((p_A − dark)(p_B − dark))`, rounded up.
///
/// # Errors
/// Values out of range, or singles from which no light can be told; pointers are relative to the counts.
pub fn correlation_limit(counts: &CorrelationCounts) -> Result<f64, Fault> {
    let CorrelationCounts { pulses, coincidences, singles, dark_probability, failure } = *counts;
    check_trials(pulses, "/pulses")?;
    check_failure(failure, "/failure")?;
    check_weight(dark_probability, "/dark_probability", "a probability")?;
    let each = (failure / 3.0).next_down();
    let mut product = BigRational::one();
    for (i, clicks) in singles.iter().enumerate() {
        check_among(*clicks, pulses, &format!("/singles/{i}"))?;
        let light = decimal(lower_limit(*clicks, pulses, each)) - decimal(dark_probability);
        if !light.is_positive() {
            return Err(Fault::new(format!("/singles/{i}"), "too few clicks to tell light from dark counts at this failure probability"));
        }
        product *= light;
    }
    check_among(coincidences, singles[0].min(singles[1]), "/coincidences")?;
    let g2 = round_up(&(decimal(upper_limit(coincidences, pulses, each)) / product));
    if g2.is_finite() { Ok(g2) } else { Err(Fault::new("/singles", "too few clicks for a finite limit")) }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::leakage::photons::Detector;

    /// Photon-number laws of very different shape.
    fn laws() -> Vec<Vec<f64>> {
        let poisson =
            |mean: f64| (0..60).scan((-mean).exp(), move |p, n| Some(std::mem::replace(p, *p * mean / (n as f64 + 1.0)))).collect();
        let geometric = |t: f64| (0..200).scan(1.0 - t, move |p, _| Some(std::mem::replace(p, *p * t))).collect();
        vec![
            vec![0.2, 0.79, 0.01],
            vec![0.9, 0.05, 0.0, 0.05],
            vec![0.99, 0.0, 0.0, 0.0, 0.0, 0.0, 0.01],
            vec![0.0, 0.0, 1.0],
            poisson(0.1),
            poisson(2.0),
            geometric(0.1),
            geometric(0.6),
        ]
    }

    fn moments(law: &[f64]) -> (f64, f64, f64) {
        let mean: f64 = law.iter().enumerate().map(|(n, p)| n as f64 * p).sum();
        let pairs: f64 = law.iter().enumerate().map(|(n, p)| n as f64 * (n as f64 - 1.0) * p).sum();
        (law[2..].iter().sum(), mean, pairs / (mean * mean))
    }

    #[test]
    fn the_bound_is_above_the_direct_sum() {
        for law in laws() {
            let (outside, mean, g2) = moments(&law);
            assert!(outside <= leakage(g2, mean) + 1e-14);
        }
        // Attained by light of at most two photons.
        let (outside, mean, g2) = moments(&[0.2, 0.79, 0.01]);
        assert!((outside / leakage(g2, mean) - 1.0).abs() < 1e-12);
    }

    /// The inequality behind the counts, by direct summation over photon numbers and over the ways they are detected.
    #[test]
    fn clicks_of_threshold_detectors_may_stand_for_the_correlation() {
        for law in laws() {
            let (outside, mean, _) = moments(&law);
            for [a, b] in [[0.5, 0.5], [0.3, 0.05], [0.01, 0.02]] {
                let mut clicks = [0.0; 3];
                for (n, p) in law.iter().enumerate() {
                    let n = n as i32;
                    let (no_a, no_b, neither) = ((1.0f64 - a).powi(n), (1.0f64 - b).powi(n), (1.0f64 - a - b).max(0.0).powi(n));
                    clicks[0] += p * (1.0 - no_a);
                    clicks[1] += p * (1.0 - no_b);
                    clicks[2] += p * (1.0 - no_a - no_b + neither);
                }
                let apparent = clicks[2] / (clicks[0] * clicks[1]);
                assert!(outside <= leakage(apparent, mean) * (1.0 + 1e-9), "{law:?} {a} {b}");
            }
        }
    }

    #[test]
    fn the_limit_comes_from_three_limits() {
        let counts =
            CorrelationCounts { pulses: 1_000_000, coincidences: 12, singles: [20_000, 22_000], dark_probability: 1e-4, failure: 3e-6 };
        let g2 = correlation_limit(&counts).unwrap();
        let expected = upper_limit(12, 1_000_000, 1e-6)
            / (lower_limit(20_000, 1_000_000, 1e-6) - 1e-4)
            / (lower_limit(22_000, 1_000_000, 1e-6) - 1e-4);
        assert!((g2 / expected - 1.0).abs() < 1e-9, "{g2} {expected}");
        // The plain ratio is well below the limit.
        assert!(g2 > 12e6 / (20_000.0 * 22_000.0));
    }

    #[test]
    fn impossible_counts_are_refused_with_their_place() {
        let good = CorrelationCounts { pulses: 1000, coincidences: 2, singles: [100, 90], dark_probability: 0.0, failure: 0.01 };
        let pointer = |counts: CorrelationCounts| correlation_limit(&counts).unwrap_err().pointer;
        assert_eq!(pointer(CorrelationCounts { pulses: 0, ..good }), "/pulses");
        assert_eq!(pointer(CorrelationCounts { coincidences: 91, ..good }), "/coincidences");
        assert_eq!(pointer(CorrelationCounts { singles: [100, 1001], ..good }), "/singles/1");
        assert_eq!(pointer(CorrelationCounts { singles: [0, 90], coincidences: 0, ..good }), "/singles/0");
        assert_eq!(pointer(CorrelationCounts { dark_probability: 0.08, ..good }), "/singles/0");
        assert_eq!(pointer(CorrelationCounts { dark_probability: -0.1, ..good }), "/dark_probability");
        assert_eq!(pointer(CorrelationCounts { failure: 1.0, ..good }), "/failure");
        let photons = PhotonCounts { counts: 5, pulses: 10, efficiency: 0.5, detector: Detector::Threshold, failure: 0.1 };
        let document = G2 { g2: Measured::Stated(0.1), mean_photon_number: Measured::Counted(photons) };
        assert_eq!(document.estimate(2).unwrap_err().pointer, "/mean_photon_number/detector");
        let document = G2 { g2: Measured::Stated(-0.1), mean_photon_number: Measured::Stated(0.1) };
        assert_eq!(document.estimate(2).unwrap_err().pointer, "/g2");
    }
}
