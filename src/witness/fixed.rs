//! The value of a witness over a region in fixed point: a sum of 128-bit integers, every one of them rounded against the user.
//!
//! A number of a document means its decimal, which is at most half a unit in the last place away from the `f64` that stands for it. So the
//! decimal of x lies between the neighbours of x, and
//!
//! ```text
//! down(x) = ⌊2⁶⁰ · before(x)⌋ / 2⁶⁰  ≤  decimal(x)  ≤  up(x) = ⌈2⁶⁰ · after(x)⌉ / 2⁶⁰.
//! ```
//!
//! An upper bound over the intervals `[down(low), up(high)]` is one over the smaller intervals of the document; leakages have multipliers
//! that are not negative, so they are rounded up. Everything else is exact. What is given away is of the order of `Σ|ν| 2⁻⁵³`.

use num_bigint::BigInt;
use num_rational::BigRational;
use num_traits::One;

use super::witness::Witness;
use crate::counts::Table;

/// Bits after the binary point of a probability.
const PROBABILITY_BITS: u32 = 60;

/// Upper bound on `max_e (κ_e + μ^e·ε) + max ν·p` over the region, a multiple of a power of two.
///
/// `None` if the shapes do not fit, the intervals hold no behaviour, or an integer becomes too large: then there is a slower way.
pub(super) fn bound(witness: &Witness, region: &Table<[f64; 2]>, leakage: &[f64]) -> Option<BigRational> {
    let bits = witness.multiplier_bits + PROBABILITY_BITS;
    let numerator = largest_constant(witness, leakage, bits)?.checked_add(worst_behaviour(witness, region)?)?;
    // In lowest terms, as a rational has to be.
    let shared = numerator.trailing_zeros().min(bits);
    Some(BigRational::new_raw(BigInt::from(numerator >> shared), BigInt::one() << (bits - shared)))
}

/// `2⁶⁰ down(x)`, for x from 0 to 1.
fn down(x: f64) -> Option<i128> {
    (0.0..=1.0).contains(&x).then(|| (x.next_down().max(0.0) * scale()).floor() as i128)
}

/// `2⁶⁰ up(x)`, for x from 0 to 1.
fn up(x: f64) -> Option<i128> {
    (0.0..=1.0).contains(&x).then(|| if x == 0.0 { 0 } else { (x.next_up() * scale()).ceil() as i128 })
}

fn scale() -> f64 {
    (1u64 << PROBABILITY_BITS) as f64
}

/// `max_e (κ_e + μ^e·ε)`, rounded up, over `2^bits`.
fn largest_constant(witness: &Witness, leakage: &[f64], bits: u32) -> Option<i128> {
    let leakage: Vec<i128> = leakage.iter().map(|epsilon| up(*epsilon)).collect::<Option<_>>()?;
    let mut largest: Option<i128> = None;
    for (group, constant) in witness.constants.iter().enumerate() {
        let multipliers = witness.leakage.get(group).or(witness.leakage.first())?;
        let of_bits = 2 * witness.factor_bits;
        let mut sum = if of_bits <= bits {
            constant.0.checked_mul(1i128.checked_shl(bits - of_bits)?)?
        } else {
            // An arithmetic shift rounds down; what is cut off is less than one.
            (constant.0 >> (of_bits - bits)).checked_add(1)?
        };
        for (multiplier, epsilon) in multipliers.iter().zip(&leakage) {
            sum = sum.checked_add(i128::from(*multiplier).checked_mul(*epsilon)?)?;
        }
        largest = Some(largest.map_or(sum, |other| other.max(sum)));
    }
    largest
}

/// `max ν·p` over the region, rounded up: at each setting start at the lows and give what is left to the largest `ν`.
fn worst_behaviour(witness: &Witness, region: &Table<[f64; 2]>) -> Option<i128> {
    let mut sum = 0i128;
    let mut order = Vec::new();
    for setting in witness.geometry.settings() {
        let weights = witness.behaviour.get(setting.x)?.get(setting.y)?;
        let intervals = region.get(setting.x)?.get(setting.y)?;
        if weights.len() != intervals.len() {
            return None;
        }
        order.clear();
        order.extend(weights.iter().zip(intervals));
        order.sort_by_key(|(weight, _)| std::cmp::Reverse(**weight));
        let mut left = 1i128 << PROBABILITY_BITS;
        for (weight, [low, _]) in &order {
            let low = down(*low)?;
            left -= low;
            sum = sum.checked_add(i128::from(**weight).checked_mul(low)?)?;
        }
        if left < 0 {
            return None;
        }
        for (weight, [low, high]) in &order {
            let room = up(*high)? - down(*low)?;
            if room < 0 {
                return None;
            }
            let given = room.min(left);
            sum = sum.checked_add(i128::from(**weight).checked_mul(given)?)?;
            left -= given;
        }
        if left > 0 {
            return None;
        }
    }
    Some(sum)
}

#[cfg(test)]
mod tests {
    use num_traits::ToPrimitive;

    use super::*;
    use crate::exact::decimal;

    #[test]
    fn fixed_point_contains_the_decimal() {
        let unit = BigRational::new(1.into(), BigInt::one() << PROBABILITY_BITS);
        for x in [0.0, 1.0, 0.1, 0.001, 1.0 / 3.0, 1e-17, 1e-300, 0.5, 0.999_999_999_999_999_9, f64::MIN_POSITIVE] {
            let (low, high) =
                (BigRational::from(BigInt::from(down(x).unwrap())) * &unit, BigRational::from(BigInt::from(up(x).unwrap())) * &unit);
            assert!(low <= decimal(x) && decimal(x) <= high, "{x}");
            assert!((high - low).to_f64().unwrap() <= 4.0 * f64::EPSILON * x + 4e-18, "{x} is far from its decimal");
        }
        assert_eq!((down(-0.1), up(1.5), up(f64::NAN)), (None, None, None));
    }
}
