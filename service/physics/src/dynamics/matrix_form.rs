//! A dynamical matrix in the form that is cheapest to diagonalise.

use tarehouse_eigensolver::{EigenError, c64, hermitian_eigenvalues, symmetric_eigenvalues};

/// A dynamical matrix, row-major, real where the crystal allows it.
#[derive(Debug, Clone, PartialEq)]
pub enum MatrixForm {
    /// Real symmetric, in the basis of an inversion.
    Real(Vec<f64>),
    /// Hermitian.
    Complex(Vec<c64>),
}

impl MatrixForm {
    /// Eigenvalues, ascending.
    ///
    /// # Errors
    /// Those of the eigensolver.
    pub fn eigenvalues(&self, order: usize) -> Result<Vec<f64>, EigenError> {
        match self {
            Self::Real(matrix) => symmetric_eigenvalues(order, matrix),
            Self::Complex(matrix) => hermitian_eigenvalues(order, matrix),
        }
    }

    /// `factor` times another matrix of the same form, added.
    #[must_use]
    pub fn plus(mut self, other: &Self, factor: f64) -> Self {
        match (&mut self, other) {
            (Self::Real(sum), Self::Real(term)) => {
                sum.iter_mut().zip(term).for_each(|(s, t)| *s += factor * t);
            }
            (Self::Complex(sum), Self::Complex(term)) => {
                sum.iter_mut().zip(term).for_each(|(s, t)| *s += t * factor);
            }
            (Self::Real(_), Self::Complex(_)) | (Self::Complex(_), Self::Real(_)) => {
                debug_assert!(false, "two forms of one crystal are of one kind");
            }
        }
        self
    }

    /// `factor`·v v† added, v in the basis of this form.
    #[must_use]
    pub fn plus_outer(mut self, vector: &[c64], factor: f64) -> Self {
        let order = vector.len();
        match &mut self {
            Self::Real(matrix) => {
                for (row, left) in vector.iter().enumerate() {
                    for (column, right) in vector.iter().enumerate() {
                        matrix[row * order + column] += factor * (left * right.conj()).re;
                    }
                }
            }
            Self::Complex(matrix) => {
                for (row, left) in vector.iter().enumerate() {
                    for (column, right) in vector.iter().enumerate() {
                        matrix[row * order + column] += left * right.conj() * factor;
                    }
                }
            }
        }
        self
    }

    /// v† M v, v in the basis of this form.
    pub fn expectation(&self, vector: &[c64]) -> f64 {
        let order = vector.len();
        let row_product = |row: usize| -> c64 {
            let columns = row * order..(row + 1) * order;
            match self {
                Self::Real(matrix) => matrix[columns]
                    .iter()
                    .zip(vector)
                    .map(|(m, v)| v * *m)
                    .sum(),
                Self::Complex(matrix) => {
                    matrix[columns].iter().zip(vector).map(|(m, v)| m * v).sum()
                }
            }
        };
        vector
            .iter()
            .enumerate()
            .map(|(row, v)| (v.conj() * row_product(row)).re)
            .sum()
    }
}
