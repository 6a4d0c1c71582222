//! Thermal light of one mode.
//!
//! With mean photon number μ and `t = μ/(1+μ)` the photon-number law is geometric, `(1−t) t^k`, and outside the d lowest Fock levels lies
//!
//! ```text
//! ε = Σ_{k≥d} (1−t) t^k = t^d = (μ/(1+μ))^d
//! ```
//!
//! (L. Mandel and E. Wolf, Optical Coherence and Quantum Optics, section 13.1). It grows with t and so with μ. The state is a mixture of
//! Fock states, so the bound holds on average only. Light of more than one mode has a lighter tail for the same mean.

use serde::{Deserialize, Serialize};

use super::{
    coherent::{checked_levels, one_or_two_modes},
    estimate::{Calculator, Estimate},
    measured::Measured,
    photons::{Law, PhotonCounts, limit},
    rounding::above_zero_up,
};
use crate::{fault::Fault, scenario::LeakageReading};

/// Thermal light in one mode.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Thermal {
    /// Mean photon number per pulse.
    pub mean_photon_number: Measured<PhotonCounts>,
    /// Brightest pulse over the faintest, less one; of the mean photon number, not of the thermal fluctuation itself.
    #[serde(default)]
    pub intensity_spread: f64,
    /// Number of Fock levels that belong to the carrier; the carrier dimension of the budget if left out.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub levels: Option<u32>,
}

impl Calculator for Thermal {
    fn estimate(&self, carrier_dimension: u32) -> Result<Estimate, Fault> {
        let levels = checked_levels(self.levels, carrier_dimension)?;
        let limit = limit(&self.mean_photon_number, Law::Geometric, Some(self.intensity_spread), "mean_photon_number")?;
        let mut assumptions = limit.assumptions;
        assumptions.push(one_or_two_modes(levels));
        assumptions.push("the photon number of each pulse follows the thermal law of a single mode".to_owned());
        Ok(Estimate { leakage: leakage(limit.mean, levels), levels, holds: LeakageReading::OnAverage, inputs: limit.inputs, assumptions })
    }
}

/// `(μ/(1+μ))^d` for finite `μ ≥ 0` and `d ≥ 1` levels: a weight in `[0, 1]`, rounded up.
///
/// Exceeds the value by a few units in the last place times d, relatively; exactly 0 for `μ = 0`.
pub fn leakage(mean: f64, levels: u32) -> f64 {
    if mean == 0.0 {
        return 0.0;
    }
    let d = f64::from(levels);
    above_zero_up(libm::pow(mean / (1.0 + mean), d), 4.0 * d + 16.0)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::exact::{decimal, round_up};
    use num_rational::BigRational;
    use num_traits::{One, Zero};

    /// `Σ_{k≥d} (1−t) t^k` by direct summation in exact arithmetic, cut where what is left is far below the last digit.
    fn direct(mean: f64, levels: u32) -> BigRational {
        let mean = decimal(mean);
        let t = &mean / (BigRational::one() + &mean);
        let mut term = (0..levels).fold(BigRational::one() - &t, |term, _| term * &t);
        let mut sum = BigRational::zero();
        for _ in 0..120 {
            sum += &term;
            term *= &t;
        }
        sum
    }

    #[test]
    fn equals_the_direct_sum_and_is_not_below_it() {
        for mean in [1e-9, 1e-6, 1e-3, 0.01, 0.1, 0.5] {
            for levels in [1u32, 2, 3, 6] {
                let exact = direct(mean, levels);
                let value = leakage(mean, levels);
                assert!(decimal(value) >= exact, "{mean} {levels}: {value}");
                assert!(value / round_up(&exact) - 1.0 < 1e-12, "{mean} {levels}: {value}");
            }
        }
    }

    #[test]
    fn extremes_stay_in_range() {
        assert_eq!(leakage(0.0, 1), 0.0);
        assert_eq!(leakage(f64::MAX, 3), 1.0);
        assert!(leakage(1e-300, 3) > 0.0);
    }
}
