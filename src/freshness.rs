//! How much sharpness an operator trades for not having to wait for a solve.

use serde::{Deserialize, Serialize};

use crate::fault::Fault;

/// When batches are certified with kept witnesses, and when by a solve of their own. Only independent rounds can be certified with kept ones.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize, utoipa::ToSchema)]
#[serde(rename_all = "snake_case")]
pub enum Freshness {
    /// Every batch is solved.
    Always,
    /// A kept witness will do if a solve is estimated to give at most so many bits per target round more; from 0 to 1.
    AcceptLoss(f64),
}

impl Default for Freshness {
    /// A thousandth of a bit per target round: about what chords of a power entropy may give away, and well below what finite rounds cost. At
    /// 1e6 rounds per setting that is several hundredths.
    fn default() -> Self {
        Self::AcceptLoss(1e-3)
    }
}

impl Freshness {
    /// # Errors
    /// A loss that is not from 0 to 1.
    pub fn check(&self) -> Result<(), Fault> {
        match self {
            Self::AcceptLoss(bits) if !(0.0..=1.0).contains(bits) => {
                Err(Fault::new("/accept_loss", format!("an acceptable loss is from 0 to 1 bit per target round, is {bits}")))
            }
            Self::Always | Self::AcceptLoss(_) => Ok(()),
        }
    }

    /// The loss that is accepted, if kept witnesses may be used at all.
    pub fn acceptable_loss(self) -> Option<f64> {
        match self {
            Self::Always => None,
            Self::AcceptLoss(bits) => Some(bits),
        }
    }
}
