//! The dynamical matrix in the atom-phase form, and its modes.
//!
//! D_ij(q) = Σ_l Φ[l,i,j] ⟨exp(i q·(R + r_j − r_i))⟩ / sqrt(m_i m_j), the mean over the nearest images R of the pair,
//! hermitised (Maradudin, Montroll, Weiss & Ipatova, Theory of Lattice Dynamics in the Harmonic Approximation, 1971).
//! Eigenvalues λ = ω² in eV/Å²/u. q in fractional reciprocal coordinates. At wave vectors that fit the supercell the
//! result is exact whatever the range of the constants (Parlinski, Li & Kawazoe, Phys. Rev. Lett. 78, 4063 (1997)).
//!
//! Where the constants obey an inversion i → i', D_i'j'(q) = D_ij(q)* in this form, and in the basis
//! u₊ = (e_i + e_i')/√2, u₋ = i(e_i − e_i')/√2 (self-mapped atoms keep e_i) the matrix is real symmetric.

mod inversion;
mod matrix_form;
mod phases;

use std::f64::consts::TAU;
use std::sync::{Arc, OnceLock};

use nalgebra::{Matrix3, Vector3};
use tarehouse_eigensolver::{Eigen, EigenError, c64, hermitian_eigen, symmetric_eigen};

use crate::crystal::Crystal;
use crate::dipoles::Dipoles;
use crate::force_constants::ForceConstants;
use crate::images::{ImageShares, PairImages};
use crate::projection::translation_free;
use crate::symmetry::Operation;
use inversion::InversionBasis;
pub use matrix_form::MatrixForm;
use phases::Phases;

/// How the images of a pair share its constant.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Sharing {
    /// The nearest images share equally.
    Nearest,
    /// Every image has a share ∝ d⁻⁸: a softer interpolation, equal at commensurate wave vectors, whose distance from the
    /// first measures aliasing.
    InversePower,
}

/// Modes at one wave vector.
#[derive(Debug, Clone, PartialEq)]
pub struct Modes {
    /// Eigenvalues λ = ω², eV/Å²/u, ascending.
    pub eigenvalues: Vec<f64>,
    /// Mass-weighted eigenvectors in the atom-phase form; that of branch ν in entries 3nν .. 3n(ν+1).
    pub vectors: Vec<c64>,
}

impl Modes {
    /// The eigenvector of a branch. At Γ without the acoustic branches there are fewer branches than components.
    ///
    /// # Panics
    /// If there is no such branch.
    pub fn vector(&self, branch: usize) -> &[c64] {
        let components = self.vectors.len() / self.eigenvalues.len().max(1);
        &self.vectors[branch * components..(branch + 1) * components]
    }
}

/// Crystal, constants and images, ready to make D(q).
#[derive(Debug, Clone)]
pub struct Dynamics {
    crystal: Crystal,
    /// What is interpolated: all constants, or the short-range part where dipoles are set apart.
    constants: ForceConstants,
    dipoles: Option<Arc<Dipoles>>,
    images: PairImages,
    inverse_sqrt_masses: Vec<f64>,
    inversion: Option<InversionBasis>,
    /// Made when first asked for: only the measure of aliasing needs them.
    inverse_power: OnceLock<ImageShares>,
}

impl Dynamics {
    /// For constants of any kind: complex arithmetic.
    pub fn new(crystal: &Crystal, constants: &ForceConstants, images: &PairImages) -> Self {
        Self {
            crystal: crystal.clone(),
            constants: constants.clone(),
            dipoles: None,
            images: images.clone(),
            inverse_sqrt_masses: crystal
                .masses_u()
                .iter()
                .map(|m| m.sqrt().recip())
                .collect(),
            inversion: None,
            inverse_power: OnceLock::new(),
        }
    }

    /// For constants and positions that obey `inversion` exactly: real arithmetic, three to four times as fast.
    pub fn with_inversion(
        crystal: &Crystal,
        constants: &ForceConstants,
        images: &PairImages,
        inversion: &Operation,
    ) -> Self {
        let inversion = Some(InversionBasis::new(&inversion.permutation));
        Self {
            inversion,
            ..Self::new(crystal, constants, images)
        }
    }

    /// The crystal.
    pub fn crystal(&self) -> &Crystal {
        &self.crystal
    }

    /// The same with the dipole–dipole part set apart: it is taken out of the constants as far as it is folded into their
    /// supercell, and added to D(q) in full (Gonze & Lee, Phys. Rev. B 55, 10355 (1997)). Commensurate q stay exact.
    /// `folded` must be [`Dipoles::folded`] for the supercell of the constants, and the atoms the same.
    #[must_use]
    pub fn separating(mut self, dipoles: &Arc<Dipoles>, folded: &ForceConstants) -> Self {
        let parts = folded.blocks();
        self.constants = self.constants.map_blocks(|flat, block| block - parts[flat]);
        self.dipoles = Some(Arc::clone(dipoles));
        self
    }

    /// The same with the dipole–dipole part added to constants that lack it. Arguments as in [`Dynamics::separating`].
    #[must_use]
    pub fn adding(mut self, dipoles: &Arc<Dipoles>, folded: &ForceConstants) -> Self {
        // The sum is the translation-free dipole part; what its own self terms leave is spread over the constants.
        let (parts, closed) = (folded.blocks(), translation_free(folded));
        let closed = closed.blocks();
        self.constants = self
            .constants
            .map_blocks(|flat, block| block + closed[flat] - parts[flat]);
        self.dipoles = Some(Arc::clone(dipoles));
        self
    }

    /// The dipole–dipole part that is set apart.
    pub fn dipoles(&self) -> Option<&Dipoles> {
        self.dipoles.as_deref()
    }

    /// The constants that are interpolated: without the dipole–dipole part where that is set apart.
    pub fn constants(&self) -> &ForceConstants {
        &self.constants
    }

    /// The images.
    pub fn images(&self) -> &PairImages {
        &self.images
    }

    /// Number of branches, 3n.
    pub fn branch_count(&self) -> usize {
        3 * self.crystal.atom_count()
    }

    /// Eigenvalues at q, ascending.
    ///
    /// # Errors
    /// Those of the eigensolver.
    pub fn eigenvalues(&self, q: &Vector3<f64>) -> Result<Vec<f64>, EigenError> {
        self.form(q, Sharing::Nearest)
            .eigenvalues(self.branch_count())
    }

    /// Eigenvalues and eigenvectors at q.
    ///
    /// # Errors
    /// Those of the eigensolver.
    pub fn modes(&self, q: &Vector3<f64>) -> Result<Modes, EigenError> {
        self.modes_of(&self.form(q, Sharing::Nearest))
    }

    /// D(q), row-major, 3n × 3n, Hermitian; eV/Å²/u. Cost O(L n²).
    pub fn matrix(&self, q: &Vector3<f64>) -> Vec<c64> {
        self.matrix_with(q, Sharing::Nearest)
    }

    /// D(q) with a sharing of the images.
    pub fn matrix_with(&self, q: &Vector3<f64>, sharing: Sharing) -> Vec<c64> {
        let rows: Vec<usize> = (0..self.crystal.atom_count()).collect();
        let mut matrix = self.rows(q, &rows, sharing);
        hermitise(self.branch_count(), &mut matrix);
        matrix
    }

    /// D(q) in the form that is cheapest to diagonalise: real where an inversion is known.
    pub fn form(&self, q: &Vector3<f64>, sharing: Sharing) -> MatrixForm {
        match &self.inversion {
            Some(basis) => {
                let rows = self.rows(q, &basis.representatives(), sharing);
                MatrixForm::Real(basis.real_form(self.crystal.atom_count(), &rows))
            }
            None => MatrixForm::Complex(self.matrix_with(q, sharing)),
        }
    }

    /// Modes of a matrix that [`Dynamics::form`] made, or of a sum of such matrices.
    ///
    /// # Errors
    /// Those of the eigensolver.
    pub fn modes_of(&self, form: &MatrixForm) -> Result<Modes, EigenError> {
        let order = self.branch_count();
        match form {
            MatrixForm::Real(matrix) => {
                let Eigen { values, vectors } = symmetric_eigen(order, matrix)?;
                let vectors = match &self.inversion {
                    Some(basis) => vectors
                        .chunks(order)
                        .flat_map(|v| basis.to_atoms(v))
                        .collect(),
                    None => vectors.into_iter().map(|x| c64::new(x, 0.0)).collect(),
                };
                Ok(Modes {
                    eigenvalues: values,
                    vectors,
                })
            }
            MatrixForm::Complex(matrix) => {
                let Eigen { values, vectors } = hermitian_eigen(order, matrix)?;
                Ok(Modes {
                    eigenvalues: values,
                    vectors,
                })
            }
        }
    }

    /// A vector of atomic amplitudes in the basis of [`Dynamics::form`].
    pub fn to_form_basis(&self, vector: &[c64]) -> Vec<c64> {
        match &self.inversion {
            Some(basis) => basis.to_real(vector),
            None => vector.to_vec(),
        }
    }

    fn rows(&self, q: &Vector3<f64>, rows: &[usize], sharing: Sharing) -> Vec<c64> {
        let n = self.crystal.atom_count();
        let supercell = self.constants.supercell();
        let positions = self.crystal.positions();
        let shares = match sharing {
            Sharing::Nearest => None,
            Sharing::InversePower => Some(
                self.inverse_power
                    .get_or_init(|| ImageShares::inverse_power(&self.crystal, supercell)),
            ),
        };
        let phases = Phases::new(q);
        let mut matrix = match &self.dipoles {
            Some(dipoles) => dipoles.rows(q, rows),
            None => vec![c64::new(0.0, 0.0); 9 * rows.len() * n],
        };
        for (row, &i) in rows.iter().enumerate() {
            for j in 0..n {
                let mut sum = [[c64::new(0.0, 0.0); 3]; 3];
                for cell in 0..supercell.cell_count() {
                    let phase = match shares {
                        None => phases.mean(self.images.of(cell, i, j)),
                        Some(shares) => phases.weighted(shares.of(cell, i, j)),
                    };
                    add_scaled(&mut sum, self.constants.block(cell, i, j), phase);
                }
                let offset = TAU * q.dot(&(positions[j] - positions[i]));
                let scale = self.inverse_sqrt_masses[i] * self.inverse_sqrt_masses[j];
                let common = c64::new(offset.cos(), offset.sin()) * scale;
                for a in 0..3 {
                    for b in 0..3 {
                        let element = &mut matrix[((3 * row + a) * n + j) * 3 + b];
                        *element = *element * scale + sum[a][b] * common;
                    }
                }
            }
        }
        matrix
    }
}

/// Φ·phase added to a 3×3 complex sum.
fn add_scaled(sum: &mut [[c64; 3]; 3], block: &Matrix3<f64>, phase: c64) {
    for a in 0..3 {
        for b in 0..3 {
            sum[a][b] += phase * block[(a, b)];
        }
    }
}

fn hermitise(order: usize, matrix: &mut [c64]) {
    for row in 0..order {
        for column in 0..=row {
            let (lower, upper) = (row * order + column, column * order + row);
            let mean = (matrix[lower] + matrix[upper].conj()) * 0.5;
            matrix[lower] = mean;
            matrix[upper] = mean.conj();
        }
    }
}
