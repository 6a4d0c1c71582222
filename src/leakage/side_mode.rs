//! Weight in a side mode or a mismatched mode: another wavelength, polarisation, time bin or path, whose carrier is its vacuum.
//!
//! If an emission holds anything in the side mode with probability w, then `ε = w`. From counts w is the Clopper–Pearson upper limit of the
//! share of emissions that were found there.

use serde::{Deserialize, Serialize};

use super::{
    estimate::{Calculator, Estimate, Input, REPRESENTATIVE, check_among, check_failure, check_trials, check_weight},
    measured::Measured,
    vacuum::every_emission,
};
use crate::{fault::Fault, scenario::LeakageReading, statistics::interval};

/// A side mode.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct SideMode {
    /// Probability that an emission holds anything in the side mode.
    pub weight: Measured<WeightCounts>,
    /// What is claimed of the stated value or of the emissions that were counted.
    #[serde(default)]
    pub holds: LeakageReading,
}

/// How many of a number of trials ended outside.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct WeightCounts {
    /// Trials that ended outside.
    pub outside: u64,
    pub trials: u64,
    /// Probability that the limit is below the true value, in `[1e-100, 0.5]`.
    pub failure: f64,
}

impl WeightCounts {
    /// Clopper–Pearson upper limit of the probability of ending outside, rounded up.
    ///
    /// # Errors
    /// Values out of range; pointers are relative to the counts.
    pub fn upper_limit(&self) -> Result<f64, Fault> {
        check_trials(self.trials, "/trials")?;
        check_among(self.outside, self.trials, "/outside")?;
        check_failure(self.failure, "/failure")?;
        Ok(interval::upper_limit(self.outside, self.trials, self.failure))
    }
}

impl Calculator for SideMode {
    fn estimate(&self, _: u32) -> Result<Estimate, Fault> {
        let (leakage, input, mut assumptions) = match &self.weight {
            Measured::Stated(weight) => {
                check_weight(*weight, "/weight", "a weight")?;
                let assumption = "an emission holds anything in the side mode with at most the stated weight".to_owned();
                (*weight, Input::stated("weight", *weight), vec![assumption])
            }
            Measured::Counted(counts) => {
                let weight = counts.upper_limit().map_err(|fault| fault.under("/weight"))?;
                let assumption = "emissions in the side mode are noticed at least as often as others".to_owned();
                (weight, Input::upper_limit("weight", weight, counts.failure), vec![REPRESENTATIVE.to_owned(), assumption])
            }
        };
        assumptions.extend(every_emission(self.holds));
        Ok(Estimate { leakage, levels: 1, holds: self.holds, inputs: vec![input], assumptions })
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_weight_is_the_leakage() {
        let stated = SideMode { weight: Measured::Stated(2e-4), holds: LeakageReading::OnAverage };
        assert_eq!(stated.estimate(2).unwrap().leakage, 2e-4);
        let counts = WeightCounts { outside: 3, trials: 1_000_000, failure: 1e-6 };
        let counted = SideMode { weight: Measured::Counted(counts), holds: LeakageReading::OnAverage }.estimate(2).unwrap();
        assert_eq!(counted.leakage, interval::upper_limit(3, 1_000_000, 1e-6));
        assert!(counted.leakage > 3e-6);
    }

    #[test]
    fn wrong_documents_are_refused_with_their_place() {
        let pointer = |weight| SideMode { weight, holds: LeakageReading::OnAverage }.estimate(2).unwrap_err().pointer;
        assert_eq!(pointer(Measured::Stated(-1e-9)), "/weight");
        assert_eq!(pointer(Measured::Stated(1.5)), "/weight");
        let good = WeightCounts { outside: 3, trials: 10, failure: 0.1 };
        assert_eq!(pointer(Measured::Counted(WeightCounts { trials: 0, ..good })), "/weight/trials");
        assert_eq!(pointer(Measured::Counted(WeightCounts { outside: 11, ..good })), "/weight/outside");
        assert_eq!(pointer(Measured::Counted(WeightCounts { failure: 0.7, ..good })), "/weight/failure");
    }
}
