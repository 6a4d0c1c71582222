//! Binary logarithms and elementary steps with a stated rounding direction.
//!
//! The library's logarithm is good to one unit in the last place also near 1; four units are given away here.

/// Four units in the last place, relatively.
const MARGIN: f64 = 4.0 * f64::EPSILON;

/// `log2 x` for `x > 0`, rounded up.
pub fn log2_up(x: f64) -> f64 {
    let value = libm::log2(x);
    (value + MARGIN * value.abs()).next_up()
}

/// `log2 x` for `x > 0`, rounded down.
pub fn log2_down(x: f64) -> f64 {
    let value = libm::log2(x);
    (value - MARGIN * value.abs()).next_down()
}

#[cfg(test)]
mod tests {
    use num_bigint::BigInt;
    use num_rational::BigRational;

    use super::*;

    /// Handbook values to 31 decimals, and where the logarithm is exact. The library's error, a unit in the last place, is covered, and one
    /// more of the argument; no more than a few units are given away.
    #[test]
    fn logarithms_lie_between_their_bounds() {
        for (x, digits) in [
            (3.0, "1.5849625007211561814537389439478"),
            (5.0, "2.3219280948873623478703194294894"),
            (7.0, "2.8073549220576041074419693172318"),
            (10.0, "3.3219280948873623478703194294894"),
            (0.625, "-0.6780719051126376521296805705106"),
            (0.875, "-0.1926450779423958925580306827682"),
            (8.0, "3.0"),
            (0.25, "-2.0"),
        ] {
            let places = digits.split_once('.').unwrap().1.len() as u32;
            let numerator: BigInt = digits.replace('.', "").parse().unwrap();
            let exact = BigRational::new(numerator, BigInt::from(10).pow(places));
            let value: f64 = digits.parse().unwrap();
            let unit = value.abs().next_up() - value.abs();
            let [most, least] = [log2_up(x), log2_down(x)].map(|bound| BigRational::from_float(bound).unwrap());
            let units = |count: f64| BigRational::from_float(count * unit).unwrap();
            assert!(most >= &exact + units(2.0) && most <= &exact + units(12.0), "{x}");
            assert!(least <= &exact - units(2.0) && least >= &exact - units(12.0), "{x}");
        }
    }
}
