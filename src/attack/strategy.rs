//! One pure strategy of an adversary, and mixtures of them: the explicit models.

use nalgebra::{Complex, DMatrix, DVector};

use crate::counts::Table;

pub type Vector = DVector<Complex<f64>>;
pub type Matrix = DMatrix<Complex<f64>>;

/// A unit vector per preparation and a measurement per setting of the receiver, in a space of a few dimensions. The carrier is spanned by the
/// first `d` axes: every strategy can be turned so that this holds.
#[derive(Debug, Clone, PartialEq)]
pub struct Strategy {
    /// `[x]`.
    pub states: Vec<Vector>,
    /// `[y][b]`, positive semidefinite, adding up to the identity for each `y`.
    pub measurements: Vec<Vec<Matrix>>,
}

impl Strategy {
    /// `p(b|x,y)`, `[x][y][b]`.
    pub fn behaviour(&self) -> Table<f64> {
        let probability = |state: &Vector, element: &Matrix| state.dotc(&(element * state)).re;
        let at = |state: &Vector| {
            self.measurements.iter().map(|elements| elements.iter().map(|element| probability(state, element)).collect()).collect()
        };
        self.states.iter().map(at).collect()
    }

    /// Weight of each state outside the first `d` axes.
    pub fn leakage(&self, carrier_dimension: usize) -> Vec<f64> {
        self.states.iter().map(|state| outside(state, carrier_dimension)).collect()
    }
}

/// Weight of a vector outside the first `d` axes.
pub fn outside(state: &Vector, carrier_dimension: usize) -> f64 {
    state.iter().skip(carrier_dimension).map(|amplitude| amplitude.norm_sqr()).sum()
}

/// A mixture of pure strategies: the adversary draws one with its weight and knows which.
#[derive(Debug, Clone, PartialEq)]
pub struct Model {
    pub parts: Vec<Part>,
}

#[derive(Debug, Clone, PartialEq)]
pub struct Part {
    pub weight: f64,
    pub strategy: Strategy,
    /// Projector on the carrier.
    pub carrier: Matrix,
    /// The outcome at the target setting that the adversary names.
    pub guess: usize,
}
