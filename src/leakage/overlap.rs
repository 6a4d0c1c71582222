//! Two pure states of overlap `c = |⟨ψ₀|ψ₁⟩|`, for a carrier of one state (`d = 1`).
//!
//! With phases chosen so that the overlap is real, the carrier is the state half-way between, `(ψ₀ + ψ₁)` normalised. Its squared overlap
//! with either is `(1 + c)/2`, so that outside lies
//!
//! ```text
//! ε = (1 − c)/2.
//! ```
//!
//! It falls with c, so a lower limit of the overlap is used. (Derived here.)
//!
//! *From counts.* Emissions of the one state are projected on the other; the projection fails with probability `w = 1 − c²`. With the Clopper–Pearson
//! upper limit of w, and without cancellation,
//!
//! ```text
//! ε = (1 − √(1−w))/2 = w / (2 (1 + √(1−w))),
//! ```
//!
//! which grows with w. It is convex in w: if the overlap varied from round to round, the mean of ε would be above ε at the mean, up to `w/2`
//! (as `1 − √(1−w) ≤ w`). That it does not vary is an assumption; states that vary belong to a budget as a side mode.

use num_rational::BigRational;
use num_traits::One;
use serde::{Deserialize, Serialize};

use super::{
    estimate::{Calculator, Estimate, Input, REPRESENTATIVE, check_weight},
    measured::Measured,
    rounding::{exact_weight_up, weight_up},
    side_mode::WeightCounts,
};
use crate::{exact::decimal, fault::Fault, scenario::LeakageReading};

/// Two pure states.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Overlap {
    /// `|⟨ψ₀|ψ₁⟩|`, not its square; or the counts of a projection of the one state on the other.
    pub overlap: Measured<WeightCounts>,
}

impl Calculator for Overlap {
    fn estimate(&self, _: u32) -> Result<Estimate, Fault> {
        let mut assumptions =
            vec!["there are two preparations, each a pure state, and their overlap is the same in every round".to_owned()];
        let (leakage, input) = match &self.overlap {
            Measured::Stated(overlap) => {
                check_weight(*overlap, "/overlap", "an overlap")?;
                assumptions.push("the overlap is at least the stated one".to_owned());
                (leakage(*overlap), Input::stated("overlap", *overlap))
            }
            Measured::Counted(counts) => {
                let failed = counts.upper_limit().map_err(|fault| fault.under("/overlap"))?;
                assumptions.push(REPRESENTATIVE.to_owned());
                assumptions.push("the projection passes nothing that is orthogonal to the other state".to_owned());
                (from_failed_projections(failed), Input::upper_limit("probability that the projection fails", failed, counts.failure))
            }
        };
        Ok(Estimate { leakage, levels: 1, holds: LeakageReading::EveryEmission, inputs: vec![input], assumptions })
    }
}

/// `(1 − c)/2` for an overlap in `[0, 1]`: a weight, evaluated exactly and rounded up.
pub fn leakage(overlap: f64) -> f64 {
    exact_weight_up(&((BigRational::one() - decimal(overlap)) / BigRational::from_integer(2.into())))
}

/// `w / (2 (1 + √(1−w)))` for a probability w in `[0, 1]`: a weight, rounded up by some units in the last place.
pub fn from_failed_projections(failed: f64) -> f64 {
    // Near w = 1 the root is small beside 1, so that its own error does not matter.
    weight_up(failed / (2.0 * (1.0 + (1.0 - failed).max(0.0).sqrt())), 16.0)
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Two states in the plane, with the projector on the state half-way between them.
    #[test]
    fn is_the_weight_outside_the_state_half_way_between() {
        for angle in [1e-4f64, 0.1, 0.7, 1.5] {
            let (half, overlap) = (0.5 * angle, angle.cos());
            let outside = half.sin().powi(2);
            assert!((leakage(overlap) / outside - 1.0).abs() < 1e-7);
            assert!((from_failed_projections(angle.sin().powi(2)) / outside - 1.0).abs() < 1e-12);
        }
    }

    #[test]
    fn tiny_weights_keep_their_digits_and_their_direction() {
        assert!((leakage(0.999_999_999) / 5e-10 - 1.0).abs() < 1e-15);
        for failed in [1e-15, 1e-9, 1e-6f64] {
            // w/4 + w²/16 + w³/32 + …
            let series = 0.25 * failed * (1.0 + 0.25 * failed + 0.125 * failed * failed);
            let value = from_failed_projections(failed);
            assert!(value >= series && value / series - 1.0 < 1e-14, "{failed}: {value} {series}");
        }
        assert_eq!((leakage(1.0), from_failed_projections(0.0)), (0.0, 0.0));
        assert!((leakage(0.0) - 0.5).abs() < 1e-15 && (from_failed_projections(1.0) - 0.5).abs() < 1e-14);
    }

    #[test]
    fn varying_overlaps_leak_at_most_half_the_failed_projections() {
        for failed in [1e-6, 0.1, 0.9, 1.0] {
            let value = from_failed_projections(failed);
            assert!(value <= 0.5 * failed * (1.0 + 1e-14));
            assert!(from_failed_projections(0.5 * failed) <= 0.5 * value);
        }
    }

    #[test]
    fn wrong_documents_are_refused_with_their_place() {
        for overlap in [-0.1, 1.1, f64::NAN] {
            assert_eq!(Overlap { overlap: Measured::Stated(overlap) }.estimate(1).unwrap_err().pointer, "/overlap");
        }
        let counts = WeightCounts { outside: 3, trials: 2, failure: 0.1 };
        assert_eq!(Overlap { overlap: Measured::Counted(counts) }.estimate(1).unwrap_err().pointer, "/overlap/outside");
    }
}
