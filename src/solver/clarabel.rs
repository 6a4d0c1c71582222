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

/// Relative gap and feasibility at which the solver stops. Tighter than its default, because what is left of the
/// residuals is paid for in the certified bound. At 1e-11 rounding stops it first in about half of the cases.
const TOLERANCE: f64 = 1e-10;

/// What the solver adds to the diagonal of its linear systems before it factorises them, and takes back by iterative
/// refinement. Its default of 1e-8 is too little for moment matrices, which often have no interior at the optimum: on noisy
/// codes what stationarity misses, summed over the words, stalls at 1e-4, with this value below 1e-7. Ten times more costs
/// a digit again.
const REGULARISATION: f64 = 1e-6;

/// The most numbers that the dense scalings of all blocks may take together, `Σ (side (side + 1) / 2)²`: 0.8 GB, and
/// the factors of the linear system take more than that again. Beyond it a solve could end the process for lack of
/// memory instead of failing. One block may have a side of 140, or fifty of them a side of 52.
const MOST_SCALING_ENTRIES: usize = 100_000_000;

/// Solves a programme; see [`super::solve_generally`].
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
        static_regularization_constant: REGULARISATION,
        iterative_refinement_max_iter: 50,
        iterative_refinement_stop_ratio: 1.5,
        direct_solve_method: "faer".into(),
        // Rows and blocks have to come back as they went in, for the multipliers to fit the programme.
        presolve_enable: false,
        chordal_decomposition_enable: false,
        ..DefaultSettings::default()
    }
}

#[cfg(test)]
mod tests {
    use nalgebra::DMatrix;

    use super::*;
    use crate::relaxation::program::{Block, Term};
    use crate::solver::pseudorandom::Numbers;

    fn solved(program: &Program) -> Candidate {
        super::solve(program, Limits::default())
    }

    fn term(row: usize, column: usize, variable: usize, coefficient: f64) -> Term {
        Term { row, column, variable, coefficient }
    }

    /// A block at given values of the variables.
    fn at(block: &Block, values: &[f64]) -> DMatrix<f64> {
        let mut matrix = DMatrix::zeros(block.side, block.side);
        for term in &block.terms {
            matrix[(term.row, term.column)] += term.coefficient * values[term.variable];
            if term.row != term.column {
                matrix[(term.column, term.row)] += term.coefficient * values[term.variable];
            }
        }
        matrix
    }

    /// `Σ_i y_i a_ik − Σ⟨Z, A_k⟩` for every `k`, straight from the documentation of the programme.
    fn dual_objective(program: &Program, candidate: &Candidate) -> Vec<f64> {
        let mut sum = vec![0.0; program.objective.len()];
        let rows = program.equalities.iter().zip(&candidate.equality_multipliers);
        for (row, y) in rows.chain(program.inequalities.iter().zip(&candidate.inequality_multipliers)) {
            for &(variable, coefficient) in &row.terms {
                sum[variable] += y * coefficient;
            }
        }
        for (block, z) in program.blocks.iter().zip(&candidate.block_multipliers) {
            for term in &block.terms {
                let places = if term.row == term.column { 1.0 } else { 2.0 };
                sum[term.variable] -= places * term.coefficient * z[(term.row, term.column)];
            }
        }
        sum
    }

    /// `Σ_i y_i r_i`.
    fn bound(program: &Program, candidate: &Candidate) -> f64 {
        let equalities = program.equalities.iter().zip(&candidate.equality_multipliers);
        let inequalities = program.inequalities.iter().zip(&candidate.inequality_multipliers);
        equalities.chain(inequalities).map(|(row, y)| row.right * y).sum()
    }

    fn least_eigenvalue(matrix: &DMatrix<f64>) -> f64 {
        if matrix.is_empty() { 0.0 } else { matrix.symmetric_eigenvalues().min() }
    }

    /// Both sides feasible and the bound attained, all within the tolerance.
    fn assert_optimal(program: &Program, candidate: &Candidate, tolerance: f64) {
        assert_eq!(candidate.status, Status::Solved);
        let values = &candidate.values;
        assert_eq!(values.len(), program.objective.len());
        assert_eq!(candidate.equality_multipliers.len(), program.equalities.len());
        assert_eq!(candidate.inequality_multipliers.len(), program.inequalities.len());
        assert_eq!(candidate.block_multipliers.len(), program.blocks.len());
        let left = |row: &Row| row.terms.iter().map(|&(variable, coefficient)| coefficient * values[variable]).sum::<f64>();
        for row in &program.equalities {
            assert!((left(row) - row.right).abs() < tolerance);
        }
        for row in &program.inequalities {
            assert!(left(row) - row.right < tolerance);
        }
        assert!(candidate.inequality_multipliers.iter().all(|&y| y > -tolerance));
        for (block, z) in program.blocks.iter().zip(&candidate.block_multipliers) {
            assert_eq!(z.shape(), (block.side, block.side));
            assert_eq!(z, &z.transpose());
            assert!(least_eigenvalue(&at(block, values)) > -tolerance);
            assert!(least_eigenvalue(z) > -tolerance);
        }
        for (sum, c) in dual_objective(program, candidate).iter().zip(&program.objective) {
            assert!((sum - c).abs() < tolerance, "dual equation off by {:e}", sum - c);
        }
        let objective: f64 = program.objective.iter().zip(values).map(|(c, v)| c * v).sum();
        assert!((objective - bound(program, candidate)).abs() < tolerance * (1.0 + objective.abs()));
    }

    /// The largest eigenvalue of `M` as `max −v_0` subject to `v_0 I − v_1 M ⪰ 0` and `v_1 = 1`.
    fn largest_eigenvalue(matrix: &DMatrix<f64>) -> Program {
        let mut terms = vec![];
        for row in 0..matrix.nrows() {
            terms.push(term(row, row, 0, 1.0));
            for column in 0..=row {
                terms.push(term(row, column, 1, -matrix[(row, column)]));
            }
        }
        Program {
            objective: vec![-1.0, 0.0],
            equalities: vec![Row { terms: vec![(1, 1.0)], right: 1.0 }],
            inequalities: vec![],
            blocks: vec![Block { side: matrix.nrows(), terms }],
        }
    }

    fn random_symmetric(side: usize, numbers: &mut Numbers) -> DMatrix<f64> {
        let matrix = DMatrix::from_fn(side, side, |_, _| numbers.symmetric());
        (&matrix + matrix.transpose()) * 0.5
    }

    #[test]
    fn largest_eigenvalues() {
        let mut numbers = Numbers::new(11);
        for side in [1, 2, 3, 4, 5, 10, 20, 30] {
            let matrix = random_symmetric(side, &mut numbers);
            let program = largest_eigenvalue(&matrix);
            let candidate = solved(&program);
            assert_optimal(&program, &candidate, 1e-7);
            let expected = matrix.symmetric_eigenvalues().max();
            assert!((candidate.values[0] - expected).abs() < 1e-7);
            assert!((bound(&program, &candidate) + expected).abs() < 1e-7);
            // The multiplier is the projector on the eigenvector.
            assert!((candidate.block_multipliers[0].trace() - 1.0).abs() < 1e-7);
            assert!((candidate.block_multipliers[0].dot(&matrix) - expected).abs() < 1e-7);
        }
    }

    /// A programme with everything in it that is strictly feasible on both sides by construction: `v = v°` satisfies
    /// the inequalities and blocks strictly, and `c` is a combination of rows and blocks with positive multipliers.
    fn mixed(variables: usize, equalities: usize, inequalities: usize, sides: &[usize], seed: u64) -> Program {
        let mut numbers = Numbers::new(seed);
        let mut inside: Vec<f64> = (0..variables).map(|_| numbers.symmetric()).collect();
        inside[0] = 1.0;
        let row = |slack: f64, numbers: &mut Numbers| {
            let terms: Vec<(usize, f64)> = (0..variables).map(|variable| (variable, numbers.symmetric())).collect();
            let left: f64 = terms.iter().map(|&(variable, coefficient)| coefficient * inside[variable]).sum();
            Row { terms, right: left + slack }
        };
        // The first variable is the constant of the blocks, as in a moment matrix.
        let mut all = vec![Row { terms: vec![(0, 1.0)], right: 1.0 }];
        all.extend((1..equalities).map(|_| row(0.0, &mut numbers)));
        let inequalities: Vec<Row> = (0..inequalities).map(|_| row(0.5, &mut numbers)).collect();
        let blocks: Vec<Block> = sides
            .iter()
            .map(|&side| {
                let mut block = Block { side, terms: vec![] };
                for row in 0..side {
                    for column in 0..=row {
                        for _ in 0..2 {
                            let variable = ((numbers.symmetric() + 1.0) / 2.0 * variables as f64) as usize;
                            block.terms.push(term(row, column, variable, numbers.symmetric()));
                        }
                    }
                }
                let shift = 0.5 - least_eigenvalue(&at(&block, &inside));
                block.terms.extend((0..side).map(|row| term(row, row, 0, shift)));
                block
            })
            .collect();
        let mut program = Program { objective: vec![0.0; variables], equalities: all, inequalities, blocks };
        let multipliers = Candidate {
            equality_multipliers: program.equalities.iter().map(|_| numbers.symmetric()).collect(),
            inequality_multipliers: program.inequalities.iter().map(|_| 1.5 + numbers.symmetric()).collect(),
            block_multipliers: sides
                .iter()
                .map(|&side| {
                    let matrix = random_symmetric(side, &mut numbers);
                    &matrix * &matrix + DMatrix::identity(side, side) * 0.5
                })
                .collect(),
            ..failed(0)
        };
        program.objective = dual_objective(&program, &multipliers);
        program
    }

    #[test]
    fn mixed_programmes() {
        for seed in 0..4 {
            let program = mixed(30, 4, 6, &[1, 2, 5, 20], seed);
            assert_optimal(&program, &solved(&program), 1e-7);
        }
        // Every kind of constraint may be missing; a block may be of side 0 or come between blocks of side 1.
        for (equalities, inequalities, sides) in
            [(1, 0, vec![4]), (3, 2, vec![]), (2, 3, vec![1, 1]), (2, 0, vec![5, 1, 0, 1, 4, 3]), (1, 5, vec![0])]
        {
            let program = mixed(3, equalities, inequalities, &sides, 5);
            assert_optimal(&program, &solved(&program), 1e-7);
        }
    }

    /// No feasible point makes the blocks regular, one equality is there twice, and the bound is still good.
    #[test]
    fn blocks_without_an_interior() {
        for (variables, side, null, seed) in [(10, 6, 2, 1), (40, 12, 3, 2), (80, 20, 4, 3)] {
            let regular = mixed(variables, 3, 3, &[side - null, side - null], seed);
            let mut program = regular.clone();
            program.equalities.push(program.equalities[1].clone());
            // `V A Vᵀ ⪰ 0` says the same as `A ⪰ 0` if `V` has full column rank.
            let mut numbers = Numbers::new(seed);
            let v = DMatrix::from_fn(side, side - null, |_, _| numbers.symmetric());
            for block in &mut program.blocks {
                let mut terms = vec![];
                for variable in 0..variables {
                    let unit: Vec<f64> = (0..variables).map(|k| f64::from(u8::from(k == variable))).collect();
                    let matrix = &v * at(block, &unit) * v.transpose();
                    terms.extend(
                        (0..side)
                            .flat_map(|row| (0..=row).map(move |column| (row, column)))
                            .map(|(row, column)| term(row, column, variable, matrix[(row, column)])),
                    );
                }
                *block = Block { side, terms };
            }
            let candidate = solved(&program);
            assert!(matches!(candidate.status, Status::Solved | Status::Inaccurate));
            let size = program.objective.iter().fold(1.0_f64, |size, c| size.max(c.abs()));
            // Rounding ends these solves early, so the multipliers are good to a digit less than those of regular programmes.
            for (sum, c) in dual_objective(&program, &candidate).iter().zip(&program.objective) {
                assert!((sum - c).abs() < 1e-7 * size, "dual equation off by {:e}", sum - c);
            }
            let expected = bound(&regular, &solved(&regular));
            assert!((bound(&program, &candidate) - expected).abs() < 1e-8 * expected.abs());
        }
    }

    #[test]
    fn infeasible_programmes_come_with_a_certificate() {
        // v_0 = 1, and a block with the diagonal (v_0, −v_0 − v_1), where v_1 ≥ 0.
        let program = Program {
            objective: vec![1.0, 1.0],
            equalities: vec![Row { terms: vec![(0, 1.0)], right: 1.0 }],
            inequalities: vec![Row { terms: vec![(1, -1.0)], right: 0.0 }],
            blocks: vec![Block { side: 2, terms: vec![term(0, 0, 0, 1.0), term(1, 1, 0, -1.0), term(1, 1, 1, -1.0)] }],
        };
        let candidate = solved(&program);
        assert_eq!(candidate.status, Status::Infeasible);
        let bound = bound(&program, &candidate);
        assert!(bound < 0.0);
        assert!(dual_objective(&program, &candidate).iter().all(|sum| (sum / bound).abs() < 1e-7));
        assert!(candidate.inequality_multipliers[0] >= 0.0);
        assert!(least_eigenvalue(&candidate.block_multipliers[0]) > bound * 1e-7);
    }

    #[test]
    fn unbounded_programmes_come_with_a_direction() {
        let program = Program {
            objective: vec![0.0, 1.0],
            equalities: vec![Row { terms: vec![(0, 1.0)], right: 1.0 }],
            inequalities: vec![],
            blocks: vec![Block { side: 2, terms: vec![term(0, 0, 0, 1.0), term(1, 1, 1, 1.0)] }],
        };
        let candidate = solved(&program);
        assert_eq!(candidate.status, Status::Unbounded);
        assert!(candidate.values[1] > 0.0);
        assert!((candidate.values[0] / candidate.values[1]).abs() < 1e-7);
    }

    #[test]
    fn two_solves_give_the_same_bits() {
        for program in [mixed(30, 4, 6, &[1, 2, 5, 20], 7), mixed(60, 3, 0, &[25, 20, 25, 20], 8)] {
            let (one, two) = (solved(&program), solved(&program));
            // Bits, not values: −0 and 0 would compare equal.
            let bits = |candidate: &Candidate| {
                let blocks = candidate.block_multipliers.iter().flat_map(|z| z.iter());
                let rows = candidate.equality_multipliers.iter().chain(&candidate.inequality_multipliers);
                candidate.values.iter().chain(rows).chain(blocks).map(|number| number.to_bits()).collect::<Vec<_>>()
            };
            assert_eq!(one, two);
            assert_eq!(bits(&one), bits(&two));
        }
    }

    #[test]
    fn stopping_early_is_not_solving() {
        let program = mixed(30, 4, 6, &[1, 2, 5, 20], 9);
        let stopped = super::solve(&program, Limits { iterations: 3, ..Limits::default() });
        assert_eq!((stopped.status, stopped.iterations), (Status::Inaccurate, 3));
        assert_eq!(stopped.block_multipliers.len(), 4);
        let unstarted = super::solve(&program, Limits { iterations: 0, ..Limits::default() });
        assert_eq!((unstarted.status, unstarted.iterations), (Status::Failed, 0));
        for seconds in [0.0, -1.0, f64::NAN] {
            let late = super::solve(&program, Limits { seconds, ..Limits::default() });
            assert_eq!(late.status, Status::Failed);
        }
        // Without blocks there is nothing a check could repair.
        let linear = mixed(5, 2, 9, &[], 10);
        let stopped = super::solve(&linear, Limits { iterations: 2, ..Limits::default() });
        assert_eq!(stopped.status, Status::Failed);
    }

    #[test]
    fn programmes_that_make_no_sense_fail() {
        let sound = largest_eigenvalue(&DMatrix::identity(4, 4));
        let mut broken: Vec<Program> = vec![];
        let mut spoil = |change: fn(&mut Program)| {
            let mut program = sound.clone();
            change(&mut program);
            broken.push(program);
        };
        spoil(|program| program.objective.clear());
        spoil(|program| program.objective[0] = f64::NAN);
        spoil(|program| program.equalities[0].right = f64::INFINITY);
        spoil(|program| program.equalities[0].terms[0].0 = 2);
        spoil(|program| program.equalities[0].terms[0].1 = f64::NAN);
        spoil(|program| program.inequalities.push(Row { terms: vec![(usize::MAX, 1.0)], right: 0.0 }));
        spoil(|program| program.blocks[0].terms[0].variable = 2);
        spoil(|program| program.blocks[0].terms[0].coefficient = f64::NEG_INFINITY);
        spoil(|program| program.blocks[0].terms[0].row = 4);
        spoil(|program| program.blocks[0].terms[0].column = 1);
        spoil(|program| program.blocks[0].side = 0);
        spoil(|program| program.blocks[0].side = 1000);
        spoil(|program| program.blocks[0].side = usize::MAX);
        for program in broken {
            assert_eq!(solved(&program), failed(0));
        }
    }

    #[test]
    fn degenerate_programmes_do_not_panic() {
        let empty = Program { objective: vec![1.0], equalities: vec![], inequalities: vec![], blocks: vec![] };
        let mut programs = vec![empty.clone()];
        for side in [0, 1, 2, 4, 6] {
            let block = Block { side, terms: vec![] };
            programs.push(Program { blocks: vec![block.clone()], ..empty.clone() });
            programs.push(Program { objective: vec![0.0], blocks: vec![block], ..empty.clone() });
        }
        let nothing = Row { terms: vec![], right: 1.0 };
        programs.push(Program { equalities: vec![nothing.clone()], ..empty.clone() });
        programs.push(Program { inequalities: vec![nothing], ..empty.clone() });
        // Numbers at the ends of the range.
        for scale in [1e-300, 1e300] {
            let mut program = largest_eigenvalue(&DMatrix::from_fn(5, 5, |row, column| (row + column) as f64 * scale));
            programs.push(program.clone());
            program.equalities[0].right = scale;
            programs.push(program);
        }
        for program in programs {
            let candidate = solved(&program);
            let numbers = candidate.values.iter().chain(&candidate.equality_multipliers);
            assert!(numbers.chain(candidate.block_multipliers.iter().flat_map(|z| z.iter())).all(|number| number.is_finite()));
        }
    }
}
