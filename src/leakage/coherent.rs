//! Coherent pulses.
//!
//! A pulse of mean photon number μ has the Poisson photon-number law `e^{−μ} μ^k / k!`, whatever is known of its phase. Outside the d
//! lowest Fock levels lies
//!
//! ```text
//! ε = Σ_{k≥d} e^{−μ} μ^k / k! = P(d, μ),
//! ```
//!
//! the regularised lower incomplete gamma function (Abramowitz and Stegun, 26.4.21). It grows with μ: `dε/dμ = e^{−μ} μ^{d−1}/(d−1)! > 0`.
//! A library's incomplete gamma function has a stated accuracy but no direction, so the series itself is summed: its terms are positive,
//! nothing cancels, and the rest is bounded by a geometric series.
//!
//! A pulse of fixed phase is a pure state, so the bound holds for every emission. With a random phase the state is a mixture of Fock
//! states, some of them entirely outside the carrier, and the bound holds on average only.

use serde::{Deserialize, Serialize};

use super::{
    estimate::{Calculator, Estimate},
    measured::Measured,
    photons::{Law, PhotonCounts, limit},
    rounding::above_zero_up,
};
use crate::{
    fault::Fault,
    scenario::{LeakageReading, MAX_CARRIER_DIMENSION},
};

/// A coherent pulse in one mode.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Coherent {
    /// Mean photon number per pulse.
    pub mean_photon_number: Measured<PhotonCounts>,
    /// Brightest pulse over the faintest, less one.
    #[serde(default)]
    pub intensity_spread: f64,
    /// Number of Fock levels that belong to the carrier; the carrier dimension of the budget if left out.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub levels: Option<u32>,
    #[serde(default)]
    pub phase: Phase,
}

#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Default, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Phase {
    /// The phase varies or is not known to be fixed. The default, since it claims less.
    #[default]
    Random,
    /// The phase of every preparation is fixed by something classical.
    Fixed,
}

impl Calculator for Coherent {
    fn estimate(&self, carrier_dimension: u32) -> Result<Estimate, Fault> {
        let levels = checked_levels(self.levels, carrier_dimension)?;
        let limit = limit(&self.mean_photon_number, Law::Poissonian, Some(self.intensity_spread), "mean_photon_number")?;
        let mut assumptions = limit.assumptions;
        let (holds, phase, carrier) = match self.phase {
            Phase::Random => (LeakageReading::OnAverage, "the photon number of each pulse follows a Poisson law", one_or_two_modes(levels)),
            Phase::Fixed => (LeakageReading::EveryEmission, "every pulse is a pure coherent state whose phase is fixed", one_mode(levels)),
        };
        assumptions.extend([phase.to_owned(), carrier]);
        Ok(Estimate { leakage: leakage(limit.mean, levels), levels, holds, inputs: limit.inputs, assumptions })
    }
}

pub(super) fn checked_levels(levels: Option<u32>, carrier_dimension: u32) -> Result<u32, Fault> {
    let levels = levels.unwrap_or(carrier_dimension);
    if (1..=MAX_CARRIER_DIMENSION).contains(&levels) {
        Ok(levels)
    } else {
        Err(Fault::new("/levels", format!("must be from 1 to {MAX_CARRIER_DIMENSION}, is {levels}")))
    }
}

/// The carrier of d levels in words.
pub(super) fn one_mode(levels: u32) -> String {
    format!("the carrier is one mode with at most {}; light in other modes is entered on its own", photons(levels - 1))
}

/// The same for sources without a phase. Their photon number may be handed to the hidden variable, and the carrier may depend on that: n
/// photons in two modes have n + 1 states, so at most d − 1 of them fit into d dimensions.
pub(super) fn one_or_two_modes(levels: u32) -> String {
    let photons = photons(levels - 1);
    format!(
        "the carrier is one mode with at most {photons}, or two modes with at most {photons} in all if no state is a superposition of \
         photon numbers and their law is the same for every preparation; light in other modes is entered on its own"
    )
}

fn photons(number: u32) -> String {
    format!("{number} {}", if number == 1 { "photon" } else { "photons" })
}

/// `Σ_{k≥d} e^{−μ} μ^k / k!` for finite `μ ≥ 0` and `d ≥ 1` levels: a weight in `[0, 1]`, rounded up.
///
/// Exceeds the value by a few units in the last place times d, relatively; exactly 0 for `μ = 0`.
pub fn leakage(mean: f64, levels: u32) -> f64 {
    if mean == 0.0 {
        return 0.0;
    }
    let d = f64::from(levels);
    if mean <= d { above_zero_up(tail(mean, levels), 8.0 * d + 64.0) } else { above_zero_up(1.0 - head(mean, levels - 1), 4.0) }
}

/// The sum from `k = d` up, where the terms fall; never below its value before rounding.
fn tail(mean: f64, levels: u32) -> f64 {
    let mut k = f64::from(levels);
    let (mut term, mut sum) = (1.0, 1.0);
    while term > 0.25 * f64::EPSILON * sum {
        k += 1.0;
        term *= mean / k;
        sum += term;
    }
    let next = mean / (k + 1.0);
    sum += term * next / (1.0 - next);
    probability(mean, levels) * sum
}

/// The sum from 0 to `m < μ`, rounded down: what is left out and the rounding errors only lower it.
fn head(mean: f64, last: u32) -> f64 {
    let mut k = f64::from(last);
    let (mut term, mut sum) = (1.0, 1.0);
    while k > 0.0 && term > 0.25 * f64::EPSILON * sum {
        term *= k / mean;
        sum += term;
        k -= 1.0;
    }
    let allowance = (8.0 * f64::from(last) + 4.0 * mean + 64.0) * f64::EPSILON;
    probability(mean, last) * sum * (1.0 - allowance.min(1.0))
}

/// `e^{−μ} μ^k / k!`, with the exponential spread over the factors so that neither they nor the partial products overflow.
fn probability(mean: f64, k: u32) -> f64 {
    if k == 0 {
        return libm::exp(-mean);
    }
    let share = libm::exp(-mean / f64::from(k));
    (1..=k).fold(1.0, |product, j| product * (mean / f64::from(j) * share))
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::exact::{decimal, round_up};
    use num_bigint::BigInt;
    use num_rational::BigRational;
    use num_traits::{One, Zero};

    /// The tail by direct summation of the photon-number distribution in exact arithmetic: both `Σ_{k≥d} μ^k/k!` and `e^μ`, cut where what
    /// is left is far below the last digit.
    fn direct(mean: f64, levels: u32) -> BigRational {
        let mean = decimal(mean);
        let negligible = BigRational::new(BigInt::one(), BigInt::from(10).pow(60));
        let (mut term, mut tail, mut all, mut k) = (BigRational::one(), BigRational::zero(), BigRational::zero(), 0u32);
        loop {
            all += &term;
            if k >= levels {
                tail += &term;
            }
            k += 1;
            term = term * &mean / BigRational::from_integer(k.into());
            if k > levels && &term / &tail < negligible {
                return tail / all;
            }
        }
    }

    #[test]
    fn equals_the_direct_sum_and_is_not_below_it() {
        for mean in [1e-9, 1e-6, 1e-3, 0.1, 0.5, 1.0, 1.9, 2.0, 2.1, 5.0, 12.0] {
            for levels in [1u32, 2, 3, 5, 10] {
                let exact = direct(mean, levels);
                let value = leakage(mean, levels);
                assert!(decimal(value) >= exact, "{mean} {levels}: {value}");
                let relative = value / round_up(&exact) - 1.0;
                assert!(relative < 1e-12, "{mean} {levels}: {relative}");
            }
        }
    }

    #[test]
    fn large_carriers_neither_overflow_nor_lose_direction() {
        for (mean, levels) in [(60.0, 64u32), (64.0, 64), (70.0, 64), (110.0, 128), (150.0, 128)] {
            let exact = direct(mean, levels);
            let value = leakage(mean, levels);
            assert!(decimal(value) >= exact, "{mean} {levels}: {value}");
            assert!(value / round_up(&exact) - 1.0 < 1e-11, "{mean} {levels}: {value}");
        }
        assert!((leakage(1024.0, 1024) - 0.5).abs() < 0.01);
        assert_eq!(leakage(1e6, 1024), 1.0);
        assert_eq!(leakage(f64::MAX, 1024), 1.0);
        assert!(leakage(1e-9, 1024) > 0.0 && leakage(1e-9, 1024) < 1e-300);
    }

    #[test]
    fn tiny_means_leave_their_leading_term() {
        // μ²/2 − μ³/3 for d = 2.
        assert!((leakage(1e-9, 2) / (5e-19 - 1e-27 / 3.0) - 1.0).abs() < 1e-12);
        assert!((leakage(1e-300, 1) / 1e-300 - 1.0).abs() < 1e-12);
        assert_eq!(leakage(0.0, 2), 0.0);
    }

    #[test]
    fn grows_with_the_mean() {
        for levels in [1u32, 2, 7] {
            let values: Vec<f64> = (1..400).map(|i| leakage(0.05 * f64::from(i), levels)).collect();
            assert!(values.windows(2).all(|pair| pair[0] <= pair[1]));
        }
    }

    #[test]
    fn only_a_fixed_phase_holds_for_every_emission() {
        let pulse = |phase| Coherent { mean_photon_number: Measured::Stated(0.1), intensity_spread: 0.0, levels: None, phase };
        assert_eq!(pulse(Phase::Random).estimate(2).unwrap().holds, LeakageReading::OnAverage);
        assert_eq!(pulse(Phase::Fixed).estimate(2).unwrap().holds, LeakageReading::EveryEmission);
        let none = Coherent { levels: Some(0), ..pulse(Phase::Random) };
        assert_eq!(none.estimate(2).unwrap_err().pointer, "/levels");
    }
}
