//! The pricing step: from a start, the strategy is improved by eigenvalue problems in turn, one for the states, one for the measurements, one
//! for the carrier, none of which can make it worse.

use nalgebra::{Complex, SymmetricEigen};

use super::{
    master::{Column, Prices},
    objective::Objective,
    strategy::{Matrix, Strategy, Vector, outside},
};
use crate::scenario::{Geometry, Setting};

/// What each state has to satisfy by itself.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Confinement {
    /// Nothing: the leakage has a price.
    Free,
    /// Its weight outside the carrier is at most this, below 1.
    AtMost(f64),
    /// It lies inside the carrier.
    Inside,
}

/// The space that strategies live in, and what they are for.
#[derive(Debug, Clone)]
pub struct Space {
    pub geometry: Geometry,
    /// At least the carrier dimension, or less where there are fewer preparations than that.
    pub dimension: usize,
    pub carrier_dimension: usize,
    pub confinement: Vec<Confinement>,
    pub target: Setting,
    pub objective: Objective,
}

/// Improvements of one round of eigenvalue problems below this end a climb.
const STEP: f64 = 1e-11;
/// Sweeps over pairs of outcomes in one measurement step.
const SWEEPS: usize = 8;
/// Steps of the search for a multiplier of a confined state.
const MULTIPLIER_STEPS: usize = 60;

impl Space {
    /// The column of a strategy.
    pub fn column(&self, strategy: Strategy) -> Column {
        let behaviour = strategy.behaviour();
        let leakage = strategy.leakage(self.carrier_dimension);
        let value = self.objective.value(&behaviour[self.target.x][self.target.y]);
        Column { strategy, behaviour, leakage, value }
    }

    /// Climbs from a strategy under prices for at most `steps` rounds. The first slope of the objective is the given one.
    pub fn climb(&self, start: Strategy, prices: &Prices, mut slope: Vec<f64>, steps: usize) -> Column {
        let mut strategy = start;
        let mut best: Option<(f64, Column)> = None;
        let mut before = f64::NEG_INFINITY;
        for _ in 0..steps {
            let turned = self.turn_carrier(&mut strategy, prices);
            self.improve_states(&mut strategy, prices, &slope);
            self.improve_measurements(&mut strategy, prices, &slope);
            let column = self.column(strategy.clone());
            let gain = prices.gain(column.value, &column.behaviour, &column.leakage);
            slope = self.objective.slope(&column.behaviour[self.target.x][self.target.y]);
            if best.as_ref().is_none_or(|(most, _)| gain > *most) {
                best = Some((gain, column));
            }
            if !turned && gain - before < STEP || gain - before < STEP && gain.is_finite() && before.is_finite() {
                break;
            }
            before = gain;
        }
        best.map_or_else(|| self.column(strategy), |(_, column)| column)
    }

    /// `Σ_b (−ν_{bxy} + slope_b at the target) M_{b|y}` summed over y: what the state of preparation x is rewarded for.
    fn reward(&self, strategy: &Strategy, prices: &Prices, slope: &[f64], x: usize) -> Matrix {
        let mut sum = Matrix::zeros(self.dimension, self.dimension);
        for (y, elements) in strategy.measurements.iter().enumerate() {
            for (b, element) in elements.iter().enumerate() {
                let coefficient = self.coefficient(prices, slope, Setting { x, y }, b);
                if coefficient != 0.0 {
                    sum += element * Complex::from(coefficient);
                }
            }
        }
        sum
    }

    fn coefficient(&self, prices: &Prices, slope: &[f64], setting: Setting, b: usize) -> f64 {
        let bonus = if setting == self.target { slope[b] } else { 0.0 };
        bonus - prices.behaviour[setting.x][setting.y][b]
    }

    fn improve_states(&self, strategy: &mut Strategy, prices: &Prices, slope: &[f64]) {
        for x in 0..self.geometry.preparations {
            let reward = self.reward(strategy, prices, slope, x);
            strategy.states[x] = match self.confinement[x] {
                Confinement::Free => top(&self.charged(&reward, prices.leakage[x])),
                Confinement::Inside => self.inside(&reward),
                Confinement::AtMost(limit) => self.confined(&reward, limit),
            };
        }
    }

    /// `reward − μ N`.
    fn charged(&self, reward: &Matrix, multiplier: f64) -> Matrix {
        let mut charged = reward.clone();
        for axis in self.carrier_dimension..self.dimension {
            charged[(axis, axis)] -= Complex::from(multiplier);
        }
        charged
    }

    /// The best state inside the carrier.
    fn inside(&self, reward: &Matrix) -> Vector {
        let side = self.carrier_dimension.min(self.dimension);
        let found = top(&reward.view((0, 0), (side, side)).into_owned());
        Vector::from_fn(self.dimension, |i, _| if i < side { found[i] } else { Complex::from(0.0) })
    }

    /// The best state with at most a weight `limit` outside the carrier. The set of pairs (reward, leakage) of all states is convex, so the
    /// best one is a top eigenvector of `reward − μ N` for the least `μ` that keeps the limit; of the two eigenvectors that the search for `μ`
    /// ends between a superposition has exactly the limit.
    fn confined(&self, reward: &Matrix, limit: f64) -> Vector {
        let state_at = |multiplier: f64| {
            let state = top(&self.charged(reward, multiplier));
            let leakage = outside(&state, self.carrier_dimension);
            (state, leakage)
        };
        let (mut loose, leakage) = state_at(0.0);
        if leakage <= limit {
            return loose;
        }
        let (mut low, mut low_excess) = (0.0, leakage - limit);
        let mut high = 1.0;
        let (mut tight, mut high_excess) = loop {
            let (state, leakage) = state_at(high);
            if leakage <= limit {
                break (state, leakage - limit);
            }
            if high > 1e9 {
                return self.inside(reward);
            }
            (loose, low, low_excess) = (state, high, leakage - limit);
            high *= 4.0;
        };
        // False position, with the stale end's excess halved.
        for _ in 0..MULTIPLIER_STEPS {
            if high - low < 1e-12 * (1.0 + high) || high_excess > -1e-12 {
                break;
            }
            let middle = (low * -high_excess + high * low_excess) / (low_excess - high_excess);
            let middle = if middle > low && middle < high { middle } else { 0.5 * (low + high) };
            let (state, leakage) = state_at(middle);
            if leakage > limit {
                (loose, low, low_excess) = (state, middle, leakage - limit);
                high_excess *= 0.5;
            } else {
                (tight, high, high_excess) = (state, middle, leakage - limit);
                low_excess *= 0.5;
            }
        }
        self.between(&tight, &loose, limit)
    }

    /// A superposition of a state within the limit and one beyond it that has the limit, up to rounding on the safe side.
    fn between(&self, tight: &Vector, loose: &Vector, limit: f64) -> Vector {
        let overlap = loose.dotc(tight);
        let phase = if overlap.norm() > 1e-12 { overlap / overlap.norm() } else { Complex::from(1.0) };
        let loose = loose * phase;
        let mixed = |share: f64| (tight * Complex::from(1.0 - share) + &loose * Complex::from(share)).normalize();
        let (mut kept, mut low, mut high) = (tight.clone(), 0.0, 1.0);
        for _ in 0..50 {
            let middle = 0.5 * (low + high);
            let state = mixed(middle);
            if outside(&state, self.carrier_dimension) <= limit {
                (kept, low) = (state, middle);
            } else {
                high = middle;
            }
        }
        kept
    }

    fn improve_measurements(&self, strategy: &mut Strategy, prices: &Prices, slope: &[f64]) {
        let Strategy { states, measurements } = strategy;
        let projectors: Vec<Matrix> = states.iter().map(|state| state * state.adjoint()).collect();
        for (y, elements) in measurements.iter_mut().enumerate() {
            let reward = |b: usize| {
                let mut sum = Matrix::zeros(self.dimension, self.dimension);
                for (x, projector) in projectors.iter().enumerate() {
                    sum += projector * Complex::from(self.coefficient(prices, slope, Setting { x, y }, b));
                }
                sum
            };
            let rewards: Vec<Matrix> = (0..self.geometry.outcomes).map(reward).collect();
            improve_measurement(elements, &rewards);
        }
    }

    /// Turns the whole strategy so that the best carrier for its states, the top-d eigenspace of `Σ_x μ_x ρ_x`, is spanned by the first axes.
    fn turn_carrier(&self, strategy: &mut Strategy, prices: &Prices) -> bool {
        let free = self.confinement.iter().all(|confinement| *confinement == Confinement::Free);
        if !free || self.carrier_dimension >= self.dimension {
            return false;
        }
        let mut weighted = Matrix::zeros(self.dimension, self.dimension);
        for (state, multiplier) in strategy.states.iter().zip(&prices.leakage) {
            weighted += state * state.adjoint() * Complex::from(*multiplier);
        }
        let eigen = SymmetricEigen::new(weighted);
        let mut order: Vec<usize> = (0..self.dimension).collect();
        order.sort_by(|one, other| eigen.eigenvalues[*other].total_cmp(&eigen.eigenvalues[*one]));
        let turn = Matrix::from_fn(self.dimension, self.dimension, |i, j| eigen.eigenvectors[(i, order[j])]);
        let back = turn.adjoint();
        for state in &mut strategy.states {
            *state = (&back * &*state).normalize();
        }
        for element in strategy.measurements.iter_mut().flatten() {
            *element = &back * &*element * &turn;
        }
        true
    }
}

/// A unit eigenvector of the largest eigenvalue.
fn top(matrix: &Matrix) -> Vector {
    let eigen = SymmetricEigen::new(matrix.clone());
    let mut best = 0;
    for i in 1..eigen.eigenvalues.len() {
        if eigen.eigenvalues[i] > eigen.eigenvalues[best] {
            best = i;
        }
    }
    eigen.eigenvectors.column(best).into_owned().normalize()
}

/// Makes `Σ_b tr(M_b K_b)` larger. For two outcomes the best measurement, the projector on the positive part of `K_0 − K_1`. For more,
/// pairs are improved in turn with their sum held fixed, which ends at a measurement that no pair can improve, not always at the best.
fn improve_measurement(elements: &mut [Matrix], rewards: &[Matrix]) {
    if let ([first, second], [one, other]) = (&mut *elements, rewards) {
        let side = first.nrows();
        *first = positive_projector(one - other);
        *second = Matrix::identity(side, side) - &*first;
        return;
    }
    for _ in 0..SWEEPS {
        let mut gained = 0.0;
        for second in 1..elements.len() {
            for first in 0..second {
                let root = square_root(&(&elements[first] + &elements[second]));
                let difference = &root * (&rewards[first] - &rewards[second]) * &root;
                let updated = &root * positive_projector(difference) * &root;
                let change = &updated - &elements[first];
                gained += (&change * (&rewards[first] - &rewards[second])).trace().re;
                elements[second] -= &change;
                elements[first] = updated;
            }
        }
        if gained < STEP {
            break;
        }
    }
    tidy(elements);
}

/// Takes out what rounding has added up to: Hermitian, and complete.
fn tidy(elements: &mut [Matrix]) {
    for element in elements.iter_mut() {
        *element = (&*element + element.adjoint()) * Complex::from(0.5);
    }
    let side = elements.first().map_or(0, Matrix::nrows);
    let sum = elements.iter().fold(Matrix::zeros(side, side), |sum, element| sum + element);
    // Normalised by the inverse square root of the sum, which is close to the identity, so that elements stay positive.
    let root = Matrix::identity(side, side) * Complex::from(1.5) - sum * Complex::from(0.5);
    for element in elements.iter_mut() {
        *element = &root * &*element * &root;
    }
}

fn positive_projector(matrix: Matrix) -> Matrix {
    spectral(matrix, |value| f64::from(u8::from(value > 0.0)))
}

fn square_root(matrix: &Matrix) -> Matrix {
    spectral(matrix.clone(), |value| value.max(0.0).sqrt())
}

/// A function of a Hermitian matrix.
fn spectral(matrix: Matrix, function: impl Fn(f64) -> f64) -> Matrix {
    let side = matrix.nrows();
    let eigen = SymmetricEigen::new(matrix);
    let mut sum = Matrix::zeros(side, side);
    for (value, vector) in eigen.eigenvalues.iter().zip(eigen.eigenvectors.column_iter()) {
        let image = function(*value);
        if image != 0.0 {
            sum += vector * vector.adjoint() * Complex::from(image);
        }
    }
    sum
}
