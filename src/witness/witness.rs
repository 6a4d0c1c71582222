//! The witness document: exact integers that prove an affine bound for every behaviour and every leakage.
//!
//! Read with `2^m` (`m = multiplier_bits`) under the multipliers, `2^f` (`f = factor_bits`) under the factors and `4^f` under the
//! constants, a witness states, for every model of its geometry with behaviour `p` and leakage `ε`,
//!
//! ```text
//! Σ_e c_e  ≤  max_e (κ_e + Σ_x μ^e_x ε_x) + Σ_{x,y,b} ν_{xyb} p(b|x,y),      μ ≥ 0,
//! ```
//!
//! where e runs over the groups of the claim and `c_e` is what group e maximises. The proof is one polynomial identity per group:
//! `c_e` equals the right-hand side minus a sum of squares, up to a remainder that the constants pay for. The squares are the rows
//! of `Lᵀ` applied to the elements `u ± u†` of each basis: the multiplier of a moment matrix is `Z = L Lᵀ`, positive
//! semidefinite by construction, with `L` lower triangular.

use serde::{Deserialize, Deserializer, Serialize, Serializer, de};
use sha2::{Digest, Sha256};

use crate::{
    counts::Table,
    relaxation::{
        cells::Cut,
        level::Level,
        parity::Parity,
        word::{Algebra, Monomial},
    },
    scenario::{Geometry, LeakageReading, Setting},
};

/// The value of [`Witness::format`].
pub const FORMAT: &str = "bitassay witness 1";

/// What is bounded.
#[derive(Debug, Clone, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[serde(tag = "kind", rename_all = "kebab-case", deny_unknown_fields)]
pub enum Claim {
    /// The guessing probability of the target setting. One group per outcome, the adversary's guess; `c_e = ⟨R_x M_{e|y}⟩_e`.
    Guess { target: Setting },
    /// A linear score of the behaviour with integer coefficients `[x][y][b]`. One group.
    Score { coefficients: Table<i64> },
    /// The mean of `η_β` over the outcomes of the target setting, from below: `−Σ_λ q(λ) η_β` is what is bounded from above. One group per
    /// cell of a cover of the distributions of the target's outcome; `c_e = −ℓ_e`, an affine function that is nowhere above `η_β` in
    /// the cell. `power` is `β` in units of `2^-30`.
    Power { target: Setting, power: u32, cuts: Vec<Option<Cut>> },
    /// Nothing: `c = 0`, one group. A right-hand side below zero proves that no model has this behaviour and leakage.
    Contradiction,
}

impl Claim {
    /// Number of groups.
    pub fn groups(&self, geometry: Geometry) -> usize {
        match self {
            Self::Guess { .. } => geometry.outcomes,
            Self::Score { .. } | Self::Contradiction => 1,
            Self::Power { cuts, .. } => cuts.iter().filter(|cut| cut.is_none()).count(),
        }
    }
}

impl Serialize for Monomial {
    fn serialize<S: Serializer>(&self, serializer: S) -> Result<S::Ok, S::Error> {
        serializer.collect_str(self)
    }
}

impl<'de> Deserialize<'de> for Monomial {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        String::deserialize(deserializer)?.parse().map_err(de::Error::custom)
    }
}

/// The elements `u + u†` or `u − u†` of one block.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Span {
    pub parity: Parity,
    pub monomials: Vec<Monomial>,
}

/// An integer written as a decimal string.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord)]
pub struct Constant(pub i128);

impl Serialize for Constant {
    fn serialize<S: Serializer>(&self, serializer: S) -> Result<S::Ok, S::Error> {
        serializer.collect_str(&self.0)
    }
}

impl<'de> Deserialize<'de> for Constant {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        let text = String::deserialize(deserializer)?;
        let integer: i128 = text.parse().map_err(|_| de::Error::custom("an integer written as a string"))?;
        // One spelling per number, so that equal documents have equal digests.
        if integer.to_string() == text { Ok(Self(integer)) } else { Err(de::Error::custom("an integer in its shortest form")) }
    }
}

/// A self-contained document of exact integers; those written as numbers stay below 2⁵³ in size, so that any JSON reader keeps them.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Witness {
    pub format: String,
    pub geometry: Geometry,
    /// Preparations whose leakage is taken to be exactly zero, `[x]`. The bound holds only where it is.
    pub exact: Vec<bool>,
    /// The reading of the leakage that the bound needs. One proved on average holds for every emission too.
    pub leakage_holds: LeakageReading,
    pub claim: Claim,
    pub multiplier_bits: u32,
    /// `ν`, `[x][y][b]`.
    pub behaviour: Table<i64>,
    /// `μ ≥ 0`: one row `[x]` on average, one row per group for every emission.
    pub leakage: Vec<Vec<i64>>,
    /// `ℓ` of a power claim, `[cell][b]`, so that `ℓ(p) = Σ_b ℓ_b p_b`; empty for other claims.
    #[serde(default, skip_serializing_if = "Vec::is_empty")]
    pub chords: Vec<Vec<i64>>,
    pub factor_bits: u32,
    /// `κ · 4^f`, one per group, exactly what follows from the rest of the document. Written as decimal strings, since they exceed
    /// what every JSON reader keeps.
    pub constants: Vec<Constant>,
    /// The part of each constant that pays for words which did not cancel.
    pub remainders: Vec<Constant>,
    pub bases: Vec<Span>,
    /// `[group][basis][row]`, row i holding the entries `L_i0 … L_ii`.
    pub factors: Vec<Vec<Vec<Vec<i64>>>>,
}

impl Witness {
    /// The canonical bytes: compact JSON with the fields in the order of this type.
    pub fn canonical_json(&self) -> String {
        // Strings, integers and arrays only: serialisation cannot fail.
        serde_json::to_string(self).unwrap_or_default()
    }

    /// Whether the bases are those of a level.
    pub fn is_of_level(&self, level: Level) -> bool {
        let algebra = Algebra::new(self.geometry, &self.exact);
        let bases = level.bases(&algebra);
        bases.len() == self.bases.len()
            && bases.iter().zip(&self.bases).all(|(basis, span)| basis.parity == span.parity && basis.monomials == span.monomials)
    }

    /// `sha256:` and the digest of the canonical bytes, in lower-case hexadecimal.
    pub fn digest(&self) -> String {
        format!("sha256:{}", hex::encode(Sha256::digest(self.canonical_json())))
    }
}
