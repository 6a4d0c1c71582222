//! Rounding of computed weights against the user.

use num_rational::BigRational;

use crate::exact::round_up;

/// A weight from a value that was computed in floating point with a relative error of at most `ulps` units in the last place: rounded
/// up, at most 1. A value that is not above zero stays zero only if it is exactly zero; callers pass zero only where the weight is zero.
pub fn weight_up(value: f64, ulps: f64) -> f64 {
    if value == 0.0 {
        return 0.0;
    }
    above_zero_up(value, ulps)
}

/// The same for a weight that is known not to be zero: a product that ran below the normal numbers is rounded up to the least of them.
pub fn above_zero_up(value: f64, ulps: f64) -> f64 {
    // Two units more, since the number is also read as a decimal.
    (value * (1.0 + ulps * f64::EPSILON)).max(f64::MIN_POSITIVE).next_up().next_up().min(1.0)
}

/// A weight from an exact value, rounded up, at most 1.
pub fn exact_weight_up(value: &BigRational) -> f64 {
    round_up(value).min(1.0)
}
