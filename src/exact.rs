//! Exact rationals, and the way between them and the decimals of a document.
//!
//! A number in a document means its decimal: `0.001` is 1/1000, not the nearest binary fraction. Numbers are held as `f64`,
//! whose shortest decimal that reads back to it is the one that is printed; so every figure in a record has one exact value,
//! which an auditor obtains by reading the record with decimal or rational arithmetic.

use num_bigint::BigInt;
use num_rational::BigRational;
use num_traits::{One, Signed, ToPrimitive, Zero};

/// The exact value of the shortest decimal of a finite `f64`; zero for values that are not finite, which validated documents do
/// not hold.
pub fn decimal(value: f64) -> BigRational {
    let text = format!("{value:e}");
    let parsed = text.split_once('e').and_then(|(mantissa, exponent)| {
        let (whole, fraction) = mantissa.split_once('.').unwrap_or((mantissa, ""));
        let digits: BigInt = format!("{whole}{fraction}").parse().ok()?;
        let exponent = exponent.parse::<i64>().ok()? - i64::try_from(fraction.len()).ok()?;
        let power = BigInt::from(10).pow(u32::try_from(exponent.unsigned_abs()).ok()?);
        Some(if exponent >= 0 { BigRational::from(digits * power) } else { BigRational::new(digits, power) })
    });
    parsed.unwrap_or_else(BigRational::zero)
}

/// `numerator / 2^bits`.
pub fn dyadic(numerator: impl Into<BigInt>, bits: u32) -> BigRational {
    BigRational::new(numerator.into(), BigInt::one() << bits)
}

/// The smallest `f64`, up to a few units in the last place, whose decimal is not below the value. Infinite if none is.
pub fn round_up(value: &BigRational) -> f64 {
    if let Some((numerator, bits)) = as_dyadic(value) {
        return round_up_dyadic(numerator, bits);
    }
    let mut guess = value.to_f64().unwrap_or(if value.is_negative() { f64::MIN } else { f64::INFINITY });
    while guess.is_finite() && decimal(guess) < *value {
        guess = guess.next_up();
    }
    guess
}

/// Most bits after the binary point for which the short way is taken: far from where `f64` runs out of exponents.
const MOST_BITS: u64 = 512;

/// Numerator and bits of a value `numerator / 2^bits` that is small enough for the short way.
fn as_dyadic(value: &BigRational) -> Option<(i128, u32)> {
    let bits = value.denom().trailing_zeros().filter(|zeros| value.denom().bits() == zeros + 1 && *zeros <= MOST_BITS)?;
    Some((value.numer().to_i128()?, u32::try_from(bits).ok()?))
}

/// As [`round_up`], of `numerator / 2^bits`, in a few steps.
fn round_up_dyadic(numerator: i128, bits: u32) -> f64 {
    // At most twelve decimal digits: the number and its decimal are the value.
    if bits <= 8 && numerator.unsigned_abs() < 1 << 20 {
        return numerator as f64 * 2f64.powi(-(bits as i32));
    }
    // The cast rounds to nearest and the scaling is exact, so the value is at most half a unit above the product. The shortest decimal of
    // the number one unit up is at most half a unit below that number.
    let nearest = numerator as f64 * 2f64.powi(-(bits as i32));
    nearest.next_up()
}

/// The largest `f64`, up to a few units in the last place, whose decimal is not above the value.
pub fn round_down(value: &BigRational) -> f64 {
    -round_up(&-value)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_decimal_means_what_is_written() {
        let ratio = |n: i64, d: i64| BigRational::new(n.into(), d.into());
        assert_eq!(decimal(0.001), ratio(1, 1000));
        assert_eq!(decimal(-12.5), ratio(-25, 2));
        assert_eq!(decimal(0.0), ratio(0, 1));
        assert_eq!(decimal(1e22), BigRational::from(BigInt::from(10).pow(22)));
        assert_eq!(decimal(5e-324), BigRational::new(5.into(), BigInt::from(10).pow(324)));
    }

    #[test]
    fn rounding_never_crosses_the_value() {
        for (n, d) in [(1i64, 3i64), (2, 3), (-1, 3), (1, 10), (853_553_390_593_273_762, 1_000_000_000_000_000_000), (0, 1), (7, 1)] {
            let value = BigRational::new(n.into(), d.into());
            let (low, high) = (round_down(&value), round_up(&value));
            assert!(decimal(low) <= value && value <= decimal(high));
            assert!(high - low <= 4.0 * f64::EPSILON * high.abs(), "{low} {high}");
        }
    }
}
