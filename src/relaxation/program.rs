//! A semidefinite programme in plain numbers, written so that any solver can be put behind it.
//!
//! ```text
//! maximise    c · v
//! subject to  a_i · v = r_i           equalities
//!             a_i · v ≤ r_i           inequalities
//!             Σ_k v_k A_k ⪰ 0         one for each block
//! ```
//!
//! Its dual, in the signs that the rest of the project uses:
//!
//! ```text
//! c_k = Σ_i y_i a_ik − Σ_blocks ⟨Z, A_k⟩,   y ≥ 0 for inequalities,   Z ⪰ 0,
//! ```
//!
//! so that `c · v ≤ Σ_i y_i r_i` for every feasible `v`.

/// A sparse linear form and its right-hand side.
#[derive(Debug, Clone, PartialEq)]
pub struct Row {
    /// `(variable, coefficient)`; a variable occurs at most once.
    pub terms: Vec<(usize, f64)>,
    pub right: f64,
}

/// One term of a symmetric matrix that is linear in the variables: `coefficient · v[variable]` at `(row, column)` and,
/// off the diagonal, at `(column, row)`.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Term {
    /// `row ≥ column`.
    pub row: usize,
    pub column: usize,
    pub variable: usize,
    pub coefficient: f64,
}

/// A matrix that has to be positive semidefinite. Terms at one place with different variables add up.
#[derive(Debug, Clone, PartialEq)]
pub struct Block {
    pub side: usize,
    pub terms: Vec<Term>,
}

/// The whole programme. Shapes: `objective` has one entry per variable.
#[derive(Debug, Clone, PartialEq)]
pub struct Program {
    pub objective: Vec<f64>,
    pub equalities: Vec<Row>,
    pub inequalities: Vec<Row>,
    pub blocks: Vec<Block>,
}
