//! Monomial levels.

use serde::{Deserialize, Serialize};

/// A named set of monomials; each contains the ones before it.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Level {
    Lean,
    Standard,
    Sharp,
}

/// The level that is asked for.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Default, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum LevelChoice {
    /// The sharpest level within the cost budget.
    #[default]
    Auto,
    Lean,
    Standard,
    Sharp,
}
