//! The entropy whose average over the hidden variable decides how many bits a block of rounds holds.
//!
//! `η_β(p) = (1 − Σ_b p_b^{1+β}) / β`, in nats, for a power `0 < β ≤ 1`. It is concave on the simplex, at most the Shannon entropy, and tends
//! to it as `β → 0`. Written as `Σ_b p_b · (−expm1(β ln p_b)) / β` it has no cancellation.

/// Bits after the binary point of a power: `β = power / 2³⁰`.
pub const POWER_BITS: u32 = 30;

/// Value of a power given in units of `2^-30`; exact.
pub fn power_value(power: u32) -> f64 {
    f64::from(power) / 2f64.powi(POWER_BITS as i32)
}

/// `η_β`, in nats, of probabilities that are each correct to one unit in the last place, rounded down. `power` is in units of `2^-30`
/// and not zero.
pub fn power_entropy_down(probabilities: &[f64], power: u32) -> f64 {
    let beta = power_value(power);
    let term = |p: f64| if p > 0.0 { p * -libm::expm1(beta * libm::log(p.min(1.0))) / beta } else { 0.0 };
    let sum: f64 = probabilities.iter().map(|p| term(*p)).sum();
    // The library's functions are good to one unit in the last place; near p = 1 a unit in p is one in the value.
    (sum * (1.0 - 256.0 * f64::EPSILON) - 32.0 * f64::EPSILON).max(0.0)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn it_tends_to_the_shannon_entropy_from_below() {
        let probabilities = [0.7, 0.2, 0.1];
        let shannon: f64 = probabilities.iter().map(|p: &f64| -p * p.ln()).sum();
        let values = [1 << 30, 1 << 25, 1 << 20, 1 << 10, 1].map(|power| power_entropy_down(&probabilities, power));
        assert!(values.windows(2).all(|pair| pair[0] < pair[1]), "{values:?}");
        assert!(values[4] < shannon && shannon - values[4] < 1e-8);
        // β = 1: 1 − Σ p².
        assert!((values[0] - 0.46).abs() < 1e-12 && values[0] < 0.46);
    }

    #[test]
    fn certain_outcomes_have_none() {
        assert_eq!(power_entropy_down(&[1.0, 0.0], 1 << 20), 0.0);
        assert!(power_entropy_down(&[1.0 - 1e-9, 1e-9], 1 << 10) > 1e-8);
    }

    /// At β = 1 it is `1 − Σ p²`, which is exact for binary fractions; at β = 1/2 it is `2 (1 − Σ p^{3/2})`, and squares have exact roots.
    #[test]
    fn it_is_rounded_down_by_next_to_nothing() {
        for (probabilities, power, exact) in [
            (vec![0.5, 0.5], 1 << 30, 0.5),
            (vec![0.25; 4], 1 << 30, 0.75),
            (vec![0.25; 4], 1 << 29, 1.0),
            (vec![0.5625, 0.25, 0.0625, 0.125], 1 << 29, 2.0 * (1.0 - 0.421_875 - 0.125 - 0.015_625 - 0.125 / 8f64.sqrt())),
        ] {
            let value = power_entropy_down(&probabilities, power);
            assert!(value < exact && value > exact - 1e-13, "{probabilities:?} {power}: {value} {exact}");
        }
    }
}
