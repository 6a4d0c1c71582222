//! Words of projectors under the trace, and the rules that make two of them the same moment.
//!
//! Letters: `R_x` (state of preparation x, rank-one projector), `M_{b|y}` with `b < B−1` (projectors, orthogonal for equal
//! y), `V` (projector on the carrier, rank d) and `N = 1 − V`. A word stands for the real part of its trace, so it may be
//! rotated and reversed. Rules:
//!
//! - projectors are idempotent, `M_{b|y} M_{b'|y} = 0` for `b ≠ b'`, and `VN = NV = 0`;
//! - in a word that holds a state, `V` is written `1 − N`; in one that holds none, `N` is written `1 − V`;
//! - a word with neither a state nor a `V` has no finite trace and is an error;
//! - where the leakage of preparation x is exactly zero, `N R_x = R_x N = 0`;
//! - if that holds for every preparation and `B = 2`, then extremal measurements are projective on the carrier itself,
//!   and `V` acts as the identity and `N` as zero (the *flat* algebra). For `B ≥ 3` this is false: `R M N M'` need not vanish.

use std::{collections::BTreeMap, fmt, str::FromStr};

use crate::scenario::Geometry;

/// One projector. The order is that of the canonical form.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub enum Letter {
    /// `R_x`
    State(u8),
    /// `M_{b|y}`
    Outcome { b: u8, y: u8 },
    /// `V`
    Carrier,
    /// `N`
    Outside,
}

impl fmt::Display for Letter {
    fn fmt(&self, formatter: &mut fmt::Formatter) -> fmt::Result {
        match self {
            Self::State(x) => write!(formatter, "R{x}"),
            Self::Outcome { b, y } => write!(formatter, "M{b}|{y}"),
            Self::Carrier => formatter.write_str("V"),
            Self::Outside => formatter.write_str("N"),
        }
    }
}

/// What is wrong with a word.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
pub enum WordError {
    #[error("\"{0}\" is not a letter: letters are R<x>, M<b>|<y>, V and N")]
    Letter(String),
    #[error("the word \"{0}\" holds neither a state nor the carrier: its trace is not bounded")]
    Unbounded(String),
    #[error("the letter {0} does not exist in this geometry")]
    Range(Letter),
}

impl FromStr for Letter {
    type Err = WordError;

    fn from_str(text: &str) -> Result<Self, WordError> {
        let wrong = || WordError::Letter(text.to_owned());
        let number = |digits: &str| {
            let plain = !digits.is_empty() && digits.bytes().all(|c| c.is_ascii_digit()) && (digits == "0" || !digits.starts_with('0'));
            if plain { digits.parse::<u8>().map_err(|_| wrong()) } else { Err(wrong()) }
        };
        match text {
            "V" => return Ok(Self::Carrier),
            "N" => return Ok(Self::Outside),
            _ => {}
        }
        if let Some(x) = text.strip_prefix('R') {
            return Ok(Self::State(number(x)?));
        }
        let (b, y) = text.strip_prefix('M').and_then(|rest| rest.split_once('|')).ok_or_else(wrong)?;
        Ok(Self::Outcome { b: number(b)?, y: number(y)? })
    }
}

/// A product of letters before any rule was applied; written with spaces, as in `R0 M0|1`.
#[derive(Debug, Clone, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub struct Monomial(Vec<Letter>);

impl Monomial {
    pub fn new(letters: impl Into<Vec<Letter>>) -> Self {
        Self(letters.into())
    }

    pub fn letters(&self) -> &[Letter] {
        &self.0
    }

    /// The adjoint: the letters in reverse order.
    pub fn reversed(&self) -> Self {
        Self(self.0.iter().rev().copied().collect())
    }
}

impl fmt::Display for Monomial {
    fn fmt(&self, formatter: &mut fmt::Formatter) -> fmt::Result {
        for (i, letter) in self.0.iter().enumerate() {
            write!(formatter, "{}{letter}", if i == 0 { "" } else { " " })?;
        }
        Ok(())
    }
}

impl FromStr for Monomial {
    type Err = WordError;

    fn from_str(text: &str) -> Result<Self, WordError> {
        text.split(' ').map(Letter::from_str).collect::<Result<Vec<_>, _>>().map(Self)
    }
}

/// A moment: a reduced word in canonical form, the smallest of its rotations and of those of its reversal.
#[derive(Debug, Clone, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub struct Word(Vec<Letter>);

impl Word {
    pub fn letters(&self) -> &[Letter] {
        &self.0
    }

    /// Whether it holds a state. Then `|⟨w⟩| ≤ q`, with `q = ⟨R_x⟩` the weight of the group; otherwise `|⟨w⟩| ≤ ⟨V⟩ = d q`.
    pub fn holds_state(&self) -> bool {
        self.0.iter().any(|letter| matches!(letter, Letter::State(_)))
    }

    fn canonical(letters: Vec<Letter>) -> Self {
        let n = letters.len();
        let rotations = |cycle: &[Letter]| {
            let doubled = [cycle, cycle].concat();
            (0..n).map(|i| doubled[i..i + n].to_vec()).min()
        };
        let forward = rotations(&letters);
        let backward = rotations(&letters.iter().rev().copied().collect::<Vec<_>>());
        Self(forward.into_iter().chain(backward).min().unwrap_or(letters))
    }
}

impl fmt::Display for Word {
    fn fmt(&self, formatter: &mut fmt::Formatter) -> fmt::Result {
        Monomial(self.0.clone()).fmt(formatter)
    }
}

/// An integer combination of moments.
pub type Polynomial = BTreeMap<Word, i64>;

/// The rules of one scenario.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Algebra {
    geometry: Geometry,
    exact: Vec<bool>,
}

impl Algebra {
    /// `exact[x]` says that the leakage of preparation x is exactly zero; one entry per preparation (missing ones count as
    /// leaking).
    pub fn new(geometry: Geometry, exact: &[bool]) -> Self {
        let exact = (0..geometry.preparations).map(|x| exact.get(x).copied().unwrap_or(false)).collect();
        Self { geometry, exact }
    }

    pub fn geometry(&self) -> Geometry {
        self.geometry
    }

    pub fn exact(&self) -> &[bool] {
        &self.exact
    }

    /// Whether `V` acts as the identity.
    pub fn is_flat(&self) -> bool {
        self.geometry.outcomes == 2 && self.exact.iter().all(|exact| *exact)
    }

    /// # Errors
    /// The first letter that names a preparation, measurement or outcome which does not exist (or the last outcome, which is
    /// not a letter).
    pub fn check_letters(&self, monomial: &Monomial) -> Result<(), WordError> {
        let Geometry { preparations, measurements, outcomes, .. } = self.geometry;
        for letter in &monomial.0 {
            let exists = match letter {
                Letter::State(x) => usize::from(*x) < preparations,
                Letter::Outcome { b, y } => usize::from(*b) + 1 < outcomes && usize::from(*y) < measurements,
                Letter::Carrier | Letter::Outside => true,
            };
            if !exists {
                return Err(WordError::Range(*letter));
            }
        }
        Ok(())
    }

    /// The moment `Re tr(w)` of a product of letters, as an integer combination of canonical words.
    ///
    /// # Errors
    /// [`WordError::Unbounded`] for a product that holds neither a state nor the carrier.
    pub fn trace(&self, letters: &[Letter]) -> Result<Polynomial, WordError> {
        let mut polynomial = Polynomial::new();
        self.accumulate(letters.to_vec(), 1, &mut polynomial)?;
        polynomial.retain(|_, coefficient| *coefficient != 0);
        Ok(polynomial)
    }

    fn accumulate(&self, letters: Vec<Letter>, coefficient: i64, into: &mut Polynomial) -> Result<(), WordError> {
        let holds_state = letters.iter().any(|letter| matches!(letter, Letter::State(_)));
        if !holds_state && !letters.contains(&Letter::Carrier) {
            return Err(WordError::Unbounded(Monomial(letters).to_string()));
        }
        if self.is_flat() {
            if letters.contains(&Letter::Outside) {
                return Ok(());
            }
            let inner = letters.into_iter().filter(|letter| *letter != Letter::Carrier).collect();
            if let Some(reduced) = self.reduce(inner) {
                let mut word = Word::canonical(reduced);
                if !holds_state {
                    word.0.insert(0, Letter::Carrier);
                }
                *into.entry(word).or_insert(0) += coefficient;
            }
            return Ok(());
        }
        // V = 1 − N next to a state, N = 1 − V otherwise.
        let (rewritten, complement) = if holds_state { (Letter::Carrier, Letter::Outside) } else { (Letter::Outside, Letter::Carrier) };
        if let Some(i) = letters.iter().position(|letter| *letter == rewritten) {
            let mut without = letters.clone();
            without.remove(i);
            let mut swapped = letters;
            swapped[i] = complement;
            self.accumulate(without, coefficient, into)?;
            return self.accumulate(swapped, -coefficient, into);
        }
        if let Some(reduced) = self.reduce(letters) {
            *into.entry(Word::canonical(reduced)).or_insert(0) += coefficient;
        }
        Ok(())
    }

    /// Applies idempotence and orthogonality around the cycle; `None` is zero.
    fn reduce(&self, mut letters: Vec<Letter>) -> Option<Vec<Letter>> {
        'again: while letters.len() > 1 {
            for i in 0..letters.len() {
                let (left, right) = (letters[i], letters[(i + 1) % letters.len()]);
                if left == right {
                    letters.remove(i);
                    continue 'again;
                }
                if self.annihilate(left, right) {
                    return None;
                }
            }
            break;
        }
        Some(letters)
    }

    fn annihilate(&self, left: Letter, right: Letter) -> bool {
        match (left, right) {
            (Letter::Outcome { b, y }, Letter::Outcome { b: other, y: same }) => y == same && b != other,
            (Letter::Carrier, Letter::Outside) | (Letter::Outside, Letter::Carrier) => true,
            (Letter::State(x), Letter::Outside) | (Letter::Outside, Letter::State(x)) => {
                self.exact.get(usize::from(x)).copied().unwrap_or(false)
            }
            _ => false,
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn algebra(outcomes: usize, exact: &[bool]) -> Algebra {
        let geometry = Geometry { preparations: exact.len(), measurements: 2, outcomes, carrier_dimension: 2 };
        Algebra::new(geometry, exact)
    }

    fn trace(algebra: &Algebra, text: &str) -> String {
        let monomial: Monomial = text.parse().unwrap();
        let terms = algebra.trace(monomial.letters()).unwrap();
        terms.iter().map(|(word, c)| format!("{c:+} [{word}]")).collect::<Vec<_>>().join(" ")
    }

    #[test]
    fn projectors_are_idempotent_around_the_cycle() {
        let leaking = algebra(2, &[false, false]);
        assert_eq!(trace(&leaking, "M0|1 R0 R0 M0|1"), "+1 [R0 M0|1]");
        assert_eq!(trace(&leaking, "N R0 N"), "+1 [R0 N]");
    }

    #[test]
    fn rotations_and_reversals_are_one_moment() {
        let leaking = algebra(2, &[false, false]);
        let one = trace(&leaking, "R0 M0|0 R1 M0|1");
        for other in ["M0|0 R1 M0|1 R0", "M0|1 R1 M0|0 R0", "R1 M0|0 R0 M0|1"] {
            assert_eq!(trace(&leaking, other), one);
        }
        assert_ne!(trace(&leaking, "R0 M0|1 R1 M0|1"), one);
    }

    #[test]
    fn outcomes_of_one_measurement_are_orthogonal() {
        let leaking = algebra(3, &[false]);
        assert_eq!(trace(&leaking, "R0 M0|0 M1|0"), "");
        assert_eq!(trace(&leaking, "M1|0 R0 M0|0"), "");
        assert_ne!(trace(&leaking, "R0 M0|0 M1|1"), "");
    }

    #[test]
    fn the_carrier_is_written_as_one_minus_outside_next_to_a_state() {
        let leaking = algebra(2, &[false]);
        assert_eq!(trace(&leaking, "V R0"), "+1 [R0] -1 [R0 N]");
        assert_eq!(trace(&leaking, "M0|0 V N R0"), "");
        assert_eq!(trace(&leaking, "V M0|0 V M0|1"), "+1 [M0|0 V M0|1 V]");
        assert_eq!(trace(&leaking, "V M0|0 N M0|0"), "+1 [M0|0 V] -1 [M0|0 V M0|0 V]");
    }

    #[test]
    fn zero_leakage_makes_outside_vanish_next_to_the_state_only() {
        let mixed = algebra(3, &[true, false]);
        assert_eq!(trace(&mixed, "N R0"), "");
        assert_eq!(trace(&mixed, "N R1"), "+1 [R1 N]");
        assert_eq!(trace(&mixed, "V R0"), "+1 [R0]");
        // With three outcomes the dilated measurement may leave the carrier: this word stays.
        assert_eq!(trace(&algebra(3, &[true, true]), "R0 M0|0 N M0|1"), "+1 [R0 M0|0 N M0|1]");
    }

    #[test]
    fn two_outcomes_and_zero_leakage_make_the_carrier_the_identity() {
        let flat = algebra(2, &[true, true]);
        assert!(flat.is_flat());
        assert_eq!(trace(&flat, "R0 M0|0 N M0|1"), "");
        assert_eq!(trace(&flat, "V M0|0 V M0|1"), "+1 [V M0|0 M0|1]");
        assert_eq!(trace(&flat, "R0 V M0|0"), "+1 [R0 M0|0]");
        assert_eq!(trace(&flat, "V V"), "+1 [V]");
    }

    #[test]
    fn words_without_a_finite_trace_are_errors() {
        for one in [algebra(2, &[true]), algebra(2, &[false])] {
            for text in ["M0|0", "N", "M0|0 N"] {
                let monomial: Monomial = text.parse().unwrap();
                assert!(matches!(one.trace(monomial.letters()), Err(WordError::Unbounded(_))), "{text}");
            }
        }
    }

    #[test]
    fn letters_have_one_spelling() {
        for text in ["R0 M0|1 V N", "R31", "M6|7"] {
            assert_eq!(text.parse::<Monomial>().unwrap().to_string(), text);
        }
        for text in ["", "R", "R00", "R+1", "M0", "M|", "M0|01", "r0", "R0  V", " R0", "R256"] {
            assert!(text.parse::<Monomial>().is_err(), "{text:?}");
        }
        assert!(algebra(2, &[false]).check_letters(&"M1|0".parse().unwrap()).is_err());
    }
}
