//! A request to a numerical solver and what comes back: a candidate, never a proof.

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

/// Solves one programme.
pub fn solve(program: &Program, limits: Limits) -> Candidate {
    let _ = (program, limits);
    Candidate {
        status: Status::Failed,
        iterations: 0,
        values: vec![],
        equality_multipliers: vec![],
        inequality_multipliers: vec![],
        block_multipliers: vec![],
    }
}
