//! Any light whose coincidences behind a beam splitter were counted, for a carrier of vacuum and one photon (`d = 2`).
//!
//! A photon is detected by the one threshold detector with probability `η_A`, by the other with `η_B`, splitting included. Two photons
//! give a coincidence with probability `2 η_A η_B`, more photons with a larger one, since further photons only add clicks. So, whatever the
//! photon-number law (derived here),
//!
//! ```text
//! ε = P(n ≥ 2) ≤ p_C / (2 η_A η_B)
//! ```
//!
//! with the Clopper–Pearson upper limit of the coincidence probability `p_C`. It grows with `p_C` and falls with the efficiencies, which must be
//! lower limits. Against [`super::g2`] it needs the efficiencies and no mean photon number. Dark counts can only raise it. The relation is
//! linear in the pulse's state and holds for the average over pulses that are not alike; and for the average only.

use num_rational::BigRational;
use serde::{Deserialize, Serialize};

use super::{
    coherent::one_or_two_modes,
    estimate::{Calculator, Estimate, Input, REPRESENTATIVE, check_among, check_efficiency, check_failure, check_trials},
    rounding::exact_weight_up,
};
use crate::{exact::decimal, fault::Fault, scenario::LeakageReading, statistics::interval};

/// Any light, with the coincidences of two threshold detectors behind a beam splitter.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Coincidence {
    pub pulses: u64,
    /// Pulses in which both detectors clicked.
    pub coincidences: u64,
    /// Lower limits of the probabilities that a photon is detected by the one and by the other; together at most 1.
    pub efficiencies: [f64; 2],
    /// Probability that the limit is below the true value, in `[1e-100, 0.5]`.
    pub failure: f64,
}

impl Calculator for Coincidence {
    fn estimate(&self, _: u32) -> Result<Estimate, Fault> {
        let Self { pulses, coincidences, efficiencies, failure } = *self;
        check_trials(pulses, "/pulses")?;
        check_among(coincidences, pulses, "/coincidences")?;
        check_failure(failure, "/failure")?;
        check_efficiency(efficiencies[0], "/efficiencies/0")?;
        check_efficiency(efficiencies[1], "/efficiencies/1")?;
        if decimal(efficiencies[0]) + decimal(efficiencies[1]) > BigRational::from_integer(1.into()) {
            return Err(Fault::new(
                "/efficiencies",
                "a photon reaches one detector at most, so the two efficiencies are together at most 1",
            ));
        }
        let p = interval::upper_limit(coincidences, pulses, failure);
        Ok(Estimate {
            leakage: leakage(p, efficiencies),
            levels: 2,
            holds: LeakageReading::OnAverage,
            inputs: vec![
                Input::upper_limit("coincidence probability", p, failure),
                Input::stated("detection efficiency of the one detector", efficiencies[0]),
                Input::stated("detection efficiency of the other detector", efficiencies[1]),
            ],
            assumptions: vec![
                REPRESENTATIVE.to_owned(),
                "the two detectors see the same pulses, and each detects a photon with at least its stated efficiency".to_owned(),
                one_or_two_modes(2),
            ],
        })
    }
}

/// `min(1, p_C / (2 η_A η_B))` for a probability and two efficiencies in `(0, 1]`: a weight, evaluated exactly and rounded up.
pub fn leakage(coincidence: f64, efficiencies: [f64; 2]) -> f64 {
    exact_weight_up(&(decimal(coincidence) / (BigRational::from_integer(2.into()) * decimal(efficiencies[0]) * decimal(efficiencies[1]))))
}

#[cfg(test)]
mod tests {
    use super::*;

    /// By direct summation over photon numbers and the ways the photons are shared out; attained by light of at most two photons.
    #[test]
    fn the_bound_is_above_the_direct_sum() {
        let laws: [&[f64]; 4] = [&[0.2, 0.79, 0.01], &[0.9, 0.05, 0.0, 0.05], &[0.5, 0.25, 0.125, 0.125], &[0.0, 0.0, 0.0, 1.0]];
        for (i, law) in laws.iter().enumerate() {
            for [a, b] in [[0.5, 0.5], [0.3, 0.05], [0.01, 0.02]] {
                let coincidence: f64 = law.iter().enumerate().map(|(n, p)| p * both(n, a, b)).sum();
                let outside: f64 = law[2..].iter().sum();
                let bound = leakage(coincidence, [a, b]);
                assert!(outside <= bound * (1.0 + 1e-12), "{law:?} {a} {b}");
                assert!(i > 0 || (outside / bound - 1.0).abs() < 1e-12);
            }
        }
    }

    /// Probability that n photons, sent one by one to A, to B or to neither, make both click.
    fn both(n: usize, a: f64, b: f64) -> f64 {
        fn walk(left: usize, a: f64, b: f64, seen: [bool; 2]) -> f64 {
            if left == 0 {
                return if seen == [true, true] { 1.0 } else { 0.0 };
            }
            a * walk(left - 1, a, b, [true, seen[1]])
                + b * walk(left - 1, a, b, [seen[0], true])
                + (1.0 - a - b) * walk(left - 1, a, b, seen)
        }
        walk(n, a, b, [false, false])
    }

    #[test]
    fn impossible_counts_are_refused_with_their_place() {
        let good = Coincidence { pulses: 1000, coincidences: 2, efficiencies: [0.2, 0.3], failure: 0.01 };
        let pointer = |document: Coincidence| document.estimate(2).unwrap_err().pointer;
        assert_eq!(pointer(Coincidence { coincidences: 1001, ..good }), "/coincidences");
        assert_eq!(pointer(Coincidence { efficiencies: [0.2, 0.0], ..good }), "/efficiencies/1");
        assert_eq!(pointer(Coincidence { efficiencies: [0.6, 0.5], ..good }), "/efficiencies");
        assert_eq!(pointer(Coincidence { failure: 0.0, ..good }), "/failure");
        assert_eq!(good.estimate(2).unwrap().levels, 2);
    }
}
