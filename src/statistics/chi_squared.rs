//! Survival function of the chi-squared law, good for tiny p-values.
//!
//! With `a = ν/2` and `h = x/2` it is the regularised upper incomplete gamma function `Q(a, h)`. For whole ν this has a closed form, a
//! finite sum of positive terms (Abramowitz and Stegun, 26.4.4 and 26.4.5):
//!
//! ```text
//! ν even:  e^{−h} Σ_{j=0}^{a−1} h^j / j!
//! ν odd:   erfc(√h) + e^{−h} Σ_{j=0}^{a−3/2} h^{j+1/2} / Γ(j + 3/2)
//! ```
//!
//! It is summed from its last term down where the terms fall, `h ≥ a`, so that nothing cancels or overflows. Elsewhere the value is not
//! small, and is one minus the series of the lower function, `h^a e^{−h} / Γ(a+1) · (1 + h/(a+1) + h²/((a+1)(a+2)) + …)`.

/// `P(χ²_ν > x)` for `x ≥ 0` and ν ≥ 1 degrees of freedom.
///
/// Nearest value, relative error about 1e-13 for ν up to 100 and 1e-11 for ν up to 2000. Values below the least positive normal number
/// are given as that number, so that a p-value is never zero. 1 for ν = 0 or a statistic that is not above zero.
pub fn survival(x: f64, degrees_of_freedom: u32) -> f64 {
    if degrees_of_freedom == 0 || x.is_nan() || x <= 0.0 {
        return 1.0;
    }
    if x.is_infinite() {
        return f64::MIN_POSITIVE;
    }
    let (a, h) = (0.5 * f64::from(degrees_of_freedom), 0.5 * x);
    let value = if h >= a { upper_sum(a, h, degrees_of_freedom) } else { 1.0 - lower_series(a, h) };
    value.clamp(f64::MIN_POSITIVE, 1.0)
}

fn upper_sum(a: f64, h: f64, degrees_of_freedom: u32) -> f64 {
    let beginning = if degrees_of_freedom % 2 == 1 { libm::erfc(h.sqrt()) } else { 0.0 };
    // The exponents of h run from 0 or 1/2 up to a − 1.
    let mut power = a - 1.0;
    if power < 0.0 {
        return beginning;
    }
    let last = libm::exp(power * libm::log(h) - h - libm::lgamma(power + 1.0));
    let (mut term, mut sum) = (1.0, 1.0);
    while power >= 1.0 && term > f64::EPSILON * sum {
        term *= power / h;
        sum += term;
        power -= 1.0;
    }
    beginning + last * sum
}

fn lower_series(a: f64, h: f64) -> f64 {
    let first = libm::exp(a * libm::log(h) - h - libm::lgamma(a + 1.0));
    let (mut term, mut sum, mut n) = (1.0, 1.0, 1.0);
    while term > f64::EPSILON * sum {
        term *= h / (a + n);
        sum += term;
        n += 1.0;
    }
    first * sum
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Survival functions are decreasing and continuous; the two forms must agree where one takes over from the other.
    #[test]
    fn the_two_forms_agree_where_they_meet() {
        for nu in [1u32, 2, 3, 4, 7, 10, 33, 100, 501, 1792] {
            let a = 0.5 * f64::from(nu);
            for h in [0.9 * a, a, 1.1 * a] {
                let (upper, lower) = (upper_sum(a, h, nu), 1.0 - lower_series(a, h));
                assert!((upper - lower).abs() < 1e-11, "{nu} {h}: {upper} {lower}");
            }
        }
    }

    #[test]
    fn one_and_two_degrees_of_freedom_are_elementary() {
        for x in [0.01f64, 1.0, 20.0, 300.0, 1400.0] {
            assert!((survival(x, 2) / (-0.5 * x).exp() - 1.0).abs() < 1e-12);
            assert!((survival(x, 1) / libm::erfc((0.5 * x).sqrt()) - 1.0).abs() < 1e-12);
        }
    }

    #[test]
    fn extremes_stay_in_range() {
        assert_eq!(survival(1e9, 3), f64::MIN_POSITIVE);
        assert_eq!(survival(f64::INFINITY, 3), f64::MIN_POSITIVE);
        assert_eq!(survival(0.0, 3), 1.0);
        assert_eq!(survival(-1.0, 3), 1.0);
        assert_eq!(survival(5.0, 0), 1.0);
    }

    /// Against a general-purpose library (statrs), where the value is not too small for it.
    #[test]
    fn agrees_with_a_library() {
        use statrs::distribution::{ChiSquared, ContinuousCDF};
        for nu in [1u32, 2, 3, 5, 8, 31, 64, 255] {
            let law = ChiSquared::new(f64::from(nu)).unwrap();
            for factor in [0.1, 0.5, 0.99, 1.01, 1.5, 3.0] {
                let x = factor * f64::from(nu);
                let (ours, theirs) = (survival(x, nu), law.sf(x));
                assert!((ours - theirs).abs() <= 1e-10 * theirs + 1e-13, "{nu} {x}: {ours} {theirs}");
            }
        }
    }
}
