//! The parity split.
//!
//! Moments are real and do not change when a word is reversed, so the Gram matrix of a set that is closed under reversal is
//! block-diagonal in the combinations `u + u†` and `u − u†`. Both blocks have integer coefficients without the 1/√2.

use serde::{Deserialize, Serialize};

use super::word::{Algebra, Monomial, Polynomial, WordError};

/// Which combination a block is made of.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Parity {
    /// `u + u†`, also for `u = u†`.
    Even,
    /// `u − u†`.
    Odd,
}

impl Parity {
    pub fn sign(self) -> i64 {
        match self {
            Self::Even => 1,
            Self::Odd => -1,
        }
    }
}

/// The products whose combinations of one parity span a block.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Basis {
    pub parity: Parity,
    pub monomials: Vec<Monomial>,
}

/// Splits one product of each pair `{u, u†}` into the two bases. Products that are their own adjoint have no odd part; in
/// the flat algebra, where `V` is the identity, `V M` is one of them.
pub fn split(monomials: &[Monomial], algebra: &Algebra) -> [Basis; 2] {
    use super::word::Letter::Carrier;
    let is_own_adjoint = |monomial: &Monomial| {
        let strip = |m: &Monomial| m.letters().iter().filter(|l| !(algebra.is_flat() && **l == Carrier)).copied().collect::<Vec<_>>();
        strip(monomial) == strip(&monomial.reversed())
    };
    let odd = monomials.iter().filter(|monomial| !is_own_adjoint(monomial)).cloned().collect();
    [Basis { parity: Parity::Even, monomials: monomials.to_vec() }, Basis { parity: Parity::Odd, monomials: odd }]
}

/// Entry of the Gram matrix: `⟨(u ± u†)† (v ± v†)⟩` as an integer combination of moments.
///
/// # Errors
/// A product whose trace is not bounded.
pub fn gram(algebra: &Algebra, parity: Parity, u: &Monomial, v: &Monomial) -> Result<Polynomial, WordError> {
    let sign = parity.sign();
    let (u_adjoint, v_adjoint) = (u.reversed(), v.reversed());
    let mut sum = Polynomial::new();
    // (u ± u†)† = u† ± u
    for (left, right, factor) in [(&u_adjoint, v, 1), (&u_adjoint, &v_adjoint, sign), (u, v, sign), (u, &v_adjoint, 1)] {
        let product = [left.letters(), right.letters()].concat();
        for (word, coefficient) in algebra.trace(&product)? {
            *sum.entry(word).or_insert(0) += factor * coefficient;
        }
    }
    sum.retain(|_, coefficient| *coefficient != 0);
    Ok(sum)
}
