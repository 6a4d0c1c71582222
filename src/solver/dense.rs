//! Dense symmetric matrices: factors, inverses and how far one can go before it stops being positive. The arithmetic is faer's.

use faer::{
    MatMut, MatRef, Par, Side,
    linalg::{
        solvers::{Llt, Solve},
        triangular_solve::solve_lower_triangular_in_place,
    },
};
use nalgebra::DMatrix;

/// The Cholesky factor of a positive definite matrix.
pub struct Cholesky(Llt<f64>);

impl Cholesky {
    /// Reads the lower triangle; `None` if the matrix is not positive definite, up to rounding.
    pub fn new(matrix: &DMatrix<f64>) -> Option<Self> {
        Llt::new(view(matrix), Side::Lower).ok().map(Self)
    }

    /// The same for a matrix that may miss being positive definite by rounding: as little is added to its diagonal as makes it so.
    pub fn shifted(matrix: &mut DMatrix<f64>) -> Option<Self> {
        let diagonal = matrix.diagonal();
        [1e-14, 1e-12, 1e-10, 1e-8].into_iter().find_map(|share| {
            matrix.set_diagonal(&diagonal.map(|value| value + share * value.abs()));
            let factor = Self::new(matrix);
            matrix.set_diagonal(&diagonal);
            factor
        })
    }

    /// Solves for each column.
    pub fn solve(&self, right: &mut DMatrix<f64>) {
        let (rows, columns) = right.shape();
        self.0.solve_in_place(MatMut::from_column_major_slice_mut(right.as_mut_slice(), rows, columns));
    }

    /// Solves for one right-hand side.
    pub fn solve_one(&self, right: &mut [f64]) {
        let rows = right.len();
        self.0.solve_in_place(MatMut::from_column_major_slice_mut(right, rows, 1));
    }

    /// The inverse of the matrix.
    pub fn inverse(&self, side: usize) -> DMatrix<f64> {
        let mut inverse = DMatrix::identity(side, side);
        self.solve(&mut inverse);
        symmetric_part(&mut inverse);
        inverse
    }

    /// The largest `t` for which `matrix + t · step` is positive semidefinite; `None` if that cannot be computed.
    pub fn reach(&self, step: &DMatrix<f64>) -> Option<f64> {
        // The eigenvalues of L⁻¹ D L⁻ᵀ.
        let mut scaled = step.clone();
        for _ in 0..2 {
            let (rows, columns) = scaled.shape();
            let matrix = MatMut::from_column_major_slice_mut(scaled.as_mut_slice(), rows, columns);
            solve_lower_triangular_in_place(self.0.L(), matrix, Par::Seq);
            scaled.transpose_mut();
        }
        let eigenvalues = view(&scaled).self_adjoint_eigenvalues(Side::Lower).ok()?;
        let least = eigenvalues.into_iter().fold(f64::INFINITY, f64::min);
        Some(if least < 0.0 { -1.0 / least } else { f64::INFINITY })
    }
}

fn view(matrix: &DMatrix<f64>) -> MatRef<'_, f64> {
    MatRef::from_column_major_slice(matrix.as_slice(), matrix.nrows(), matrix.ncols())
}

/// Replaces a square matrix by its symmetric part.
pub fn symmetric_part(matrix: &mut DMatrix<f64>) {
    for column in 1..matrix.ncols() {
        for row in 0..column {
            let mean = 0.5 * (matrix[(row, column)] + matrix[(column, row)]);
            matrix[(row, column)] = mean;
            matrix[(column, row)] = mean;
        }
    }
}
