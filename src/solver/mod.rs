//! A request to a numerical solver and what comes back: a candidate, never a proof.
//!
//! Two solvers stand behind it. `interior.rs` is made for the structure of programmes over moments and is several times faster; what it
//! does not solve well, and what has no solution, is left to the general one behind `clarabel.rs`.

mod clarabel;
mod dense;
mod interior;
mod lapack;
mod newton;
mod packing;
mod structure;

use crate::relaxation::program::Program;

/// Limits of one solve. Iterations bound the work, so that the answer does not depend on the speed of the machine;
/// the wall time is a safety stop only.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Limits {
    pub iterations: u32,
    pub seconds: f64,
}

impl Default for Limits {
    fn default() -> Self {
        Self { iterations: 100, seconds: 600.0 }
    }
}

/// How a solve ended, in the programme's own terms (primal = the programme as written in `relaxation/program.rs`).
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Status {
    /// Within the solver's tolerances.
    Solved,
    /// Within its reduced tolerances, or stopped early with usable iterates.
    Inaccurate,
    /// The solver believes that nothing satisfies the constraints.
    Infeasible,
    /// The solver believes that the objective has no upper bound.
    Unbounded,
    /// Nothing usable: a numerical breakdown, or stopped before any progress.
    Failed,
}

/// What a solver hands over. All numbers are approximate and none of them is trusted.
#[derive(Debug, Clone, PartialEq)]
pub struct Candidate {
    pub status: Status,
    pub iterations: u32,
    /// Values of the variables.
    pub values: Vec<f64>,
    /// `y` of the equalities and of the inequalities, signs as in `relaxation/program.rs`.
    pub equality_multipliers: Vec<f64>,
    pub inequality_multipliers: Vec<f64>,
    /// `Z` of each block: full symmetric matrices.
    pub block_multipliers: Vec<nalgebra::DMatrix<f64>>,
}

/// Solves one programme, up to rounding and within the limits. A programme that makes no sense (no variables, an index
/// out of range, a number that is not finite) or is too large comes back as [`Status::Failed`] without numbers.
///
/// For [`Status::Infeasible`] the multipliers are a certificate instead of a solution: they satisfy the equations of
/// the dual with `c = 0`, and `Σ_i y_i r_i < 0`. For [`Status::Unbounded`] the values are a direction in which the
/// objective grows for ever. The same programme and iteration limit give the same bits on the same machine.
///
/// ```
/// use bitassay::relaxation::program::{Block, Program, Row, Term};
/// use bitassay::solver::{Limits, Status, solve_generally};
///
/// // The largest v such that the matrix with rows (w, v) and (v, w) is positive semidefinite, where w = 3.
/// let term = |row, column, variable| Term { row, column, variable, coefficient: 1.0 };
/// let program = Program {
///     objective: vec![1.0, 0.0],
///     equalities: vec![Row { terms: vec![(1, 1.0)], right: 3.0 }],
///     inequalities: vec![],
///     blocks: vec![Block { side: 2, terms: vec![term(0, 0, 1), term(1, 0, 0), term(1, 1, 1)] }],
/// };
/// let candidate = solve_generally(&program, Limits::default());
/// assert_eq!(candidate.status, Status::Solved);
/// assert!((candidate.values[0] - 3.0).abs() < 1e-6);
/// ```
pub fn solve_generally(program: &Program, limits: Limits) -> Candidate {
    clarabel::solve(program, limits)
}

/// The same with the solver that is made for programmes over moments, several times faster; `None` where it has no useful answer: for one,
/// where there is no solution.
pub fn solve_structured(program: &Program, limits: Limits) -> Option<Candidate> {
    interior::solve(program, limits)
}

/// Numbers that look random and are the same in every run.
#[cfg(test)]
mod pseudorandom {
    /// SplitMix64.
    pub struct Numbers(u64);

    impl Numbers {
        pub fn new(seed: u64) -> Self {
            Self(seed)
        }

        /// Uniform on [−1, 1).
        pub fn symmetric(&mut self) -> f64 {
            self.0 = self.0.wrapping_add(0x9E37_79B9_7F4A_7C15);
            let mut bits = self.0;
            bits = (bits ^ (bits >> 30)).wrapping_mul(0xBF58_476D_1CE4_E5B9);
            bits = (bits ^ (bits >> 27)).wrapping_mul(0x94D0_49BB_1331_11EB);
            bits ^= bits >> 31;
            (bits >> 11) as f64 / (1_u64 << 52) as f64 - 1.0
        }
    }
}
