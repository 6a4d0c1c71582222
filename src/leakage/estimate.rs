//! What a calculator answers, and the signature that all calculators share.

use serde::{Deserialize, Serialize};

use crate::{counts::MAX_ROUNDS, fault::Fault, scenario::LeakageReading};

/// Turns a contribution to a budget into an upper bound on its weight outside the carrier.
pub trait Calculator {
    /// The contribution's leakage, for a budget whose whole carrier has dimension `carrier_dimension`, at least 1.
    ///
    /// # Errors
    /// The first value that is impossible or out of its range; pointers are relative to the contribution.
    fn estimate(&self, carrier_dimension: u32) -> Result<Estimate, Fault>;
}

/// An upper bound on the weight outside the carrier of one contribution.
#[derive(Debug, Clone, PartialEq)]
pub struct Estimate {
    /// Weight in `[0, 1]`, rounded up.
    pub leakage: f64,
    /// Dimension of this contribution's own carrier.
    pub levels: u32,
    /// The strongest reading for which the bound holds.
    pub holds: LeakageReading,
    /// The figures that the formula was evaluated at.
    pub inputs: Vec<Input>,
    /// What the bound rests on, in words.
    pub assumptions: Vec<String>,
}

/// One figure that a formula was evaluated at.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Input {
    /// What it is, in words.
    pub quantity: String,
    /// Dimensionless. Limits are rounded outwards.
    pub value: f64,
    pub basis: Basis,
    /// Probability that the true value is beyond the limit; `null` for a stated value.
    pub failure: Option<f64>,
}

/// Where a figure comes from.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Basis {
    /// Stated by the poster.
    Stated,
    /// An exact upper confidence limit from counts.
    UpperLimit,
}

impl Input {
    pub fn stated(quantity: &str, value: f64) -> Self {
        Self { quantity: quantity.to_owned(), value, basis: Basis::Stated, failure: None }
    }

    pub fn upper_limit(quantity: &str, value: f64, failure: f64) -> Self {
        Self { quantity: quantity.to_owned(), value, basis: Basis::UpperLimit, failure: Some(failure) }
    }
}

/// Said of every limit from counts.
pub(super) const REPRESENTATIVE: &str =
    "the emissions that were counted are independent of each other and are representative of those the figure is used for";

pub(super) fn check_not_negative(value: f64, pointer: &str, what: &str) -> Result<(), Fault> {
    if value.is_finite() && value >= 0.0 { Ok(()) } else { Err(Fault::new(pointer, format!("{what} is not negative, is {value}"))) }
}

pub(super) fn check_weight(value: f64, pointer: &str, what: &str) -> Result<(), Fault> {
    if (0.0..=1.0).contains(&value) { Ok(()) } else { Err(Fault::new(pointer, format!("{what} is from 0 to 1, is {value}"))) }
}

pub(super) fn check_efficiency(value: f64, pointer: &str) -> Result<(), Fault> {
    if value > 0.0 && value <= 1.0 {
        Ok(())
    } else {
        Err(Fault::new(pointer, format!("an efficiency is above 0 and at most 1, is {value}")))
    }
}

pub(super) fn check_failure(value: f64, pointer: &str) -> Result<(), Fault> {
    if (1e-100..=0.5).contains(&value) {
        Ok(())
    } else {
        Err(Fault::new(pointer, format!("a failure probability is from 1e-100 to 0.5, is {value}")))
    }
}

/// Checks the number of trials that counts were taken in.
pub(super) fn check_trials(trials: u64, pointer: &str) -> Result<(), Fault> {
    if (1..=MAX_ROUNDS).contains(&trials) {
        Ok(())
    } else {
        Err(Fault::new(pointer, format!("must be from 1 to {MAX_ROUNDS}, is {trials}")))
    }
}

/// Checks a number of trials with some property.
pub(super) fn check_among(count: u64, trials: u64, pointer: &str) -> Result<(), Fault> {
    if count <= trials { Ok(()) } else { Err(Fault::new(pointer, format!("is {count}, more than the {trials} they are counted among"))) }
}
