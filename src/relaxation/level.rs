//! Monomial levels: named sets of products whose Gram matrix is relaxed.
//!
//! | level | monomials besides `R_x`, `V` | blocks for X = 4, Y = 2, B = 2, ε > 0 |
//! |---|---|---|
//! | `lean` | `V M`, `R M`, `N R` | 19 + 14 |
//! | `standard` | … and `R_x R_x'` (x ≠ x') | 25 + 20 |
//! | `sharp` | … and `R M_y M_y'` (y ≠ y') | 33 + 28 |
//!
//! Every set is closed under reversal: a product stands for itself and its adjoint.

use serde::{Deserialize, Serialize};

use super::word::{Algebra, Letter, Monomial};

/// A named set of monomials; each contains the ones before it.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(rename_all = "kebab-case")]
pub enum Level {
    Lean,
    Standard,
    Sharp,
}

impl Level {
    /// Coarsest first.
    pub const ALL: [Self; 3] = [Self::Lean, Self::Standard, Self::Sharp];

    /// The next coarser level, if there is one.
    pub fn coarser(self) -> Option<Self> {
        match self {
            Self::Lean => None,
            Self::Standard => Some(Self::Lean),
            Self::Sharp => Some(Self::Standard),
        }
    }

    /// One product of each pair `{u, u†}` of the level's set, in a fixed order.
    ///
    /// Products that vanish are left out: `N R_x` where the leakage of x is exactly zero.
    pub fn monomials(self, algebra: &Algebra) -> Vec<Monomial> {
        let geometry = algebra.geometry();
        let states: Vec<Letter> = (0..geometry.preparations as u8).map(Letter::State).collect();
        let outcomes: Vec<Letter> = (0..geometry.measurements as u8)
            .flat_map(|y| (0..geometry.outcomes as u8 - 1).map(move |b| Letter::Outcome { b, y }))
            .collect();
        let mut monomials: Vec<Monomial> = states.iter().map(|state| Monomial::new([*state])).collect();
        monomials.push(Monomial::new([Letter::Carrier]));
        monomials.extend(outcomes.iter().map(|outcome| Monomial::new([Letter::Carrier, *outcome])));
        for state in &states {
            monomials.extend(outcomes.iter().map(|outcome| Monomial::new([*state, *outcome])));
        }
        for (state, exact) in states.iter().zip(algebra.exact()) {
            if !exact {
                monomials.push(Monomial::new([Letter::Outside, *state]));
            }
        }
        if self >= Self::Standard {
            for (x, first) in states.iter().enumerate() {
                monomials.extend(states[x + 1..].iter().map(|second| Monomial::new([*first, *second])));
            }
        }
        if self >= Self::Sharp {
            let different = |one: &Letter, other: &Letter| matches!((one, other), (Letter::Outcome { y, .. }, Letter::Outcome { y: other, .. }) if y != other);
            for state in &states {
                for first in &outcomes {
                    let second = outcomes.iter().filter(|second| different(first, second));
                    monomials.extend(second.map(|second| Monomial::new([*state, *first, *second])));
                }
            }
        }
        monomials
    }
}

/// The level that is asked for.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Default, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(rename_all = "kebab-case")]
pub enum LevelChoice {
    /// The sharpest level within the cost budget.
    #[default]
    Auto,
    Lean,
    Standard,
    Sharp,
}
