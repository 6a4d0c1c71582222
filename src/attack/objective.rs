//! What an adversary maximises: a convex function of the distribution of the target's outcome.

use crate::entropy::power::power_value;

/// A convex function on the simplex, to be maximised on average over the hidden variable.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Objective {
    /// `max_b p_b`, whose mean is the guessing probability.
    Guess,
    /// `−η_β`, minus the power entropy in nats; `β` in units of `2^-30`.
    PowerEntropy { power: u32 },
}

/// Below this a probability is taken for it where the slope of `η_β` is computed, which is steep at zero.
const SMALL: f64 = 1e-9;

impl Objective {
    /// The value at a distribution.
    pub fn value(self, distribution: &[f64]) -> f64 {
        match self {
            Self::Guess => distribution.iter().fold(0.0, |most, p| p.max(most)),
            Self::PowerEntropy { power } => {
                let beta = power_value(power);
                distribution.iter().filter(|p| **p > 0.0).map(|p| p * (beta * p.min(1.0).ln()).exp_m1() / beta).sum()
            }
        }
    }

    /// The value at a certain outcome, which is the largest.
    pub fn largest(self) -> f64 {
        match self {
            Self::Guess => 1.0,
            Self::PowerEntropy { .. } => 0.0,
        }
    }

    /// A subgradient: `value(p) + slope·(r − p) ≤ value(r)`, up to a constant that is the same for all outcomes.
    pub fn slope(self, distribution: &[f64]) -> Vec<f64> {
        match self {
            Self::Guess => {
                let likeliest = likeliest(distribution);
                (0..distribution.len()).map(|b| f64::from(u8::from(b == likeliest))).collect()
            }
            Self::PowerEntropy { power } => {
                let beta = power_value(power);
                distribution.iter().map(|p| (1.0 + beta) * (beta * p.clamp(SMALL, 1.0).ln()).exp_m1() / beta).collect()
            }
        }
    }
}

/// The first of the outcomes with the largest probability.
pub fn likeliest(distribution: &[f64]) -> usize {
    let most = distribution.iter().fold(f64::NEG_INFINITY, |most, p| p.max(most));
    distribution.iter().position(|p| *p == most).unwrap_or(0)
}
