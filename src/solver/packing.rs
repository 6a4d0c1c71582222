//! The packed form of a symmetric matrix: its upper triangle, column by column, with the off-diagonal entries times √2.
//!
//! ```text
//! packed(S) = (S_00, √2 S_01, S_11, √2 S_02, √2 S_12, S_22, …)
//! ```
//!
//! The √2 makes the packing keep inner products, `packed(S) · packed(T) = ⟨S, T⟩ = Σ_rc S_rc T_rc`, so that dual
//! variables of packed constraints unpack to the matrices of the dual programme without any further factor.

use std::f64::consts::{FRAC_1_SQRT_2, SQRT_2};

use nalgebra::DMatrix;

use crate::relaxation::program::Term;

/// Length of the packed form of a matrix of this side: `side (side + 1) / 2`. `None` if that overflows.
pub fn length(side: usize) -> Option<usize> {
    Some(side.checked_mul(side.checked_add(1)?)? / 2)
}

/// Place of the entry `(row, column)` of the lower triangle, `row ≥ column`, in the packed form. By symmetry it is
/// the entry `(column, row)` of the upper triangle, that is number `column` of packed column `row`.
pub fn place(row: usize, column: usize) -> usize {
    row * (row + 1) / 2 + column
}

/// Where a term goes and what it contributes there: `(place, packed coefficient)`.
pub fn pack_term(term: &Term) -> (usize, f64) {
    let factor = if term.row == term.column { 1.0 } else { SQRT_2 };
    (place(term.row, term.column), factor * term.coefficient)
}

/// The full symmetric `side × side` matrix whose packed form is given; `None` if the length does not fit the side.
pub fn unpack(packed: &[f64], side: usize) -> Option<DMatrix<f64>> {
    if length(side) != Some(packed.len()) {
        return None;
    }
    Some(DMatrix::from_fn(side, side, |row, column| {
        if row == column { packed[place(row, row)] } else { FRAC_1_SQRT_2 * packed[place(row.max(column), row.min(column))] }
    }))
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::relaxation::program::Block;

    /// Packs a block at given values of the variables, the long way round.
    fn pack(block: &Block, values: &[f64]) -> Vec<f64> {
        let mut packed = vec![0.0; length(block.side).unwrap()];
        for term in &block.terms {
            let (place, coefficient) = pack_term(term);
            packed[place] += coefficient * values[term.variable];
        }
        packed
    }

    /// A block with one variable for each entry of the lower triangle, and that many values.
    fn full(side: usize, shift: f64) -> (Block, Vec<f64>) {
        let mut terms = vec![];
        for row in 0..side {
            for column in 0..=row {
                terms.push(Term { row, column, variable: terms.len(), coefficient: 1.0 });
            }
        }
        let values = (0..terms.len()).map(|k| (k as f64 * 0.7 + shift).sin()).collect();
        (Block { side, terms }, values)
    }

    #[test]
    fn order_is_the_upper_triangle_by_columns() {
        let (block, _) = full(3, 0.0);
        let packed = pack(&block, &[1.0, 2.0, 3.0, 4.0, 5.0, 6.0]);
        // Entries 00, 10, 11, 20, 21, 22 carry 1 … 6.
        assert_eq!(packed, [1.0, 2.0 * SQRT_2, 3.0, 4.0 * SQRT_2, 5.0 * SQRT_2, 6.0]);
    }

    #[test]
    fn round_trip() {
        for side in 0..8 {
            let (block, values) = full(side, 0.1);
            let matrix = unpack(&pack(&block, &values), side).unwrap();
            assert_eq!(matrix.shape(), (side, side));
            for term in &block.terms {
                let entry = values[term.variable];
                assert!((matrix[(term.row, term.column)] - entry).abs() < 1e-15);
                assert_eq!(matrix[(term.row, term.column)], matrix[(term.column, term.row)]);
            }
        }
    }

    #[test]
    fn keeps_inner_products() {
        for side in 1..8 {
            let (block, left) = full(side, 0.3);
            let (_, right) = full(side, 2.9);
            let (left, right) = (pack(&block, &left), pack(&block, &right));
            let packed: f64 = left.iter().zip(&right).map(|(l, r)| l * r).sum();
            let full = unpack(&left, side).unwrap().dot(&unpack(&right, side).unwrap());
            assert!((packed - full).abs() < 1e-13, "{packed} {full}");
        }
    }

    #[test]
    fn terms_with_different_variables_add_up() {
        let terms =
            vec![Term { row: 1, column: 0, variable: 0, coefficient: 2.0 }, Term { row: 1, column: 0, variable: 1, coefficient: -3.0 }];
        let matrix = unpack(&pack(&Block { side: 2, terms }, &[5.0, 1.0]), 2).unwrap();
        assert!((matrix[(0, 1)] - 7.0).abs() < 1e-14);
        assert_eq!(matrix[(0, 0)], 0.0);
    }

    #[test]
    fn refuses_lengths_that_do_not_fit() {
        assert_eq!(unpack(&[1.0, 2.0], 2), None);
        assert_eq!(unpack(&[], usize::MAX), None);
        assert_eq!(length(usize::MAX), None);
    }
}
