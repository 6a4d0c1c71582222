//! Vacuum weight of any light, for a carrier that is the vacuum alone (`d = 1`).
//!
//! ```text
//! ε = 1 − P(0) = Σ_{n≥1} P(n) ≤ Σ_n n P(n) = n̄.
//! ```
//!
//! From the clicks of a detector of efficiency η: a pulse of n photons makes it click with probability at least `1 − (1−η)^n ≥ η` for
//! `n ≥ 1`, so that, whatever the photon-number law,
//!
//! ```text
//! P(click) ≥ η (1 − P(0)),    ε ≤ p/η
//! ```
//!
//! with the Clopper–Pearson upper limit p of the click probability. (Derived here; both grow with what is measured.) Detections
//! of a counting detector are at least as many as its pulses with a click, so they may stand for clicks.

use num_rational::BigRational;
use serde::{Deserialize, Serialize};

use super::{
    estimate::{
        Calculator, Estimate, Input, REPRESENTATIVE, check_among, check_efficiency, check_failure, check_not_negative, check_trials,
    },
    measured::Measured,
    photons::{Detector, PhotonCounts},
    rounding::exact_weight_up,
};
use crate::{exact::decimal, fault::Fault, scenario::LeakageReading, statistics::interval};

/// Any light that is almost the vacuum.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Vacuum {
    /// Mean photon number per pulse.
    pub mean_photon_number: Measured<PhotonCounts>,
    /// What is claimed of the stated value or of the pulses that were counted.
    #[serde(default)]
    pub holds: LeakageReading,
}

impl Calculator for Vacuum {
    fn estimate(&self, _: u32) -> Result<Estimate, Fault> {
        let (leakage, input, mut assumptions) = match &self.mean_photon_number {
            Measured::Stated(mean) => {
                check_not_negative(*mean, "/mean_photon_number", "a mean photon number")?;
                let assumption = "the mean photon number is at most the stated one".to_owned();
                (leakage(*mean), Input::stated("mean photon number", *mean), vec![assumption])
            }
            Measured::Counted(counts) => {
                let weight = from_clicks(counts).map_err(|fault| fault.under("/mean_photon_number"))?;
                let detector = "the detector clicks with at least the stated efficiency for one photon, in every pulse counted";
                let assumptions = vec![REPRESENTATIVE.to_owned(), detector.to_owned()];
                (weight, Input::upper_limit("weight outside the vacuum", weight, counts.failure), assumptions)
            }
        };
        assumptions.extend(every_emission(self.holds));
        Ok(Estimate { leakage, levels: 1, holds: self.holds, inputs: vec![input], assumptions })
    }
}

/// What has to be assumed for a mean weight to hold for every emission.
pub(super) fn every_emission(holds: LeakageReading) -> Option<String> {
    match holds {
        LeakageReading::OnAverage => None,
        LeakageReading::EveryEmission => Some("every emission is a pure state that obeys the bound by itself".to_owned()),
    }
}

/// `min(1, n̄)`, for `n̄ ≥ 0`: a weight, exact.
pub fn leakage(mean: f64) -> f64 {
    mean.min(1.0)
}

/// `min(1, p/η)` with the Clopper–Pearson upper limit p of the click probability: a weight, rounded up.
///
/// # Errors
/// Values out of range; pointers are relative to the counts.
pub fn from_clicks(counts: &PhotonCounts) -> Result<f64, Fault> {
    let PhotonCounts { counts, pulses, efficiency, detector, failure } = *counts;
    check_trials(pulses, "/pulses")?;
    check_efficiency(efficiency, "/efficiency")?;
    check_failure(failure, "/failure")?;
    let clicks = match detector {
        Detector::Threshold => {
            check_among(counts, pulses, "/counts")?;
            counts
        }
        Detector::Counting => counts.min(pulses),
    };
    let weight: BigRational = decimal(interval::upper_limit(clicks, pulses, failure)) / decimal(efficiency);
    Ok(exact_weight_up(&weight))
}

#[cfg(test)]
mod tests {
    use super::*;

    /// For laws of very different shape, by direct summation: the weight outside the vacuum is at most the mean, and at most the click
    /// probability over the efficiency.
    #[test]
    fn bounds_hold_for_laws_of_any_shape() {
        let laws: [Vec<f64>; 4] = [
            vec![0.9, 0.1],
            vec![0.99, 0.0, 0.0, 0.01],
            vec![0.5, 0.25, 0.125, 0.125],
            (0..80).scan(0.8, |p, _| Some(std::mem::replace(p, *p * 0.2))).collect(),
        ];
        for law in laws {
            let outside: f64 = law[1..].iter().sum();
            let mean: f64 = law.iter().enumerate().map(|(n, p)| n as f64 * p).sum();
            assert!(outside <= leakage(mean) + 1e-15);
            for efficiency in [0.1, 0.7, 1.0f64] {
                let click: f64 = law.iter().enumerate().map(|(n, p)| p * (1.0 - (1.0 - efficiency).powi(n as i32))).sum();
                assert!(outside <= click / efficiency + 1e-15);
            }
        }
    }

    #[test]
    fn the_limit_is_that_of_the_clicks_over_the_efficiency() {
        let counts = PhotonCounts { counts: 120, pulses: 100_000, efficiency: 0.5, detector: Detector::Threshold, failure: 1e-6 };
        let weight = from_clicks(&counts).unwrap();
        let p = interval::upper_limit(120, 100_000, 1e-6);
        assert!(weight >= 2.0 * p && weight < 2.0 * p * (1.0 + 1e-14));
        let counting = PhotonCounts { detector: Detector::Counting, counts: 200_000, ..counts };
        assert_eq!(from_clicks(&counting).unwrap(), 1.0);
        let impossible = PhotonCounts { counts: 200_000, ..counts };
        assert_eq!(from_clicks(&impossible).unwrap_err().pointer, "/counts");
    }
}
