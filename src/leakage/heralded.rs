//! One arm of a photon-pair source, given a click of a threshold herald in the other, for a carrier of vacuum and one photon (`d = 2`).
//!
//! With n pairs the herald of efficiency η clicks with probability `1 − (1−η)^n`, so `P(n | herald) ∝ P(n) (1 − (1−η)^n)`, and the weight
//! outside the carrier is `ε = P(n ≥ 2 | herald) = 1 − η P(1)/P(herald)`. For the two usual laws of mean pair number μ
//!
//! ```text
//! thermal, t = μ/(1+μ):   ε = 1 − (1−t)(1 − t(1−η)) = t [1 + (1−η)(1−t)],
//! Poissonian:             ε = 1 − η μ e^{−μ} / (1 − e^{−ημ}).
//! ```
//!
//! *Direction.* Both grow with μ and fall with η, so the upper limit of μ and the lower limit of η are used. Thermal:
//! `dε/dt = η + 2(1−η)(1−t) > 0` and `dε/dη = −t(1−t) ≤ 0`. Poissonian, with `x = ημ` and the one-photon weight `f = 1 − ε`:
//! `μ d(ln f)/dμ = 1 − μ − x/(e^x − 1) ≤ x/2 − μ < 0`, as `x/(e^x − 1) ≥ 1 − x/2`, and `η d(ln f)/dη = 1 − x/(e^x − 1) > 0`.
//! A lower η also raises the limit on μ that is inferred from herald clicks.
//!
//! *Dark counts* of the herald need not be excluded: they mix in pulses of the unconditional law, whose weight of two pairs or more is
//! smaller, because the herald prefers large n. Losses in the heralded arm only lower the weight, and are not counted on.
//!
//! *Without cancellation* the thermal formula is the sum of positive terms above, evaluated exactly; the Poissonian one is, for `μ ≤ 1`,
//! `e^{−μ} Σ_{n≥2} (μ^n/n!) (1 − (1−η)^n) / (1 − e^{−ημ})`, summed with a bound on the rest. (Both derived here.)
//!
//! The state is a mixture of pair numbers, so the bound holds on average only.

use num_rational::BigRational;
use num_traits::One;
use serde::{Deserialize, Serialize};

use super::{
    coherent::one_or_two_modes,
    estimate::{Calculator, Estimate, Input, check_efficiency},
    measured::Measured,
    photons::{Detector, Law, PhotonCounts, limit},
    rounding::{above_zero_up, exact_weight_up},
};
use crate::{exact::decimal, fault::Fault, scenario::LeakageReading};

/// One arm of a photon-pair source, heralded by a threshold detector in the other.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Heralded {
    /// Law of the number of pairs.
    pub pairs: PairLaw,
    /// Mean number of pairs per pulse.
    pub mean_pairs: Measured<HeraldCounts>,
    /// Lower limit of the probability that the herald detects a photon, in `(0, 1]`.
    pub herald_efficiency: f64,
    /// Brightest pulse over the faintest, less one.
    #[serde(default)]
    pub intensity_spread: f64,
}

#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum PairLaw {
    /// One pair of modes.
    Thermal,
    /// Very many pairs of modes.
    Poissonian,
}

/// Clicks of the herald.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct HeraldCounts {
    /// Pulses with a click of the herald.
    pub heralds: u64,
    pub pulses: u64,
    /// Probability that the limit is below the true value, in `[1e-100, 0.5]`.
    pub failure: f64,
}

impl Calculator for Heralded {
    fn estimate(&self, _: u32) -> Result<Estimate, Fault> {
        let efficiency = self.herald_efficiency;
        check_efficiency(efficiency, "/herald_efficiency")?;
        let law = match self.pairs {
            PairLaw::Thermal => Law::Geometric,
            PairLaw::Poissonian => Law::Poissonian,
        };
        // Pairs are counted by the herald as photons are by any threshold detector.
        let photons = match self.mean_pairs {
            Measured::Stated(mean) => Measured::Stated(mean),
            Measured::Counted(HeraldCounts { heralds, pulses, failure }) => {
                Measured::Counted(PhotonCounts { counts: heralds, pulses, efficiency, detector: Detector::Threshold, failure })
            }
        };
        let limit = limit(&photons, law, Some(self.intensity_spread), "mean_pairs").map_err(|fault| {
            let pointer = fault.pointer.replace("/mean_pairs/counts", "/mean_pairs/heralds");
            Fault { pointer, ..fault }
        })?;
        let leakage = match self.pairs {
            PairLaw::Thermal => thermal(limit.mean, efficiency),
            PairLaw::Poissonian => poissonian(limit.mean, efficiency),
        };
        let mut inputs = limit.inputs;
        inputs.push(Input::stated("herald efficiency", efficiency));
        let mut assumptions = limit.assumptions;
        let (law, modes) = match self.pairs {
            PairLaw::Thermal => ("thermal", "a single pair of modes"),
            PairLaw::Poissonian => ("Poisson", "very many pairs of modes"),
        };
        assumptions.push(format!("the number of pairs follows the {law} law of {modes}"));
        assumptions.push("the herald clicks with at least the stated efficiency for one photon, in every pulse".to_owned());
        assumptions.push(one_or_two_modes(2));
        if self.pairs == PairLaw::Poissonian {
            assumptions.push("the modes may differ from round to round, but not with the preparation".to_owned());
        }
        Ok(Estimate { leakage, levels: 2, holds: LeakageReading::OnAverage, inputs, assumptions })
    }
}

/// `t [1 + (1−η)(1−t)]` with `t = μ/(1+μ)`, for finite `μ ≥ 0` and η in `(0, 1]`: a weight, evaluated exactly and rounded up.
pub fn thermal(mean: f64, efficiency: f64) -> f64 {
    let one = BigRational::one();
    let mean = decimal(mean);
    let vacuum = &one / (&one + &mean);
    let t = &mean * &vacuum;
    exact_weight_up(&(t * (&one + (&one - decimal(efficiency)) * vacuum)))
}

/// `1 − η μ e^{−μ} / (1 − e^{−ημ})` for finite `μ ≥ 0` and η in `(0, 1]`: a weight, rounded up.
///
/// Exceeds the value by some tens of units in the last place; exactly 0 for `μ = 0`, where there are no heralds.
pub fn poissonian(mean: f64, efficiency: f64) -> f64 {
    if mean == 0.0 {
        return 0.0;
    }
    let x = efficiency * mean;
    if x < 1e-290 {
        // Too near the end of the floating-point range for the series; the value falls with η, and this is its limit for η → 0.
        return above_zero_up(-libm::expm1(-mean), 16.0);
    }
    let heralded = -libm::expm1(-x);
    if mean > 1.0 {
        // Here the one-photon weight is at most e^{−1}/(1 − e^{−1}) = 0.58. A relative error of x or μ enters the exponential multiplied by μ.
        let one = x * libm::exp(-mean) / heralded;
        let allowance = (4.0 * mean + 32.0) * f64::EPSILON;
        return above_zero_up(1.0 - one * (1.0 - allowance.min(1.0)), 4.0);
    }
    let missed = libm::log1p(-efficiency);
    // μ^{n−1}/n!, starting at n = 2.
    let (mut n, mut factor) = (2.0, 0.5 * mean);
    let mut sum = 0.0;
    loop {
        let term = factor * -libm::expm1(n * missed);
        sum += term;
        // (1 − (1−η)^{n+1}) / (1 − (1−η)^n) ≤ (n+1)/n, so that successive terms have a ratio of at most μ/n.
        let ratio = mean / n;
        if term <= 0.25 * f64::EPSILON * sum {
            sum += term * ratio / (1.0 - ratio);
            break;
        }
        n += 1.0;
        factor *= mean / n;
    }
    above_zero_up(libm::exp(-mean) * sum / (heralded / mean), 64.0)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::exact::round_up;
    use num_traits::Zero;

    /// `P(n ≥ 2 | herald)` by direct summation over the pair number in exact arithmetic, given the law up to a factor. The Poisson law needs
    /// no exponential: it cancels between numerator and denominator.
    fn direct(efficiency: f64, terms: u32, mut next: impl FnMut(u32) -> BigRational) -> BigRational {
        let miss = BigRational::one() - decimal(efficiency);
        let (mut missed, mut outside, mut all) = (BigRational::one(), BigRational::zero(), BigRational::zero());
        for n in 1..=terms {
            missed *= &miss;
            let joint = next(n) * (BigRational::one() - &missed);
            if n >= 2 {
                outside += &joint;
            }
            all += joint;
        }
        outside / all
    }

    #[test]
    fn equal_the_direct_sums_and_are_not_below_them() {
        for mean in [1e-9, 1e-6, 1e-3, 0.1, 0.5, 0.9, 1.1, 3.0] {
            for efficiency in [1e-6, 0.05, 0.3, 0.9, 1.0] {
                let exact_mean = decimal(mean);
                let t = &exact_mean / (BigRational::one() + &exact_mean);
                let mut power = BigRational::one();
                let terms = if mean < 0.01 { 12 } else { 150 };
                let geometric = direct(efficiency, terms, |_| {
                    power *= &t;
                    power.clone()
                });
                let mut term = BigRational::one();
                let poisson = direct(efficiency, terms.min(60), |n| {
                    term = &term * &exact_mean / BigRational::from_integer(n.into());
                    term.clone()
                });
                // The geometric sum is cut at 150 terms: at μ = 3 that leaves out about 1e-18.
                for (value, exact, slack) in [(thermal(mean, efficiency), geometric, 1e-16), (poissonian(mean, efficiency), poisson, 0.0)] {
                    assert!(decimal(value) + decimal(slack) >= exact, "{mean} {efficiency}: {value}");
                    assert!((value / round_up(&exact) - 1.0).abs() < 1e-12, "{mean} {efficiency}: {value} {}", round_up(&exact));
                }
            }
        }
    }

    #[test]
    fn grow_with_the_mean_and_fall_with_the_efficiency() {
        let grid = |i: i32| 10f64.powf(f64::from(i) * 0.1);
        for formula in [thermal, poissonian] {
            for i in -90..20 {
                for efficiency in [1e-3, 0.2, 0.7, 1.0] {
                    assert!(formula(grid(i), efficiency) < formula(grid(i + 1), efficiency) || formula(grid(i), efficiency) == 1.0);
                    assert!(formula(grid(i), efficiency) <= formula(grid(i), 0.9 * efficiency));
                }
            }
        }
    }

    /// A herald with dark counts clicks with probability `1 − (1−δ)(1−η)^n`; the weight is then not larger.
    #[test]
    fn dark_counts_of_the_herald_do_not_raise_the_weight() {
        for (mean, efficiency, dark) in [(0.1f64, 0.3f64, 0.01f64), (1.5, 0.8, 0.2), (0.01, 0.1, 0.001)] {
            let (mut outside, mut all) = ([0.0f64; 2], [0.0f64; 2]);
            let t = mean / (1.0 + mean);
            let mut law = [1.0 - t, (-mean).exp()];
            for n in 0..200 {
                for (i, p) in law.iter().enumerate() {
                    let joint = p * (1.0 - (1.0 - dark) * (1.0 - efficiency).powi(n));
                    all[i] += joint;
                    outside[i] += if n >= 2 { joint } else { 0.0 };
                }
                law = [law[0] * t, law[1] * mean / f64::from(n + 1)];
            }
            assert!(outside[0] / all[0] <= thermal(mean, efficiency));
            assert!(outside[1] / all[1] <= poissonian(mean, efficiency));
        }
    }

    #[test]
    fn extremes_stay_in_range() {
        for formula in [thermal, poissonian] {
            assert_eq!(formula(0.0, 0.5), 0.0);
            assert_eq!(formula(1e300, 0.5), 1.0);
            let tiny = formula(1e-300, 1e-12);
            assert!(tiny > 0.0 && tiny < 2.1e-300, "{tiny}");
            assert!(formula(0.5, f64::MIN_POSITIVE) < 1.0);
        }
    }

    /// Clicks miss further pairs of a pulse: the limit solves `P(herald) = p`, not `ημ = p`. Brighter pulses leak more.
    #[test]
    fn herald_clicks_are_those_of_a_threshold_detector() {
        let counts = HeraldCounts { heralds: 300, pulses: 1000, failure: 1e-6 };
        let p = crate::statistics::interval::upper_limit(300, 1000, 1e-6);
        for (pairs, mean) in [(PairLaw::Thermal, p / (1.0 - p) / 0.4), (PairLaw::Poissonian, -(-p).ln_1p() / 0.4)] {
            let document = Heralded { pairs, mean_pairs: Measured::Counted(counts), herald_efficiency: 0.4, intensity_spread: 0.0 };
            let estimate = document.estimate(2).unwrap();
            assert!((estimate.inputs[0].value / mean - 1.0).abs() < 1e-12);
            assert_eq!(estimate.inputs[0].failure, Some(1e-6));
            let unsteady = Heralded { intensity_spread: 0.1, ..document }.estimate(2).unwrap();
            assert!(unsteady.leakage > 1.02 * estimate.leakage);
        }
    }

    #[test]
    fn wrong_documents_are_refused_with_their_place() {
        let good = Heralded { pairs: PairLaw::Thermal, mean_pairs: Measured::Stated(0.1), herald_efficiency: 0.3, intensity_spread: 0.0 };
        let pointer = |document: Heralded| document.estimate(2).unwrap_err().pointer;
        assert_eq!(pointer(Heralded { herald_efficiency: 1.1, ..good }), "/herald_efficiency");
        assert_eq!(pointer(Heralded { herald_efficiency: 0.0, ..good }), "/herald_efficiency");
        assert_eq!(pointer(Heralded { mean_pairs: Measured::Stated(-0.1), ..good }), "/mean_pairs");
        let counts = HeraldCounts { heralds: 11, pulses: 10, failure: 0.1 };
        assert_eq!(pointer(Heralded { mean_pairs: Measured::Counted(counts), ..good }), "/mean_pairs/heralds");
    }
}
