//! What a model really does, computed from its matrices alone and with none of the code that found it.

use nalgebra::{Complex, DMatrix};

use super::{
    objective::Objective,
    strategy::{Matrix, Model},
};
use crate::{
    counts::Table,
    scenario::{Geometry, Setting},
};

/// Largest defect of a matrix (a state's norm, a measurement's completeness and positivity, a carrier's being a projector of rank d at most) with which
/// it is still taken for what it should be.
pub const TOLERANCE: f64 = 1e-9;
/// What floating-point sums and eigenvalues of matrices of this size may be wrong by.
const ROUNDING: f64 = 1e-13;

/// Why a model is none.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum ModelFault {
    #[error("part {0} has another shape than the geometry asks for")]
    Shape(usize),
    #[error("the weight of part {0} is not a number from 0 to 1")]
    Weight(usize),
    #[error("the weights add up to {0}, not to 1")]
    Weights(f64),
    #[error("state {x} of part {part} is not a unit vector")]
    State { part: usize, x: usize },
    #[error("measurement {y} of part {part} is not complete, or not positive")]
    Measurement { part: usize, y: usize },
    #[error("the carrier of part {0} is not a projector of at most the carrier dimension")]
    Carrier(usize),
}

/// What a model does. An exact model near the one given, its defects mended, has figures within `error` of these.
#[derive(Debug, Clone, PartialEq)]
pub struct Attained {
    /// `p(b|x,y)`, `[x][y][b]`.
    pub behaviour: Table<f64>,
    /// Mean weight outside the carrier, `[x]`.
    pub mean_leakage: Vec<f64>,
    /// The largest weight outside the carrier in any part, `[x]`.
    pub largest_leakage: Vec<f64>,
    /// `Σ weight · p(guess|target)`.
    pub guessing_probability: f64,
    /// The mean of an objective over the parts.
    pub value: f64,
    /// See above. A state is mended by its norm. A measurement is mended by giving what its elements lack in completeness to the last, and by
    /// mixing it with uniform noise of weight `B δ` where the least eigenvalue is `−δ`; probabilities change by no more than twice that.
    pub error: f64,
}

/// Recomputes everything. Figures are for the target setting and the objective.
///
/// # Errors
/// The first matrix or weight that is not what it should be within [`TOLERANCE`].
pub fn attained(model: &Model, geometry: Geometry, target: Setting, objective: Objective) -> Result<Attained, ModelFault> {
    let Geometry { preparations, measurements, outcomes, carrier_dimension } = geometry;
    let mut found = Attained {
        behaviour: vec![vec![vec![0.0; outcomes]; measurements]; preparations],
        mean_leakage: vec![0.0; preparations],
        largest_leakage: vec![0.0; preparations],
        guessing_probability: 0.0,
        value: 0.0,
        error: 0.0,
    };
    let total: f64 = model.parts.iter().map(|part| part.weight).sum();
    if is_off(total - 1.0) {
        return Err(ModelFault::Weights(total));
    }
    for (number, part) in model.parts.iter().enumerate() {
        let side = part.carrier.nrows();
        let square = |matrix: &Matrix| matrix.shape() == (side, side) && finite(matrix);
        let shaped = part.strategy.states.len() == preparations
            && part.strategy.measurements.len() == measurements
            && part.strategy.states.iter().all(|state| state.len() == side)
            && part.strategy.measurements.iter().all(|elements| elements.len() == outcomes && elements.iter().all(square))
            && square(&part.carrier)
            && part.guess < outcomes
            && side > 0;
        if !shaped {
            return Err(ModelFault::Shape(number));
        }
        if !(0.0..=1.0 + TOLERANCE).contains(&part.weight) {
            return Err(ModelFault::Weight(number));
        }
        let weight = part.weight / total;
        let carrier = &part.carrier;
        let rank = carrier.trace().re;
        // A smaller carrier may be enlarged, which only lowers the leakage.
        let excess = rank - f64::from(carrier_dimension);
        let skew = (carrier * carrier - carrier).norm().max((carrier - carrier.adjoint()).norm()).max(excess);
        if skew.is_nan() || skew > TOLERANCE {
            return Err(ModelFault::Carrier(number));
        }
        let mut defect = 0.0f64;
        for (y, elements) in part.strategy.measurements.iter().enumerate() {
            let Some(lack) = defect_of(elements).filter(|lack| *lack <= TOLERANCE) else {
                return Err(ModelFault::Measurement { part: number, y });
            };
            defect = defect.max(lack);
        }
        let outside = Matrix::identity(side, side) - carrier;
        let mut own = vec![vec![vec![0.0; outcomes]; measurements]; preparations];
        for (x, state) in part.strategy.states.iter().enumerate() {
            let norm = state.norm_squared();
            if is_off(norm - 1.0) {
                return Err(ModelFault::State { part: number, x });
            }
            let density: Matrix = state * state.adjoint() / Complex::from(norm);
            let weight_in = |element: &Matrix| (&density * element).trace().re;
            let leakage = weight_in(&outside).max(0.0);
            found.mean_leakage[x] += weight * leakage;
            found.largest_leakage[x] = found.largest_leakage[x].max(leakage);
            for (y, elements) in part.strategy.measurements.iter().enumerate() {
                for (b, element) in elements.iter().enumerate() {
                    own[x][y][b] = weight_in(element).clamp(0.0, 1.0);
                    found.behaviour[x][y][b] += weight * own[x][y][b];
                }
            }
        }
        let distribution = &own[target.x][target.y];
        found.guessing_probability += weight * distribution[part.guess];
        found.value += weight * objective.value(distribution);
        found.error = found.error.max(2.0 * outcomes as f64 * defect);
    }
    found.error += ROUNDING;
    Ok(found)
}

/// How far a measurement is from complete, in norm, or from positive.
fn defect_of(elements: &[Matrix]) -> Option<f64> {
    let side = elements.first()?.nrows();
    let sum = elements.iter().fold(Matrix::zeros(side, side), |sum, element| sum + element);
    let mut defect = (sum - Matrix::identity(side, side)).norm();
    for element in elements {
        let skew = (element - element.adjoint()).norm();
        // A Hermitian matrix as a real one of twice the side, with the same eigenvalues.
        let real = DMatrix::from_fn(2 * side, 2 * side, |i, j| {
            let entry = element[(i % side, j % side)];
            match (i < side, j < side) {
                (true, true) | (false, false) => entry.re,
                (true, false) => -entry.im,
                (false, true) => entry.im,
            }
        });
        let symmetric = (&real + real.transpose()) * 0.5;
        let least = symmetric.symmetric_eigenvalues().min();
        defect += skew + (-least).max(0.0);
    }
    Some(defect)
}

fn finite(matrix: &Matrix) -> bool {
    matrix.iter().all(|entry| entry.re.is_finite() && entry.im.is_finite())
}

/// Whether something that should vanish does not; what is no number does not.
fn is_off(defect: f64) -> bool {
    defect.is_nan() || defect.abs() > TOLERANCE
}
