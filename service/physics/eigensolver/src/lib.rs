//! The wall round the dense eigensolver.
//!
//! Every Hermitian and real-symmetric eigenproblem of the house passes through the functions of this crate, so that
//! the generic solver behind it is compiled once, here, for the two scalar types in use. Matrices cross the border as
//! plain row-major slices. A decomposition is computed on the calling thread only: its bytes do not depend on how
//! many threads the caller runs side by side.
//!
//! The method is Householder tridiagonalisation followed by divide and conquer (Cuppen, Numer. Math. 36, 177 (1981)),
//! cost O(n³).

use faer::dyn_stack::{MemBuffer, MemStack};
use faer::linalg::evd::{ComputeEigenvectors, self_adjoint_evd, self_adjoint_evd_scratch};
use faer::{Mat, MatRef, Par};

/// Complex numbers as used at the border of this crate.
pub use faer::c64;

/// Why a decomposition could not be computed.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum EigenError {
    /// The slice does not hold `order`² entries.
    Shape {
        /// Order of the matrix that was announced.
        order: usize,
        /// Number of entries found.
        entries: usize,
    },
    /// An entry is infinite or not a number.
    NotFinite,
    /// The iteration did not converge.
    NoConvergence,
}

impl std::fmt::Display for EigenError {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        match self {
            Self::Shape { order, entries } => {
                write!(
                    f,
                    "a matrix of order {order} needs {} entries, got {entries}",
                    order * order
                )
            }
            Self::NotFinite => f.write_str("the matrix holds an entry that is not finite"),
            Self::NoConvergence => f.write_str("the eigenvalue iteration did not converge"),
        }
    }
}

impl std::error::Error for EigenError {}

/// Eigenvalues in ascending order with their orthonormal eigenvectors.
#[derive(Debug, Clone, PartialEq)]
pub struct Eigen<T> {
    /// Eigenvalues, ascending.
    pub values: Vec<f64>,
    /// Eigenvector ν occupies entries `ν·n .. (ν+1)·n`.
    pub vectors: Vec<T>,
}

impl<T> Eigen<T> {
    /// The eigenvector that belongs to `values[branch]`.
    ///
    /// # Panics
    /// If `branch` is not below the number of eigenvalues.
    pub fn vector(&self, branch: usize) -> &[T] {
        let order = self.values.len();
        &self.vectors[branch * order..(branch + 1) * order]
    }
}

/// Eigenvalues of a real symmetric matrix, row-major; only the lower triangle is read.
///
/// # Errors
/// See [`EigenError`].
pub fn symmetric_eigenvalues(order: usize, matrix: &[f64]) -> Result<Vec<f64>, EigenError> {
    check(order, matrix, |x| x.is_finite())?;
    decompose(order, matrix, ComputeEigenvectors::No).map(|eigen| eigen.values)
}

/// Eigenvalues and eigenvectors of a real symmetric matrix, row-major; only the lower triangle is read.
///
/// # Errors
/// See [`EigenError`].
pub fn symmetric_eigen(order: usize, matrix: &[f64]) -> Result<Eigen<f64>, EigenError> {
    check(order, matrix, |x| x.is_finite())?;
    decompose(order, matrix, ComputeEigenvectors::Yes)
}

/// Eigenvalues of a Hermitian matrix, row-major; only the lower triangle is read.
///
/// # Errors
/// See [`EigenError`].
pub fn hermitian_eigenvalues(order: usize, matrix: &[c64]) -> Result<Vec<f64>, EigenError> {
    check(order, matrix, |z| z.re.is_finite() && z.im.is_finite())?;
    decompose(order, matrix, ComputeEigenvectors::No).map(|eigen| eigen.values)
}

/// Eigenvalues and eigenvectors of a Hermitian matrix, row-major; only the lower triangle is read.
///
/// # Errors
/// See [`EigenError`].
pub fn hermitian_eigen(order: usize, matrix: &[c64]) -> Result<Eigen<c64>, EigenError> {
    check(order, matrix, |z| z.re.is_finite() && z.im.is_finite())?;
    decompose(order, matrix, ComputeEigenvectors::Yes)
}

fn check<T>(order: usize, matrix: &[T], finite: impl Fn(&T) -> bool) -> Result<(), EigenError> {
    if order.checked_mul(order) != Some(matrix.len()) {
        return Err(EigenError::Shape {
            order,
            entries: matrix.len(),
        });
    }
    if matrix.iter().all(finite) {
        Ok(())
    } else {
        Err(EigenError::NotFinite)
    }
}

fn decompose<T>(
    order: usize,
    matrix: &[T],
    want: ComputeEigenvectors,
) -> Result<Eigen<T>, EigenError>
where
    T: faer::traits::ComplexField<Real = f64> + Real64Part + Copy,
{
    if order == 0 {
        return Ok(Eigen {
            values: Vec::new(),
            vectors: Vec::new(),
        });
    }
    let source = MatRef::from_row_major_slice(matrix, order, order);
    let mut diagonal = faer::Col::<T>::zeros(order).into_diagonal();
    let mut vectors = match want {
        ComputeEigenvectors::Yes => Some(Mat::<T>::zeros(order, order)),
        ComputeEigenvectors::No => None,
    };
    let scratch = self_adjoint_evd_scratch::<T>(order, want, Par::Seq, faer::Spec::default());
    self_adjoint_evd::<T>(
        source,
        diagonal.as_mut(),
        vectors.as_mut().map(Mat::as_mut),
        Par::Seq,
        MemStack::new(&mut MemBuffer::new(scratch)),
        faer::Spec::default(),
    )
    .map_err(|_| EigenError::NoConvergence)?;
    let values = diagonal
        .column_vector()
        .iter()
        .map(Real64Part::real64)
        .collect();
    let vectors = vectors.map_or_else(Vec::new, |columns| {
        (0..order)
            .flat_map(|branch| columns.col(branch).iter().copied().collect::<Vec<_>>())
            .collect()
    });
    Ok(Eigen { values, vectors })
}

/// The real part of a scalar, for reading eigenvalues off the solver's own diagonal type.
trait Real64Part {
    fn real64(&self) -> f64;
}

impl Real64Part for f64 {
    fn real64(&self) -> f64 {
        *self
    }
}

impl Real64Part for c64 {
    fn real64(&self) -> f64 {
        self.re
    }
}
