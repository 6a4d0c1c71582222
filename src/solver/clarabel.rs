//! The adapter to Clarabel, an interior-point solver for conic programmes. No other file names it.
//!
//! The solver takes `min q · x` subject to `A x + s = b`, `s` in a product of cones, and returns `z` in the dual cones
//! with `Aᵀ z + q = 0`. A programme `max c · v` is put in that form by `q = −c` and, row by row,
//!
//! ```text
//! equality     a_i · v + s = r_i,             s = 0            z = y_i
//! inequality   a_i · v + s = r_i,             s ≥ 0            z = y_i ≥ 0
//! block       −packed(Σ_k v_k A_k) + s = 0,   s = packed(⪰ 0)  z = packed(Z), Z ⪰ 0
//! ```
//!
//! so that `Aᵀ z = c` reads `c_k = Σ_i y_i a_ik − Σ⟨Z, A_k⟩`, which is the dual of `relaxation/program.rs` sign by sign.

use std::panic::{AssertUnwindSafe, catch_unwind};

use clarabel::algebra::CscMatrix;
use clarabel::solver::{DefaultSettings, DefaultSolver, IPSolver, SolverStatus, SupportedConeT};

use super::{Candidate, Limits, Status, lapack, packing};
use crate::relaxation::program::{Program, Row};

/// Gap and feasibility at which the solver stops. Tighter than its default, because what is left of the residuals is
/// paid for in the certified bound.
const TOLERANCE: f64 = 1e-9;

/// The most numbers that the dense scalings of all blocks may take together, `Σ (side (side + 1) / 2)²`: 0.8 GB. Beyond
/// that a solve would end the process instead of failing.
const MOST_SCALING_ENTRIES: usize = 100_000_000;

/// Solves a programme; see [`super::solve`].
pub fn solve(program: &Program, limits: Limits) -> Candidate {
    lapack::keep_linked();
    let Some(form) = ConicForm::new(program) else { return failed(0) };
    if limits.seconds.is_nan() {
        return failed(0);
    }
    // The solver asserts here and there on what it takes for impossible; a service must outlive that.
    match catch_unwind(AssertUnwindSafe(|| form.solve(limits))) {
        Ok(Some(candidate)) => candidate,
        Ok(None) | Err(_) => failed(0),
    }
}

fn failed(iterations: u32) -> Candidate {
    Candidate {
        status: Status::Failed,
        iterations,
        values: vec![],
        equality_multipliers: vec![],
        inequality_multipliers: vec![],
        block_multipliers: vec![],
    }
}

/// A programme in the solver's form.
struct ConicForm {
    /// `q = −c`.
    cost: Vec<f64>,
    /// Entries of `A`: `(row, variable, coefficient)`. Repeated places add up.
    entries: Vec<(usize, usize, f64)>,
    /// `b`, one for each row.
    right: Vec<f64>,
    equalities: usize,
    inequalities: usize,
    /// Sides of the blocks.
    sides: Vec<usize>,
}

impl ConicForm {
    /// `None` for a programme that makes no sense: no variables, an index out of range, a number that is not finite, a
    /// term above the diagonal; or blocks too large to be solved.
    fn new(program: &Program) -> Option<Self> {
        if program.objective.is_empty() || !program.objective.iter().all(|c| c.is_finite()) {
            return None;
        }
        let mut form = Self {
            cost: program.objective.iter().map(|c| -c).collect(),
            entries: vec![],
            right: vec![],
            equalities: program.equalities.len(),
            inequalities: program.inequalities.len(),
            sides: program.blocks.iter().map(|block| block.side).collect(),
        };
        if form.scaling_entries()? > MOST_SCALING_ENTRIES {
            return None;
        }
        for row in program.equalities.iter().chain(&program.inequalities) {
            form.push_row(row)?;
        }
        for block in &program.blocks {
            let first = form.right.len();
            form.right.resize(first + packing::length(block.side)?, 0.0);
            for term in &block.terms {
                if term.column > term.row || term.row >= block.side {
                    return None;
                }
                let (place, coefficient) = packing::pack_term(term);
                form.push(first + place, term.variable, -coefficient)?;
            }
        }
        Some(form)
    }

    fn scaling_entries(&self) -> Option<usize> {
        self.sides.iter().try_fold(0_usize, |sum, &side| {
            let length = packing::length(side)?;
            sum.checked_add(length.checked_mul(length)?)
        })
    }

    fn push_row(&mut self, row: &Row) -> Option<()> {
        if !row.right.is_finite() {
            return None;
        }
        for &(variable, coefficient) in &row.terms {
            self.push(self.right.len(), variable, coefficient)?;
        }
        self.right.push(row.right);
        Some(())
    }

    fn push(&mut self, row: usize, variable: usize, coefficient: f64) -> Option<()> {
        if variable >= self.cost.len() || !coefficient.is_finite() {
            return None;
        }
        self.entries.push((row, variable, coefficient));
        Some(())
    }

    fn cones(&self) -> Vec<SupportedConeT<f64>> {
        let mut cones = vec![SupportedConeT::ZeroConeT(self.equalities), SupportedConeT::NonnegativeConeT(self.inequalities)];
        cones.extend(self.sides.iter().map(|&side| SupportedConeT::PSDTriangleConeT(side)));
        cones
    }

    /// `None` if the solver refuses the form.
    fn solve(&self, limits: Limits) -> Option<Candidate> {
        let variables = self.cost.len();
        let rows = self.entries.iter().map(|entry| entry.0).collect();
        let columns = self.entries.iter().map(|entry| entry.1).collect();
        let coefficients = self.entries.iter().map(|entry| entry.2).collect();
        let matrix = CscMatrix::new_from_triplets(self.right.len(), variables, rows, columns, coefficients);
        let quadratic = CscMatrix::zeros((variables, variables));
        let mut solver = DefaultSolver::new(&quadratic, &self.cost, &matrix, &self.right, &self.cones(), settings(limits)).ok()?;
        solver.solve();
        let solution = &solver.solution;
        Some(self.candidate(solution.status, solution.iterations, &solution.x, &solution.z))
    }

    /// Takes the solver's answer apart. Numbers that are not finite, or too few of them, leave nothing but the failure.
    fn candidate(&self, status: SolverStatus, iterations: u32, x: &[f64], z: &[f64]) -> Candidate {
        if !x.iter().chain(z).all(|number| number.is_finite()) {
            return failed(iterations);
        }
        let Some((equality_multipliers, rest)) = z.split_at_checked(self.equalities) else { return failed(iterations) };
        let Some((inequality_multipliers, mut rest)) = rest.split_at_checked(self.inequalities) else { return failed(iterations) };
        let mut block_multipliers = Vec::with_capacity(self.sides.len());
        for &side in &self.sides {
            let split = packing::length(side).and_then(|length| rest.split_at_checked(length));
            let Some((packed, after)) = split else { return failed(iterations) };
            let Some(matrix) = packing::unpack(packed, side) else { return failed(iterations) };
            block_multipliers.push(matrix);
            rest = after;
        }
        Candidate {
            status: self.status(status, iterations),
            iterations,
            values: x.to_vec(),
            equality_multipliers: equality_multipliers.to_vec(),
            inequality_multipliers: inequality_multipliers.to_vec(),
            block_multipliers,
        }
    }

    /// The status in the programme's terms, given that all numbers are finite. The solver's primal is the programme.
    fn status(&self, status: SolverStatus, iterations: u32) -> Status {
        match status {
            SolverStatus::Solved => Status::Solved,
            SolverStatus::AlmostSolved | SolverStatus::MaxIterations | SolverStatus::MaxTime | SolverStatus::InsufficientProgress => {
                // Before the first step the iterates are a starting point and say nothing.
                if iterations > 0 && !self.sides.is_empty() { Status::Inaccurate } else { Status::Failed }
            }
            SolverStatus::PrimalInfeasible | SolverStatus::AlmostPrimalInfeasible => Status::Infeasible,
            SolverStatus::DualInfeasible | SolverStatus::AlmostDualInfeasible => Status::Unbounded,
            SolverStatus::NumericalError | SolverStatus::CallbackTerminated | SolverStatus::Unsolved => Status::Failed,
        }
    }
}

fn settings(limits: Limits) -> DefaultSettings<f64> {
    DefaultSettings {
        max_iter: limits.iterations,
        time_limit: limits.seconds,
        verbose: false,
        tol_gap_abs: TOLERANCE,
        tol_gap_rel: TOLERANCE,
        tol_feas: TOLERANCE,
        // More threads are slower at our sizes, and the order of their sums changes the last bits.
        max_threads: 1,
        direct_solve_method: "faer".into(),
        // Far above the default: moment problems have no interior at the optimum, and the refinement steps remove what this adds.
        // Measured on noisy codes: what stationarity misses, summed over the words, falls from 1e-4 to below 1e-7.
        static_regularization_constant: 1e-6,
        // Rows and blocks have to come back as they went in, for the multipliers to fit the programme.
        presolve_enable: false,
        chordal_decomposition_enable: false,
        ..DefaultSettings::default()
    }
}
