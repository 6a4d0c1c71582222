//! The moment matrices of one geometry and level: every entry as a combination of numbered moments.

use std::collections::HashMap;

use super::{
    level::Level,
    parity::{Basis, gram},
    word::{Algebra, Letter, Polynomial, Word, WordError},
};

/// One entry, `row ≥ column`.
#[derive(Debug, Clone, PartialEq)]
pub struct Entry {
    pub row: usize,
    pub column: usize,
    /// `(moment, coefficient)`; empty for an entry that is identically zero.
    pub terms: Vec<(usize, i64)>,
}

/// Symbolic moment matrices, one block per parity, and the table of the moments they are made of.
#[derive(Debug, Clone)]
pub struct Moments {
    algebra: Algebra,
    bases: Vec<Basis>,
    blocks: Vec<Vec<Entry>>,
    words: Vec<Word>,
    numbers: HashMap<Word, usize>,
}

impl Moments {
    /// # Errors
    /// A product whose trace is not bounded; the named levels have none.
    pub fn new(algebra: Algebra, level: Level) -> Result<Self, WordError> {
        let bases = level.bases(&algebra);
        let mut moments = Self { algebra, bases, blocks: Vec::new(), words: Vec::new(), numbers: HashMap::new() };
        for basis in moments.bases.clone() {
            let mut entries = Vec::new();
            for (row, u) in basis.monomials.iter().enumerate() {
                for (column, v) in basis.monomials[..=row].iter().enumerate() {
                    let polynomial = gram(&moments.algebra, basis.parity, u, v)?;
                    entries.push(Entry { row, column, terms: moments.number_all(polynomial) });
                }
            }
            moments.blocks.push(entries);
        }
        Ok(moments)
    }

    /// The numbered moments of a product of letters.
    ///
    /// # Errors
    /// A product whose trace is not bounded.
    pub fn trace(&mut self, letters: &[Letter]) -> Result<Vec<(usize, i64)>, WordError> {
        let polynomial = self.algebra.trace(letters)?;
        Ok(self.number_all(polynomial))
    }

    fn number_all(&mut self, polynomial: Polynomial) -> Vec<(usize, i64)> {
        polynomial.into_iter().map(|(word, coefficient)| (self.number(word), coefficient)).collect()
    }

    fn number(&mut self, word: Word) -> usize {
        if let Some(number) = self.numbers.get(&word) {
            return *number;
        }
        self.words.push(word.clone());
        self.numbers.insert(word, self.words.len() - 1);
        self.words.len() - 1
    }

    pub fn algebra(&self) -> &Algebra {
        &self.algebra
    }

    pub fn bases(&self) -> &[Basis] {
        &self.bases
    }

    /// Entries of each block, in the order of the bases; the full lower triangle, row by row.
    pub fn blocks(&self) -> &[Vec<Entry>] {
        &self.blocks
    }

    pub fn words(&self) -> &[Word] {
        &self.words
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::scenario::Geometry;

    fn sides(preparations: usize, measurements: usize, outcomes: usize, exact: bool, level: Level) -> Vec<usize> {
        let geometry = Geometry { preparations, measurements, outcomes, carrier_dimension: 2 };
        let algebra = Algebra::new(geometry, &vec![exact; preparations]);
        Moments::new(algebra, level).unwrap().bases().iter().map(|basis| basis.monomials.len()).collect()
    }

    /// The sizes that the table in `level.rs` states.
    #[test]
    fn blocks_have_the_documented_sizes() {
        assert_eq!(sides(4, 2, 2, false, Level::Sparse), [11, 4, 6, 5, 6, 5, 6, 5, 6, 5]);
        assert_eq!(sides(4, 2, 2, false, Level::Lean), [19, 14]);
        assert_eq!(sides(4, 2, 2, false, Level::Standard), [25, 20]);
        assert_eq!(sides(4, 2, 2, false, Level::Sharp), [33, 28]);
        assert_eq!(sides(4, 2, 2, false, Level::Keen), [59, 54]);
        assert_eq!(sides(4, 2, 2, true, Level::Standard), [21, 14]);
        assert_eq!(sides(8, 3, 2, true, Level::Lean), [36, 24]);
    }

    /// No block has a row that is identically zero, which would be a redundant constraint.
    #[test]
    fn every_diagonal_entry_holds_a_moment() {
        for exact in [false, true] {
            for (outcomes, level) in [(2, Level::Keen), (3, Level::Keen), (2, Level::Sparse), (3, Level::Sparse)] {
                let geometry = Geometry { preparations: 3, measurements: 2, outcomes, carrier_dimension: 2 };
                let moments = Moments::new(Algebra::new(geometry, &[exact; 3]), level).unwrap();
                for entry in moments.blocks().iter().flatten().filter(|entry| entry.row == entry.column) {
                    assert!(!entry.terms.is_empty());
                }
            }
        }
    }
}
