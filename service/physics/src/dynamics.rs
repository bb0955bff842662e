//! The dynamical matrix in the atom-phase form, and its modes.
//!
//! D_ij(q) = Σ_l Φ[l,i,j] ⟨exp(i q·(R + r_j − r_i))⟩ / sqrt(m_i m_j), the mean over the nearest images R of the pair,
//! hermitised (Maradudin, Montroll, Weiss & Ipatova, Theory of Lattice Dynamics in the Harmonic Approximation, 1971).
//! Eigenvalues λ = ω² in eV/Å²/u. q in fractional reciprocal coordinates. At wave vectors that fit the supercell the
//! result is exact whatever the range of the constants (Parlinski, Li & Kawazoe, Phys. Rev. Lett. 78, 4063 (1997)).
//!
//! Where the constants obey an inversion i → i', D_i'j'(q) = D_ij(q)* in this form, and in the basis
//! u₊ = (e_i + e_i')/√2, u₋ = i(e_i − e_i')/√2 (self-mapped atoms keep e_i) the matrix is real symmetric.

use std::f64::consts::{FRAC_1_SQRT_2, SQRT_2, TAU};

use nalgebra::{Matrix3, Vector3};
use tarehouse_eigensolver::{
    Eigen, EigenError, c64, hermitian_eigen, hermitian_eigenvalues, symmetric_eigen,
    symmetric_eigenvalues,
};

use crate::crystal::Crystal;
use crate::force_constants::ForceConstants;
use crate::images::{ImageSearch, ImageTranslation, PairImages, image_vector};
use crate::symmetry::Operation;

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

/// Crystal, constants and images, ready to make D(q).
#[derive(Debug, Clone)]
pub struct Dynamics {
    crystal: Crystal,
    constants: ForceConstants,
    images: PairImages,
    inverse_sqrt_masses: Vec<f64>,
    inversion: Option<InversionBasis>,
}

impl Dynamics {
    /// For constants of any kind: complex arithmetic.
    pub fn new(crystal: &Crystal, constants: &ForceConstants, images: &PairImages) -> Self {
        Self {
            crystal: crystal.clone(),
            constants: constants.clone(),
            images: images.clone(),
            inverse_sqrt_masses: crystal
                .masses_u()
                .iter()
                .map(|m| m.sqrt().recip())
                .collect(),
            inversion: None,
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

    /// The constants.
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

    /// D(q) with a sharing of the images. [`Sharing::InversePower`] is slower: its shares are not stored.
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
        let search = ImageSearch::new(&self.crystal, supercell);
        let phases = Phases::new(q);
        let mut matrix = vec![c64::new(0.0, 0.0); 9 * rows.len() * n];
        for (row, &i) in rows.iter().enumerate() {
            for j in 0..n {
                let mut sum = [[c64::new(0.0, 0.0); 3]; 3];
                for cell in 0..supercell.cell_count() {
                    let phase = match sharing {
                        Sharing::Nearest => phases.mean(self.images.of(cell, i, j)),
                        Sharing::InversePower => phases.inverse_power(&search, cell, i, j),
                    };
                    add_scaled(&mut sum, self.constants.block(cell, i, j), phase);
                }
                let offset = TAU * q.dot(&(positions[j] - positions[i]));
                let scale = self.inverse_sqrt_masses[i] * self.inverse_sqrt_masses[j];
                let common = c64::new(offset.cos(), offset.sin()) * scale;
                for a in 0..3 {
                    for b in 0..3 {
                        matrix[((3 * row + a) * n + j) * 3 + b] = sum[a][b] * common;
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

/// exp(2πi q·R) for integer R, from powers along each axis.
struct Phases {
    q: Vector3<f64>,
    tables: [Vec<c64>; 3],
}

/// Translations up to this many cells are looked up.
const PHASE_TABLE_REACH: i32 = 32;

impl Phases {
    fn new(q: &Vector3<f64>) -> Self {
        let tables = std::array::from_fn(|axis| {
            (-PHASE_TABLE_REACH..=PHASE_TABLE_REACH)
                .map(|k| {
                    let angle = TAU * q[axis] * f64::from(k);
                    c64::new(angle.cos(), angle.sin())
                })
                .collect()
        });
        Self { q: *q, tables }
    }

    fn of(&self, image: &ImageTranslation) -> c64 {
        let look_up = |axis: usize| {
            let place = usize::try_from(image[axis] + PHASE_TABLE_REACH).ok()?;
            self.tables[axis].get(place).copied()
        };
        match (look_up(0), look_up(1), look_up(2)) {
            (Some(x), Some(y), Some(z)) => x * y * z,
            _ => {
                let angle = TAU * self.q.dot(&image_vector(image));
                c64::new(angle.cos(), angle.sin())
            }
        }
    }

    fn mean(&self, images: &[ImageTranslation]) -> c64 {
        let sum: c64 = images.iter().map(|image| self.of(image)).sum();
        sum / images.len() as f64
    }

    /// Mean phase with shares ∝ d⁻⁸ over all images searched; an atom with itself keeps its constant.
    fn inverse_power(&self, search: &ImageSearch<'_>, cell: usize, i: usize, j: usize) -> c64 {
        /// Images nearer than this are the atom itself.
        const SAME_ATOM_ANG: f64 = 1e-6;
        let (mut sum, mut total) = (c64::new(0.0, 0.0), 0.0);
        for (image, distance) in search.candidates(cell, i, j) {
            if distance < SAME_ATOM_ANG {
                return self.of(&image);
            }
            let share = distance.powi(-8);
            sum += self.of(&image) * share;
            total += share;
        }
        sum / total
    }
}

/// The basis in which a centrosymmetric dynamical matrix is real.
#[derive(Debug, Clone)]
struct InversionBasis {
    /// Atoms on inversion centres.
    fixed: Vec<usize>,
    /// Pairs (i, i').
    pairs: Vec<(usize, usize)>,
}

impl InversionBasis {
    fn new(permutation: &[usize]) -> Self {
        let images = permutation.iter().copied().enumerate();
        let fixed = images
            .clone()
            .filter(|(i, image)| i == image)
            .map(|(i, _)| i)
            .collect();
        let pairs = images.filter(|(i, image)| i < image).collect();
        Self { fixed, pairs }
    }

    /// Rows of D that the real form needs: fixed atoms, then the first of each pair.
    fn representatives(&self) -> Vec<usize> {
        self.fixed
            .iter()
            .copied()
            .chain(self.pairs.iter().map(|pair| pair.0))
            .collect()
    }

    /// The real matrix, row-major, from the rows of [`Self::representatives`]. Basis order: fixed atoms, all u₊, all u₋.
    fn real_form(&self, atom_count: usize, rows: &[c64]) -> Vec<f64> {
        let order = 3 * atom_count;
        let (fixed, pairs) = (self.fixed.len(), self.pairs.len());
        let d = |row: usize, j: usize| rows[row * order + j];
        let mut real = vec![0.0; order * order];
        for k in 0..3 * fixed {
            for (s, &atom) in self.fixed.iter().enumerate() {
                for b in 0..3 {
                    real[k * order + 3 * s + b] = d(k, 3 * atom + b).re;
                }
            }
            for (p, &(j, _)) in self.pairs.iter().enumerate() {
                for b in 0..3 {
                    let c = d(k, 3 * j + b);
                    real[k * order + 3 * (fixed + p) + b] = SQRT_2 * c.re;
                    real[k * order + 3 * (fixed + pairs + p) + b] = -SQRT_2 * c.im;
                }
            }
        }
        for k in 0..3 * pairs {
            let (plus, minus) = (3 * fixed + k, 3 * (fixed + pairs) + k);
            for (p, &(j, image)) in self.pairs.iter().enumerate() {
                for b in 0..3 {
                    let (a, partner) = (d(plus, 3 * j + b), d(plus, 3 * image + b));
                    let (plus_b, minus_b) = (3 * (fixed + p) + b, 3 * (fixed + pairs + p) + b);
                    real[plus * order + plus_b] = a.re + partner.re;
                    real[minus * order + minus_b] = a.re - partner.re;
                    real[plus * order + minus_b] = partner.im - a.im;
                    real[minus * order + plus_b] = a.im + partner.im;
                }
            }
        }
        mirror_upper(order, 3 * fixed, &mut real);
        real
    }

    /// Atomic amplitudes in the basis of the real form; complex unless their phase was chosen by it.
    fn to_real(&self, atoms: &[c64]) -> Vec<c64> {
        let mut vector = vec![c64::new(0.0, 0.0); atoms.len()];
        let (fixed, pairs) = (self.fixed.len(), self.pairs.len());
        for (s, &atom) in self.fixed.iter().enumerate() {
            for a in 0..3 {
                vector[3 * s + a] = atoms[3 * atom + a];
            }
        }
        for (p, &(i, image)) in self.pairs.iter().enumerate() {
            for a in 0..3 {
                let (first, second) = (atoms[3 * i + a], atoms[3 * image + a]);
                vector[3 * (fixed + p) + a] = (first + second) * FRAC_1_SQRT_2;
                let minus = (first - second) * FRAC_1_SQRT_2;
                vector[3 * (fixed + pairs + p) + a] = minus * c64::new(0.0, -1.0);
            }
        }
        vector
    }

    /// An eigenvector of the real form as mass-weighted atomic amplitudes.
    fn to_atoms(&self, vector: &[f64]) -> Vec<c64> {
        let mut atoms = vec![c64::new(0.0, 0.0); vector.len()];
        let (fixed, pairs) = (self.fixed.len(), self.pairs.len());
        for (s, &atom) in self.fixed.iter().enumerate() {
            for a in 0..3 {
                atoms[3 * atom + a] = c64::new(vector[3 * s + a], 0.0);
            }
        }
        for (p, &(i, image)) in self.pairs.iter().enumerate() {
            for a in 0..3 {
                let plus = vector[3 * (fixed + p) + a] * FRAC_1_SQRT_2;
                let minus = vector[3 * (fixed + pairs + p) + a] * FRAC_1_SQRT_2;
                atoms[3 * i + a] = c64::new(plus, minus);
                atoms[3 * image + a] = c64::new(plus, -minus);
            }
        }
        atoms
    }
}

/// Fills the columns below `fixed` from the rows above, then makes the matrix symmetric to the last bit.
fn mirror_upper(order: usize, fixed: usize, real: &mut [f64]) {
    for row in fixed..order {
        for column in 0..fixed {
            real[row * order + column] = real[column * order + row];
        }
    }
    for row in 0..order {
        for column in 0..row {
            let mean = 0.5 * (real[row * order + column] + real[column * order + row]);
            real[row * order + column] = mean;
            real[column * order + row] = mean;
        }
    }
}
