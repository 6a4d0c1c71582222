//! The master problem: the best mixture of the strategies found so far, and the prices that tell which strategy would improve it.
//!
//! With columns `j` of behaviour `p_j`, leakage `l_j` and value `c_j` the mixture solves
//!
//! ```text
//! maximise    Σ_j q_j c_j − P Σ (misses)
//! subject to  q ≥ 0,  Σ_j q_j = 1,
//!             low ≤ Σ_j q_j p_j(b|x,y) ≤ high     up to misses
//!             Σ_j q_j l_j(x) ≤ ε_x                on average, where ε_x > 0
//! ```
//!
//! and the prices its dual, with one row per column:
//!
//! ```text
//! minimise    t + Σ (ν⁺ high − ν⁻ low) + Σ_x μ_x ε_x
//! subject to  t + ν·p_j + μ·l_j ≥ c_j,     |ν − ν°| ≤ P,  |μ − μ°| ≤ P,  ν⁺, ν⁻, μ ≥ 0.
//! ```
//!
//! The linear-programming crate hands out no multipliers, so both are solved as they are written here. Prices are kept in a box around some
//! centre `(ν°, μ°)`, the multipliers of a witness or else zero, without which they swing widely as long as there are few columns; the
//! box is the penalty on misses of the other problem. It is widened where the prices lean on it in the end.

use microlp::{ComparisonOp, OptimizationDirection, Problem, Solution, SolveOptions, Variable};
use nalgebra::{DMatrix, DVector};

use num_rational::BigRational;
use num_traits::ToPrimitive;

use super::strategy::Strategy;
use crate::{counts::Table, scenario::Scenario, witness::check::CheckedWitness};

/// A strategy with what the linear programme needs to know of it.
#[derive(Debug, Clone)]
pub struct Column {
    pub strategy: Strategy,
    pub behaviour: Table<f64>,
    pub leakage: Vec<f64>,
    pub value: f64,
}

/// Prices of a column: it improves the mixture if its value exceeds `weight + ν·p + μ·l`.
#[derive(Debug, Clone)]
pub struct Prices {
    pub weight: f64,
    /// `ν`, `[x][y][b]`.
    pub behaviour: Table<f64>,
    /// `μ`, `[x]`.
    pub leakage: Vec<f64>,
}

impl Prices {
    /// The prices a witness implies: its affine bound is a bound on the gain of every strategy.
    pub fn of(witness: &CheckedWitness, scenario: &Scenario) -> Option<Self> {
        let (constant, behaviour) = witness.affine(scenario.leakage(), scenario.leakage_holds()).ok()?;
        let number = |value: &BigRational| value.to_f64().unwrap_or(0.0);
        let behaviour = behaviour.iter().map(|table| table.iter().map(|values| values.iter().map(number).collect()).collect()).collect();
        let unit = 0.5f64.powi(witness.witness().multiplier_bits as i32);
        let leakage = witness.witness().leakage.first()?.iter().map(|multiplier| *multiplier as f64 * unit).collect();
        Some(Self { weight: number(&constant), behaviour, leakage })
    }

    /// `share` of these and the rest of others.
    pub fn mixed_with(&self, other: &Self, share: f64) -> Self {
        let mix = |own: f64, other: f64| share * own + (1.0 - share) * other;
        let mut mixed = self.clone();
        mixed.weight = mix(mixed.weight, other.weight);
        for (own, other) in mixed.behaviour.iter_mut().flatten().flatten().zip(other.behaviour.iter().flatten().flatten()) {
            *own = mix(*own, *other);
        }
        for (own, other) in mixed.leakage.iter_mut().zip(&other.leakage) {
            *own = mix(*own, *other);
        }
        mixed
    }

    /// What the column is worth beyond its price.
    pub fn gain(&self, value: f64, behaviour: &Table<f64>, leakage: &[f64]) -> f64 {
        let nu = self.behaviour.iter().flatten().flatten().zip(behaviour.iter().flatten().flatten());
        let mu = self.leakage.iter().zip(leakage);
        value - self.weight - nu.chain(mu).map(|(price, amount)| price * amount).sum::<f64>()
    }
}

/// Prices for the columns found so far.
#[derive(Debug, Clone)]
pub struct Priced {
    pub prices: Prices,
    /// Whether some price leans on its box, so that the mixture may miss its limits.
    pub leans: bool,
    /// The value of the mixture, penalties included.
    pub value: f64,
}

/// What a mixture has to satisfy.
#[derive(Debug, Clone)]
pub struct Constraints {
    /// `[low, high]`, `[x][y][b]`.
    pub intervals: Table<[f64; 2]>,
    /// Limit of the mean leakage of each preparation; `None` where each strategy satisfies its own.
    pub mean_leakage: Vec<Option<f64>>,
}

/// One constraint on the mixture: the amount that each column contributes lies within an interval.
struct Limit {
    source: Source,
    low: f64,
    high: f64,
}

enum Source {
    Probability { x: usize, y: usize, b: usize },
    Leakage { x: usize },
}

impl Limit {
    fn amount(&self, column: &Column) -> f64 {
        match self.source {
            Source::Probability { x, y, b } => column.behaviour[x][y][b],
            Source::Leakage { x } => column.leakage[x],
        }
    }

    /// Probabilities, and leakages in units of their limit.
    fn unit(&self) -> f64 {
        match self.source {
            Source::Probability { .. } => 1.0,
            Source::Leakage { .. } => self.high,
        }
    }

    /// The amount in these units, as it enters the linear programmes: without the digits below the solver's resolution, which keep it from
    /// ending well. Weights are polished with the true amounts.
    fn coefficient(&self, column: &Column) -> f64 {
        let scaled = self.amount(column) / self.unit();
        if scaled.abs() < RESOLUTION { 0.0 } else { scaled }
    }
}

/// Amounts below this are no amounts.
const RESOLUTION: f64 = 1e-9;
/// Feasibility of the linear programmes.
const FEASIBILITY: f64 = 1e-9;
impl Constraints {
    /// The last outcome follows from the others where all are points, and with two outcomes.
    fn limits(&self) -> Vec<Limit> {
        let mut limits = Vec::new();
        for (x, table) in self.intervals.iter().enumerate() {
            for (y, intervals) in table.iter().enumerate() {
                let points = intervals.iter().all(|[low, high]| low == high);
                for (b, [low, high]) in intervals.iter().enumerate() {
                    let last = b + 1 == intervals.len();
                    if last && (points || b == 1) {
                        continue;
                    }
                    let (mut low, mut high) = (*low, *high);
                    if intervals.len() == 2 && !points {
                        let [mirror_low, mirror_high] = intervals[1];
                        (low, high) = (low.max(1.0 - mirror_high), high.min(1.0 - mirror_low));
                    }
                    limits.push(Limit { source: Source::Probability { x, y, b }, low, high });
                }
            }
        }
        for (x, limit) in self.mean_leakage.iter().enumerate() {
            limits.extend(limit.map(|high| Limit { source: Source::Leakage { x }, low: f64::NEG_INFINITY, high }));
        }
        limits
    }

    /// Prices for the columns inside a box; `None` if the linear-programming crate has no answer.
    pub fn prices(&self, columns: &[Column], centre: &Prices, reach: f64) -> Option<Priced> {
        let limits = self.limits();
        let mut problem = Problem::new(OptimizationDirection::Minimize);
        let weight = problem.add_var(1.0, (f64::NEG_INFINITY, f64::INFINITY));
        // Limit, sign, variable and box of each price; an equality's price has either sign.
        let mut prices = Vec::new();
        for limit in &limits {
            let middle = match limit.source {
                Source::Probability { x, y, b } => centre.behaviour[x][y][b],
                Source::Leakage { x } => centre.leakage[x],
            };
            let signed = if limit.low == limit.high {
                vec![(1.0, limit.high, middle)]
            } else {
                vec![(1.0, limit.high, middle.max(0.0)), (-1.0, -limit.low, (-middle).max(0.0))]
            };
            for (sign, cost, middle) in signed.into_iter().filter(|(_, cost, _)| cost.is_finite()) {
                let least = if limit.low == limit.high { f64::NEG_INFINITY } else { 0.0 };
                let (low, high) = ((middle - reach).max(least) * limit.unit(), (middle + reach) * limit.unit());
                prices.push((limit, sign, problem.add_var(cost / limit.unit(), (low, high)), low, high));
            }
        }
        for column in columns {
            let terms = prices.iter().map(|(limit, sign, variable, ..)| (*variable, sign * limit.coefficient(column)));
            let row: Vec<(Variable, f64)> = std::iter::once((weight, 1.0)).chain(terms).collect();
            problem.add_constraint(row, ComparisonOp::Ge, column.value);
        }
        let solution = solved(&problem)?;
        let mut found = centre.clone();
        found.weight = solution.var_value(weight);
        found.behaviour.iter_mut().flatten().flatten().chain(&mut found.leakage).for_each(|price| *price = 0.0);
        let mut leans = false;
        for (limit, sign, variable, low, high) in prices {
            let value = solution.var_value(variable);
            let near = 1e-6 * reach * limit.unit();
            leans |= (low != 0.0 || limit.low == limit.high) && value - low < near || high - value < near;
            let value = value / limit.unit();
            match limit.source {
                Source::Probability { x, y, b } => found.behaviour[x][y][b] += sign * value,
                Source::Leakage { x } => found.leakage[x] += sign * value,
            }
        }
        Some(Priced { prices: found, leans, value: solution.objective() })
    }

    /// Weights of the best mixture, one per column, of those columns that are worth their price, or less by no more than `idle`. What they miss is
    /// reported by the verification of the model.
    pub fn weights(&self, columns: &[Column], prices: &Prices, penalty: f64, idle: f64) -> Option<Vec<f64>> {
        let limits = self.limits();
        let worth = |j: &usize| prices.gain(columns[*j].value, &columns[*j].behaviour, &columns[*j].leakage) > -idle;
        let kept: Vec<usize> = (0..columns.len()).filter(worth).collect();
        let mut problem = Problem::new(OptimizationDirection::Maximize);
        let variables: Vec<Variable> = kept.iter().map(|j| problem.add_var(columns[*j].value, (0.0, f64::INFINITY))).collect();
        let sum: Vec<(Variable, f64)> = variables.iter().map(|variable| (*variable, 1.0)).collect();
        problem.add_constraint(sum, ComparisonOp::Eq, 1.0);
        for limit in &limits {
            let mut terms: Vec<(Variable, f64)> =
                variables.iter().zip(&kept).map(|(variable, j)| (*variable, limit.coefficient(&columns[*j]))).collect();
            if let Source::Probability { .. } = limit.source {
                let [above, below] = [(); 2].map(|()| problem.add_var(-penalty, (0.0, f64::INFINITY)));
                terms.extend([(above, -1.0), (below, 1.0)]);
            }
            if limit.low == limit.high {
                problem.add_constraint(terms, ComparisonOp::Eq, limit.high);
            } else {
                if limit.low.is_finite() {
                    problem.add_constraint(terms.clone(), ComparisonOp::Ge, limit.low / limit.unit());
                }
                problem.add_constraint(terms, ComparisonOp::Le, limit.high / limit.unit());
            }
        }
        let solution = solved(&problem)?;
        let (kept, found): (Vec<usize>, Vec<f64>) = kept
            .into_iter()
            .zip(&variables)
            .map(|(j, variable)| (j, solution.var_value(*variable)))
            .filter(|(_, weight)| *weight > 0.0)
            .unzip();
        let found = self.polished(&limits, columns, &kept, found);
        let mut weights = vec![0.0; columns.len()];
        for (j, weight) in kept.into_iter().zip(found) {
            weights[j] = weight;
        }
        Some(weights)
    }

    /// The smallest change of the weights that satisfies the equalities and the inequalities that hold with equality, as far as it leaves every
    /// weight positive.
    fn polished(&self, limits: &[Limit], columns: &[Column], kept: &[usize], weights: Vec<f64>) -> Vec<f64> {
        let mut current = DVector::from_vec(weights);
        let mut rows = vec![(DVector::from_element(kept.len(), 1.0), 1.0)];
        for limit in limits {
            let amounts = DVector::from_iterator(kept.len(), kept.iter().map(|j| limit.amount(&columns[*j])));
            let sum = amounts.dot(&current);
            if limit.low == limit.high || sum > limit.high {
                rows.push((amounts, limit.high));
            } else if sum < limit.low {
                rows.push((amounts, limit.low));
            }
        }
        for _ in 0..3 {
            let matrix = DMatrix::from_fn(rows.len(), kept.len(), |i, j| rows[i].0[j]);
            let lack = DVector::from_iterator(rows.len(), rows.iter().map(|(amounts, right)| right - amounts.dot(&current)));
            let Ok(change) = matrix.svd(true, true).solve(&lack, 1e-9) else { break };
            let changed = &current + change;
            if !changed.iter().all(|weight| *weight >= 0.0) {
                break;
            }
            current = changed;
        }
        current.as_slice().to_vec()
    }
}

fn solved(problem: &Problem) -> Option<Solution> {
    let mut options = SolveOptions::default();
    options.tolerances.feasibility = FEASIBILITY;
    problem.solve_with(options).ok()?.into_solution().ok()
}
