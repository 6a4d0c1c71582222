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
