//! A primal-dual interior-point method made for programmes over moments: the variables fall into groups that share no block, and few rows
//! tie the groups together.
//!
//! A general solver keeps one dense scaling of `side (side + 1) / 2` rows for each block in its linear system. Here the blocks are
//! eliminated first ([`super::newton`]), which leaves one dense matrix per group, of as many rows as the group has moments, and a small one
//! for the ties: five to ten times less work. What comes out is a candidate like any other. Where it is not good, there is none, and
//! the general solver is asked.
//!
//! With slacks `S_k = F_k(v)` and `s = r − I v` the central path is `Z_k S_k = μ 1`, `u s = μ`. The step is the one of Helmberg, Rendl,
//! Vanderbei and Wolkowicz (SIAM J. Optim. 6, 342 (1996)), `ΔZ = μ S⁻¹ − Z − sym(Z ΔS S⁻¹)`, from a start that need not be feasible, with
//! the predictor and corrector of Mehrotra (SIAM J. Optim. 2, 575 (1992)).

use std::time::Instant;

use nalgebra::DMatrix;

use super::{
    Candidate, Limits, Status,
    dense::{Cholesky, symmetric_part},
    newton::{System, Weights},
    structure::Structure,
};
use crate::relaxation::program::{Program, Row};

/// The solver stops where neither a residual, nor the sum of what complementarity leaves, nor what residuals cost exceeds this.
const TOLERANCE: f64 = 1e-9;
/// Less than this counts as solved.
const SOLVED: f64 = 2e-6;
/// More than this is no candidate.
const USEFUL: f64 = 1e-2;
/// Scale of the first iterates.
const START: f64 = 1.0;
/// Iterations without progress after which it gives up, and the shortest step that is one.
const MOST_STALLED: u32 = 4;
/// Progress is a factor of this in a measure.
const PROGRESS: f64 = 0.9;
const SHORTEST_STEP: f64 = 1e-6;
/// The most entries that the matrices of all groups may have together: 0.4 GB, and a few times that with their factors.
const MOST_ENTRIES: usize = 50_000_000;

/// Solves a programme of the structure described above; `None` where it has another, is too large, or the iterates do not get within
/// [`USEFUL`] of a solution: for one, where there is none.
pub fn solve(program: &Program, limits: Limits) -> Option<Candidate> {
    let structure = Structure::new(program)?;
    let sizes = structure.components.iter().map(|component| component.variables.len());
    let entries = sizes.fold(0usize, |sum, size| sum.saturating_add(size.saturating_mul(size)));
    if entries > MOST_ENTRIES {
        return None;
    }
    Iteration::new(program, &structure).run(limits)
}

/// The iterates.
#[derive(Clone)]
struct Point {
    v: Vec<f64>,
    y: Vec<f64>,
    s: Vec<f64>,
    u: Vec<f64>,
    slack: Vec<DMatrix<f64>>,
    z: Vec<DMatrix<f64>>,
}

/// A direction, in the same shape.
type Step = Point;

/// What is missing at a point.
struct Residuals {
    equalities: Vec<f64>,
    inequalities: Vec<f64>,
    blocks: Vec<DMatrix<f64>>,
    stationarity: Vec<f64>,
}

impl Residuals {
    fn largest(&self) -> f64 {
        let blocks = self.blocks.iter().map(largest_entry).fold(0.0, f64::max);
        largest(&self.equalities).max(largest(&self.inequalities)).max(blocks).max(largest(&self.stationarity))
    }
}

struct Iteration<'a> {
    program: &'a Program,
    structure: &'a Structure,
    point: Point,
    /// Rows of the complementarity: sides of the blocks and the inequalities.
    degree: f64,
}

impl<'a> Iteration<'a> {
    fn new(program: &'a Program, structure: &'a Structure) -> Self {
        let identity = |side: usize| DMatrix::identity(side, side) * START;
        let blocks: Vec<DMatrix<f64>> = program.blocks.iter().map(|block| identity(block.side)).collect();
        let inequalities = program.inequalities.len();
        let point = Point {
            v: vec![0.0; program.objective.len()],
            y: vec![0.0; program.equalities.len()],
            s: vec![START; inequalities],
            u: vec![START; inequalities],
            slack: blocks.clone(),
            z: blocks,
        };
        let degree = (program.blocks.iter().map(|block| block.side).sum::<usize>() + inequalities) as f64;
        Self { program, structure, point, degree }
    }

    fn run(mut self, limits: Limits) -> Option<Candidate> {
        let mut best: Option<(f64, Point)> = None;
        let mut iterations = 0;
        let mut stalled = 0;
        let mut least = [f64::INFINITY; 3];
        let start = Instant::now();
        loop {
            let residuals = self.residuals();
            let infeasible = residuals.largest();
            let complementarity = self.gap() * self.degree;
            let missing = infeasible.max(complementarity).max(self.proved_too_much(&residuals));
            if best.as_ref().is_none_or(|(least, _)| missing < *least) {
                best = Some((missing, self.point.clone()));
            }
            // What is missing may grow for a while where multipliers grow faster than residuals fall.
            let measures = [missing, infeasible, complementarity];
            if measures.iter().zip(&least).any(|(measure, least)| *measure < PROGRESS * least) {
                stalled = 0;
            } else {
                stalled += 1;
            }
            least.iter_mut().zip(measures).for_each(|(least, measure)| *least = least.min(measure));
            if missing <= TOLERANCE {
                break;
            }
            // Going on cannot help where complementarity is no longer what is missing.
            let hopeless = stalled > MOST_STALLED || complementarity < 0.01 * infeasible && complementarity < 0.1 * SOLVED;
            let late = limits.seconds.is_nan() || start.elapsed().as_secs_f64() >= limits.seconds;
            if hopeless || late || iterations >= limits.iterations {
                break;
            }
            let Some(length) = self.advance(&residuals) else { break };
            iterations += 1;
            if length < SHORTEST_STEP {
                break;
            }
        }
        let (missing, point) = best.filter(|(missing, _)| iterations > 0 && *missing <= USEFUL)?;
        let status = if missing <= SOLVED { Status::Solved } else { Status::Inaccurate };
        Some(candidate(point, status, iterations))
    }

    /// The mean of what complementarity leaves.
    fn gap(&self) -> f64 {
        let Point { s, u, slack, z, .. } = &self.point;
        (inner_all(slack, z) + dot(s, u)) / self.degree
    }

    /// By how much the multipliers miss the optimum because the variables miss their constraints, at most: residuals times multipliers. Where the
    /// constraints have no interior, multipliers grow without bound, and small residuals are no comfort.
    fn proved_too_much(&self, residuals: &Residuals) -> f64 {
        let Point { y, u, z, .. } = &self.point;
        let weighted = |multipliers: &[f64], residuals: &[f64]| multipliers.iter().zip(residuals).map(|(m, r)| (m * r).abs()).sum::<f64>();
        let blocks = z.iter().zip(&residuals.blocks).map(|(z, residual)| weighted(z.as_slice(), residual.as_slice())).sum::<f64>();
        weighted(y, &residuals.equalities) + weighted(u, &residuals.inequalities) + blocks
    }

    fn residuals(&self) -> Residuals {
        let Point { v, y, s, u, slack, z } = &self.point;
        let equalities = self.program.equalities.iter().map(|row| row.right - at(row, v)).collect();
        let inequalities = self.program.inequalities.iter().zip(s).map(|(row, s)| row.right - at(row, v) - s).collect();
        let mut blocks: Vec<DMatrix<f64>> = slack.iter().map(|s| -s).collect();
        let mut stationarity = self.program.objective.clone();
        let rows = self.program.equalities.iter().zip(y).chain(self.program.inequalities.iter().zip(u));
        for (row, multiplier) in rows {
            for (variable, c) in &row.terms {
                stationarity[*variable] -= c * multiplier;
            }
        }
        for component in &self.structure.components {
            let local = component.gather(v);
            for matrices in &component.blocks {
                blocks[matrices.block] += matrices.at(&local);
                for (k, value) in matrices.products(&z[matrices.block]) {
                    stationarity[component.variables[k]] += value;
                }
            }
        }
        Residuals { equalities, inequalities, blocks, stationarity }
    }

    /// One predictor and corrector step; the shorter of the two lengths, or `None` if a factorisation broke down.
    fn advance(&mut self, residuals: &Residuals) -> Option<f64> {
        let factors = Factors::new(&self.point)?;
        let inverses: Vec<DMatrix<f64>> = factors.slack.iter().zip(&self.point.slack).map(|(f, s)| f.inverse(s.nrows())).collect();
        let rows: Vec<f64> = self.point.s.iter().zip(&self.point.u).map(|(s, u)| u / s).collect();
        let system = System::new(self.structure, &Weights { multipliers: &self.point.z, inverse_slacks: &inverses, rows: &rows })?;
        let gap = self.gap();

        let predictor = self.direction(&system, &inverses, residuals, 0.0, None)?;
        let (primal, dual) = factors.lengths(&self.point, &predictor, 1.0)?;
        let ahead = {
            let Point { s, u, slack, z, .. } = &self.point;
            let blocks: f64 = (0..slack.len())
                .map(|k| {
                    let (s, ds, z, dz) = (&slack[k], &predictor.slack[k], &z[k], &predictor.z[k]);
                    s.dot(z) + primal * ds.dot(z) + dual * s.dot(dz) + primal * dual * ds.dot(dz)
                })
                .sum();
            let rows: f64 = (0..s.len()).map(|i| (s[i] + primal * predictor.s[i]) * (u[i] + dual * predictor.u[i])).sum();
            ((blocks + rows) / self.degree).max(0.0)
        };
        let exponent = (3.0 * primal.min(dual).powi(2)).max(1.0);
        let centring = (ahead / gap).powf(exponent).clamp(1e-6, 1.0);
        let corrector = self.direction(&system, &inverses, residuals, centring * gap, Some(&predictor))?;
        let (primal, dual) = factors.lengths(&self.point, &corrector, 0.9 + 0.09 * primal.min(dual))?;
        self.point.advance(&corrector, primal, dual);
        Some(primal.min(dual))
    }

    /// The direction towards complementarity `target`, with the second-order term of a predictor.
    fn direction(
        &self,
        system: &System,
        inverses: &[DMatrix<f64>],
        residuals: &Residuals,
        target: f64,
        predictor: Option<&Step>,
    ) -> Option<Step> {
        let Point { s, u, z, .. } = &self.point;
        // What Z would be with ΔS = residual alone.
        let aims: Vec<DMatrix<f64>> = (0..z.len())
            .map(|k| {
                let mut product = &z[k] * &residuals.blocks[k];
                if let Some(predictor) = predictor {
                    product += &predictor.z[k] * &predictor.slack[k];
                }
                let mut bent = product * &inverses[k];
                symmetric_part(&mut bent);
                &inverses[k] * target - bent - &z[k]
            })
            .collect();
        let aim = |i: usize| target - s[i] * u[i] - predictor.map_or(0.0, |p| p.s[i] * p.u[i]);
        let complementarity: Vec<f64> = (0..s.len()).map(aim).collect();

        let mut right = residuals.stationarity.clone();
        for component in &self.structure.components {
            for matrices in &component.blocks {
                for (k, value) in matrices.products(&aims[matrices.block]) {
                    right[component.variables[k]] += value;
                }
            }
            for (i, form) in &component.inequalities {
                let value = (complementarity[*i] - u[*i] * residuals.inequalities[*i]) / s[*i];
                for (k, c) in form {
                    right[component.variables[*k]] -= c * value;
                }
            }
        }
        let ties = self.structure.ties.iter().map(|tie| match (tie.equality, tie.inequality) {
            (Some(e), _) => residuals.equalities[e],
            (None, Some(i)) => residuals.inequalities[i] - complementarity[i] / u[i],
            (None, None) => 0.0,
        });
        let ties: Vec<f64> = ties.collect();
        // What a predictor is for needs no more digits.
        let (dv, dw) = if predictor.is_some() { system.solve(&right, &ties) } else { system.solve_once(&right, &ties) };

        let mut step = Step {
            y: vec![0.0; self.point.y.len()],
            s: self.program.inequalities.iter().zip(&residuals.inequalities).map(|(row, r)| r - at(row, &dv)).collect(),
            u: vec![0.0; u.len()],
            slack: residuals.blocks.clone(),
            z: aims,
            v: dv,
        };
        for (i, du) in step.u.iter_mut().enumerate() {
            *du = (complementarity[i] - u[i] * step.s[i]) / s[i];
        }
        for (tie, value) in self.structure.ties.iter().zip(dw) {
            match (tie.equality, tie.inequality) {
                (Some(e), _) => step.y[e] = value,
                (None, Some(i)) => step.u[i] = value,
                (None, None) => {}
            }
        }
        for component in &self.structure.components {
            let local = component.gather(&step.v);
            for matrices in &component.blocks {
                let k = matrices.block;
                let change = matrices.at(&local);
                let mut bent = &z[k] * &change * &inverses[k];
                symmetric_part(&mut bent);
                step.z[k] -= bent;
                step.slack[k] += change;
            }
        }
        let finite = step.v.iter().chain(&step.y).chain(&step.u).all(|value| value.is_finite());
        finite.then_some(step)
    }
}

impl Point {
    fn advance(&mut self, step: &Step, primal: f64, dual: f64) {
        let along =
            |values: &mut Vec<f64>, step: &[f64], length: f64| values.iter_mut().zip(step).for_each(|(value, d)| *value += length * d);
        along(&mut self.v, &step.v, primal);
        along(&mut self.s, &step.s, primal);
        along(&mut self.y, &step.y, dual);
        along(&mut self.u, &step.u, dual);
        for (matrix, d) in self.slack.iter_mut().zip(&step.slack) {
            *matrix += d * primal;
        }
        for (matrix, d) in self.z.iter_mut().zip(&step.z) {
            *matrix += d * dual;
        }
    }
}

/// Cholesky factors of the matrices of a point, for the lengths of steps.
struct Factors {
    slack: Vec<Cholesky>,
    z: Vec<Cholesky>,
}

impl Factors {
    fn new(point: &Point) -> Option<Self> {
        let all = |matrices: &[DMatrix<f64>]| matrices.iter().map(Cholesky::new).collect::<Option<_>>();
        Some(Self { slack: all(&point.slack)?, z: all(&point.z)? })
    }

    /// How far the slacks and the multipliers can go, at most 1, `share` of the way to the boundary.
    fn lengths(&self, point: &Point, step: &Step, share: f64) -> Option<(f64, f64)> {
        let blocks = |factors: &[Cholesky], steps: &[DMatrix<f64>]| {
            factors.iter().zip(steps).try_fold(f64::INFINITY, |length: f64, (factor, step)| Some(length.min(factor.reach(step)?)))
        };
        let rows = |values: &[f64], steps: &[f64]| {
            values.iter().zip(steps).filter(|(_, d)| **d < 0.0).map(|(value, d)| -value / d).fold(f64::INFINITY, f64::min)
        };
        let primal = blocks(&self.slack, &step.slack)?.min(rows(&point.s, &step.s));
        let dual = blocks(&self.z, &step.z)?.min(rows(&point.u, &step.u));
        Some(((share * primal).min(1.0), (share * dual).min(1.0)))
    }
}

fn at(row: &Row, values: &[f64]) -> f64 {
    row.terms.iter().map(|(variable, c)| c * values[*variable]).sum()
}

fn dot(one: &[f64], other: &[f64]) -> f64 {
    one.iter().zip(other).map(|(a, b)| a * b).sum()
}

fn inner_all(one: &[DMatrix<f64>], other: &[DMatrix<f64>]) -> f64 {
    one.iter().zip(other).map(|(a, b)| a.dot(b)).sum()
}

fn largest(values: &[f64]) -> f64 {
    values.iter().fold(0.0, |largest, value| if value.is_nan() { f64::INFINITY } else { value.abs().max(largest) })
}

fn largest_entry(matrix: &DMatrix<f64>) -> f64 {
    largest(matrix.as_slice())
}

fn candidate(point: Point, status: Status, iterations: u32) -> Candidate {
    Candidate {
        status,
        iterations,
        values: point.v,
        equality_multipliers: point.y,
        inequality_multipliers: point.u,
        block_multipliers: point.z,
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::{
        relaxation::program::{Block, Term},
        solver::{clarabel, pseudorandom::Numbers},
    };

    /// Groups of moments-like matrices: every entry of a block is a variable of its group, a diagonal entry shared by two blocks; rows tie
    /// the groups together. Feasible and bounded: the diagonal entries add up to at most one.
    fn programme(groups: usize, side: usize, seed: u64) -> Program {
        let mut numbers = Numbers::new(seed);
        let stride = side * (side + 1) / 2;
        let (mut blocks, mut objective) = (Vec::new(), Vec::new());
        let mut sum = Row { terms: Vec::new(), right: 1.0 };
        let mut tied = Row { terms: Vec::new(), right: 0.05 };
        for group in 0..groups {
            let mut terms = Vec::new();
            for row in 0..side {
                for column in 0..=row {
                    let variable = group * stride + terms.len();
                    objective.push(numbers.symmetric());
                    terms.push(Term { row, column, variable, coefficient: 1.0 });
                    if row == column {
                        sum.terms.push((variable, 1.0));
                    } else if column == 0 {
                        tied.terms.push((variable, numbers.symmetric()));
                    }
                }
            }
            let first = Term { row: 0, column: 0, variable: group * stride, coefficient: 1.0 };
            let second = Term { row: 1, column: 1, variable: group * stride + stride - 1, coefficient: 2.0 };
            let third = Term { row: 1, column: 0, variable: group * stride + 1, coefficient: 0.5 };
            blocks.push(Block { side, terms });
            blocks.push(Block { side: 2, terms: vec![first, second, third] });
        }
        let mirrored = Row { terms: tied.terms.iter().map(|(variable, c)| (*variable, -c)).collect(), right: 0.02 };
        let within = Row { terms: vec![(0, 1.0), (1, 0.3)], right: 0.4 };
        Program { objective, equalities: vec![sum], inequalities: vec![tied, mirrored, within], blocks }
    }

    fn value(program: &Program, candidate: &Candidate) -> f64 {
        dot(&program.objective, &candidate.values)
    }

    #[test]
    fn it_agrees_with_the_general_solver() {
        for (groups, side, seed) in [(1, 3, 1), (2, 5, 2), (4, 4, 3), (3, 8, 4)] {
            let program = programme(groups, side, seed);
            let ours = solve(&program, Limits::default()).unwrap();
            let theirs = clarabel::solve(&program, Limits::default());
            assert_eq!((ours.status, theirs.status), (Status::Solved, Status::Solved));
            let (one, other) = (value(&program, &ours), value(&program, &theirs));
            assert!((one - other).abs() < 1e-7, "{groups} groups of side {side}: {one} {other}");
        }
    }

    /// The dual equations, straight from the documentation of the programme, and its value.
    #[test]
    fn multipliers_prove_the_value() {
        let program = programme(3, 4, 7);
        let candidate = solve(&program, Limits::default()).unwrap();
        let mut left = program.objective.clone();
        let rows = program.equalities.iter().chain(&program.inequalities);
        let multipliers: Vec<f64> = candidate.equality_multipliers.iter().chain(&candidate.inequality_multipliers).copied().collect();
        let mut proved = 0.0;
        for (row, y) in rows.zip(&multipliers) {
            proved += row.right * y;
            row.terms.iter().for_each(|(variable, c)| left[*variable] -= c * y);
        }
        for (block, z) in program.blocks.iter().zip(&candidate.block_multipliers) {
            assert!(z.clone().symmetric_eigenvalues().min() > -1e-12);
            for term in &block.terms {
                let times = if term.row == term.column { 1.0 } else { 2.0 };
                left[term.variable] += times * term.coefficient * z[(term.row, term.column)];
            }
        }
        assert!(candidate.inequality_multipliers.iter().all(|u| *u >= 0.0));
        assert!(largest(&left) < 1e-8, "{:e}", largest(&left));
        assert!((proved - value(&program, &candidate)).abs() < 1e-7);
    }

    #[test]
    fn without_a_solution_there_is_no_candidate() {
        let mut program = programme(2, 3, 5);
        // The first diagonal entry would have to be negative.
        program.inequalities.push(Row { terms: vec![(0, 1.0)], right: -0.5 });
        assert_eq!(solve(&program, Limits::default()), None);
        let program = programme(2, 3, 5);
        assert_eq!(solve(&program, Limits { iterations: 3, ..Limits::default() }), None);
        assert_eq!(solve(&program, Limits { seconds: 0.0, ..Limits::default() }), None);
    }

    #[test]
    fn other_structures_are_left_to_the_general_solver() {
        let mut free = programme(2, 3, 5);
        free.objective.push(1.0);
        assert_eq!(solve(&free, Limits::default()), None, "a variable in no block");
        let mut wrong = programme(2, 3, 5);
        wrong.blocks[0].terms[1].coefficient = f64::NAN;
        assert_eq!(solve(&wrong, Limits::default()), None);
    }
}
