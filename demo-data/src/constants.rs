//! Force constants of the infinite lattice: exact, analytic, and of finite range.

use std::collections::BTreeMap;

use nalgebra::{Matrix3, Vector3};
use tarehouse_eigensolver::{c64, hermitian_eigenvalues};
use tarehouse_physics::supercell::Translation;
use tarehouse_physics::{Crystal, ForceConstants, Supercell};

use crate::ModelError;
use crate::molecular_crystal::MolecularCrystal;

/// Block of atom i of the home cell (row) with atom j of the cell at R (column).
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Coupling {
    /// i.
    pub displaced: usize,
    /// j.
    pub response: usize,
    /// R.
    pub translation: Translation,
    /// ∂²E/∂u_i∂u_j, eV/Å².
    pub block: Matrix3<f64>,
}

/// Every non-zero block of the infinite lattice, with the crystal it belongs to.
#[derive(Debug, Clone, PartialEq)]
pub struct RealSpaceConstants {
    crystal: Crystal,
    couplings: Vec<Coupling>,
}

impl RealSpaceConstants {
    /// The constants of a crystal: −H for either order of each pair, +H for the two self blocks, H = ∂²V/∂d².
    ///
    /// # Errors
    /// [`ModelError::Crystal`].
    pub fn of(model: &MolecularCrystal) -> Result<Self, ModelError> {
        let mut blocks: BTreeMap<(usize, usize, Translation), Matrix3<f64>> = BTreeMap::new();
        model.for_each_pair(|pair| {
            let block = pair.value.hessian(&pair.separation);
            let (i, j, there) = (pair.first, pair.second, pair.translation);
            let back = there.map(|x| -x);
            let mut add = |key, part: Matrix3<f64>| {
                *blocks.entry(key).or_insert_with(Matrix3::zeros) += part;
            };
            add((i, j, there), -block);
            add((j, i, back), -block);
            add((i, i, [0, 0, 0]), block);
            add((j, j, [0, 0, 0]), block);
        });
        let couplings = blocks
            .into_iter()
            .map(|((displaced, response, translation), block)| Coupling {
                displaced,
                response,
                translation,
                block,
            })
            .collect();
        Ok(Self {
            crystal: model.to_crystal()?,
            couplings,
        })
    }

    /// The crystal.
    pub fn crystal(&self) -> &Crystal {
        &self.crystal
    }

    /// All blocks, ordered by displaced atom, response atom and translation.
    pub fn couplings(&self) -> &[Coupling] {
        &self.couplings
    }

    /// The constants as any supercell calculation would find them: Φ[l,i,j] = Σ Φ_ij(R) over R ≡ R_l modulo the supercell.
    ///
    /// # Errors
    /// [`ModelError::Constants`].
    pub fn folded(&self, supercell: &Supercell) -> Result<ForceConstants, ModelError> {
        let n = self.crystal.atom_count();
        let mut blocks = vec![Matrix3::zeros(); supercell.cell_count() * n * n];
        for coupling in &self.couplings {
            let cell = supercell.index_of(&coupling.translation);
            blocks[(cell * n + coupling.displaced) * n + coupling.response] += coupling.block;
        }
        ForceConstants::from_blocks(supercell.clone(), n, blocks)
            .map_err(|error| ModelError::Constants(error.to_string()))
    }

    /// The exact dynamical matrix at q (fractional reciprocal coordinates), row-major, eV/Å²/u:
    /// D_ij = Σ_R Φ_ij(R) exp(2πi q·(R + s_j − s_i)) / √(m_i m_j).
    pub fn dynamical_matrix(&self, q: &Vector3<f64>) -> Vec<c64> {
        let positions = self.crystal.positions();
        let mut builder = PhaseSum::new(&self.crystal);
        for coupling in &self.couplings {
            let (i, j) = (coupling.displaced, coupling.response);
            let cell = Vector3::from(coupling.translation.map(|x| x as f64));
            let phase = q.dot(&(cell + positions[j] - positions[i]));
            builder.add(i, j, &coupling.block, phase, 1.0);
        }
        builder.finish()
    }

    /// Eigenvalues of the exact dynamical matrix at q, ascending, eV/Å²/u.
    ///
    /// # Errors
    /// [`ModelError::Eigenproblem`].
    pub fn eigenvalues(&self, q: &Vector3<f64>) -> Result<Vec<f64>, ModelError> {
        hermitian_eigenvalues(3 * self.crystal.atom_count(), &self.dynamical_matrix(q))
            .map_err(|error| ModelError::Eigenproblem(error.to_string()))
    }
}

/// A dynamical matrix under construction.
#[derive(Debug)]
pub(crate) struct PhaseSum {
    order: usize,
    roots: Vec<f64>,
    matrix: Vec<c64>,
}

impl PhaseSum {
    pub(crate) fn new(crystal: &Crystal) -> Self {
        let order = 3 * crystal.atom_count();
        Self {
            order,
            roots: crystal.masses_u().iter().map(|m| 1.0 / m.sqrt()).collect(),
            matrix: vec![c64::new(0.0, 0.0); order * order],
        }
    }

    /// Adds `weight`·Φ·exp(2πi·`turns`)/√(m_i m_j) to block (i, j).
    pub(crate) fn add(
        &mut self,
        i: usize,
        j: usize,
        block: &Matrix3<f64>,
        turns: f64,
        weight: f64,
    ) {
        let (sin, cos) = (2.0 * std::f64::consts::PI * turns).sin_cos();
        let scale = weight * self.roots[i] * self.roots[j];
        for a in 0..3 {
            for b in 0..3 {
                let value = scale * block[(a, b)];
                let entry = &mut self.matrix[(3 * i + a) * self.order + 3 * j + b];
                *entry += c64::new(value * cos, value * sin);
            }
        }
    }

    /// The Hermitian part of the sum.
    pub(crate) fn finish(self) -> Vec<c64> {
        let (order, matrix) = (self.order, self.matrix);
        (0..order * order)
            .map(|k| {
                let (row, column) = (k / order, k % order);
                let mirrored = matrix[column * order + row];
                (matrix[k] + mirrored.conj()) * 0.5
            })
            .collect()
    }
}
