//! What is true of a crystal: its dynamical matrix at any wave vector, its free energy, its supercells.
//!
//! The matrix is summed over unfolded constants, so that nothing is interpolated and nothing is aliased.

use std::f64::consts::TAU;

use nalgebra::{Matrix3, Vector3};
use tarehouse_demo_data::RealSpaceConstants;
use tarehouse_demo_data::constants::Coupling;
use tarehouse_physics::dynamics::{Dynamics, MatrixForm};
use tarehouse_physics::gamma_point::GammaCorrection;
use tarehouse_physics::images::PairImages;
use tarehouse_physics::long_wave::AcousticMatrix;
use tarehouse_physics::qmesh::QMesh;
use tarehouse_physics::supercell::Translation;
use tarehouse_physics::symmetry::SpaceGroup;
use tarehouse_physics::units::EV_TO_KJ_PER_MOL;
use tarehouse_physics::{Crystal, ForceConstants, Supercell, c64, vibrations};

use crate::judgement::compounds::CUTOFF;
use crate::judgement::{BenchError, TEMPERATURES_K};

/// Spacing of the mesh of the true free energy, Å⁻¹.
pub const FINE_SPACING_PER_ANG: f64 = 0.10;
/// Tolerance at which the group of a model is found, Å.
pub const SYMMETRY_TOLERANCE_ANG: f64 = 1e-3;
/// Distances that differ by less are ties, Å.
pub const TIE_ANG: f64 = 1e-3;
/// Long-wave stiffness is lifted to this share of the mean; a stable crystal does not come near it.
const STIFFNESS_FLOOR: f64 = 1e-6;

/// Constants of the infinite lattice.
#[derive(Debug, Clone)]
pub struct Exact {
    crystal: Crystal,
    couplings: Vec<Coupling>,
}

impl Exact {
    /// The constants of a model.
    pub fn of(constants: &RealSpaceConstants) -> Self {
        Self {
            crystal: constants.crystal().clone(),
            couplings: constants.couplings().to_vec(),
        }
    }

    /// The crystal.
    pub fn crystal(&self) -> &Crystal {
        &self.crystal
    }

    /// The same crystal with more couplings.
    #[must_use]
    pub fn with(&self, added: &[Coupling]) -> Self {
        let couplings = self.couplings.iter().chain(added).copied().collect();
        Self {
            crystal: self.crystal.clone(),
            couplings,
        }
    }

    /// The same crystal with every atom written inside the cell, so that molecules reach over its border.
    ///
    /// # Errors
    /// [`BenchError::Malformed`].
    pub fn wrapped(&self) -> Result<Self, BenchError> {
        let moves: Vec<Vector3<f64>> = self
            .crystal
            .positions()
            .iter()
            .map(|x| x.map(f64::floor))
            .collect();
        let positions = self.crystal.positions().iter().zip(&moves);
        let crystal = self
            .crystal
            .with_positions(positions.map(|(x, moved)| x - moved).collect())
            .map_err(|errors| BenchError::Malformed(format!("{errors:?}")))?;
        let whole = |x: f64| -> i64 {
            #[allow(clippy::cast_possible_truncation, reason = "a few cells at most")]
            let count = x as i64;
            count
        };
        let couplings = self
            .couplings
            .iter()
            .map(|coupling| {
                let offset = moves[coupling.response] - moves[coupling.displaced];
                let translation =
                    std::array::from_fn(|c| coupling.translation[c] + whole(offset[c]));
                Coupling {
                    translation,
                    ..*coupling
                }
            })
            .collect();
        Ok(Self { crystal, couplings })
    }

    /// The constants as a supercell calculation finds them.
    ///
    /// # Errors
    /// [`BenchError::Malformed`].
    pub fn folded(&self, supercell: &Supercell) -> Result<ForceConstants, BenchError> {
        let n = self.crystal.atom_count();
        let mut blocks = vec![Matrix3::zeros(); supercell.cell_count() * n * n];
        for coupling in &self.couplings {
            let cell = supercell.index_of(&coupling.translation);
            blocks[(cell * n + coupling.displaced) * n + coupling.response] += coupling.block;
        }
        constants_of(supercell, n, blocks)
    }

    /// Exact eigenvalues at q (fractional reciprocal coordinates), ascending, eV/Å²/u.
    ///
    /// # Errors
    /// [`BenchError::Eigen`].
    pub fn eigenvalues(&self, q: &Vector3<f64>) -> Result<Vec<f64>, BenchError> {
        let order = 3 * self.crystal.atom_count();
        MatrixForm::Complex(self.matrix(q))
            .eigenvalues(order)
            .map_err(|error| BenchError::Eigen(error.to_string()))
    }

    /// D_ij(q) = Σ_R Φ_ij(R) exp(2πi q·(R + s_j − s_i))/√(m_i m_j), row-major.
    fn matrix(&self, q: &Vector3<f64>) -> Vec<c64> {
        let order = 3 * self.crystal.atom_count();
        let (positions, masses) = (self.crystal.positions(), self.crystal.masses_u());
        let mut matrix = vec![c64::new(0.0, 0.0); order * order];
        for coupling in &self.couplings {
            let (i, j) = (coupling.displaced, coupling.response);
            let cell = Vector3::from(coupling.translation.map(|x| x as f64));
            let (sin, cos) = (TAU * q.dot(&(cell + positions[j] - positions[i]))).sin_cos();
            let scale = 1.0 / (masses[i] * masses[j]).sqrt();
            for a in 0..3 {
                for b in 0..3 {
                    let value = scale * coupling.block[(a, b)];
                    matrix[(3 * i + a) * order + 3 * j + b] += c64::new(value * cos, value * sin);
                }
            }
        }
        matrix
    }

    /// Lowest eigenvalue over the points of a mesh, with its wave vector; rigid translations at Γ left out.
    ///
    /// # Errors
    /// [`BenchError::Eigen`].
    pub fn lowest(&self, mesh: &QMesh) -> Result<(f64, Vector3<f64>), BenchError> {
        let mut lowest = (f64::INFINITY, Vector3::zeros());
        for (index, point) in mesh.points().iter().enumerate() {
            let values = self.eigenvalues(&point.q)?;
            let values = if index == 0 {
                without_rigid(values)
            } else {
                values
            };
            if let Some(value) = values.first().filter(|x| **x < lowest.0) {
                lowest = (*value, point.q);
            }
        }
        Ok(lowest)
    }
}

/// Constants from blocks.
///
/// # Errors
/// [`BenchError::Malformed`].
pub fn constants_of(
    supercell: &Supercell,
    atom_count: usize,
    blocks: Vec<Matrix3<f64>>,
) -> Result<ForceConstants, BenchError> {
    ForceConstants::from_blocks(supercell.clone(), atom_count, blocks)
        .map_err(|error| BenchError::Malformed(error.to_string()))
}

/// A supercell with these multiples of the cell vectors.
///
/// # Errors
/// [`BenchError::Malformed`].
pub fn diagonal(multiples: [i64; 3]) -> Result<Supercell, BenchError> {
    let matrix =
        std::array::from_fn(|r| std::array::from_fn(|c| if r == c { multiples[r] } else { 0 }));
    Supercell::with_default_translations(matrix)
        .map_err(|errors| BenchError::Malformed(format!("{errors:?}")))
}

/// Least multiples of the cell vectors at which all heights of the supercell reach `least_ang`.
pub fn multiples_reaching(heights_ang: &Vector3<f64>, least_ang: f64) -> [i64; 3] {
    std::array::from_fn(|c| {
        let mut count = 1;
        while count as f64 * heights_ang[c] < least_ang {
            count += 1;
        }
        count
    })
}

/// The group of a crystal.
///
/// # Errors
/// [`BenchError::Malformed`].
pub fn group_of(crystal: &Crystal) -> Result<SpaceGroup, BenchError> {
    SpaceGroup::find(crystal, SYMMETRY_TOLERANCE_ANG)
        .map_err(|error| BenchError::Malformed(error.to_string()))
}

/// A mesh of this spacing (Å⁻¹) over the single cell.
///
/// # Errors
/// [`BenchError::Malformed`].
pub fn mesh_of(crystal: &Crystal, spacing_per_ang: f64) -> Result<QMesh, BenchError> {
    let group = group_of(crystal)?;
    let cell = diagonal([1; 3])?;
    Ok(QMesh::standard(crystal, &cell, &group, spacing_per_ang))
}

/// The spectrum at Γ without the three values nearest to zero.
fn without_rigid(mut values: Vec<f64>) -> Vec<f64> {
    values.sort_by(|a, b| a.abs().total_cmp(&b.abs()));
    let mut rest = values.split_off(3.min(values.len()));
    rest.sort_by(f64::total_cmp);
    rest
}

/// What is known of a stable crystal.
#[derive(Debug, Clone, PartialEq)]
pub struct StableTruth {
    /// Vibrational free energy at [`TEMPERATURES_K`], kJ/mol per molecule.
    pub free_energy_kj_per_mol: [f64; 4],
    /// Lowest eigenvalue of the fine mesh, rigid translations left out, eV/Å²/u.
    pub lowest: f64,
}

/// The true free energy of a crystal, or `None` where a mode of the fine mesh or a long wave is not positive.
///
/// # Errors
/// [`BenchError`].
pub fn stable_truth(
    exact: &Exact,
    heights_ang: &Vector3<f64>,
    molecule_count: usize,
) -> Result<Option<StableTruth>, BenchError> {
    let crystal = exact.crystal();
    // No contact is folded upon another in so large a supercell: the long-wave limit is exact.
    let large = diagonal(multiples_reaching(heights_ang, 2.0 * CUTOFF + 0.1))?;
    let images = PairImages::find(crystal, &large, TIE_ANG);
    let dynamics = Dynamics::new(crystal, &exact.folded(&large)?, &images);
    let acoustic =
        AcousticMatrix::new(&dynamics).map_err(|error| BenchError::Eigen(error.to_string()))?;
    let mesh = mesh_of(crystal, FINE_SPACING_PER_ANG)?;
    let gamma = GammaCorrection::new(&acoustic, crystal, mesh.divisions(), STIFFNESS_FLOOR);
    if gamma.unstable {
        return Ok(None);
    }
    let mut spectrum = Vec::with_capacity(mesh.points().len());
    let mut lowest = f64::INFINITY;
    for (index, point) in mesh.points().iter().enumerate() {
        let values = exact.eigenvalues(&point.q)?;
        let values = if index == 0 {
            without_rigid(values)
        } else {
            values
        };
        lowest = values.iter().copied().fold(lowest, f64::min);
        if lowest <= 0.0 {
            return Ok(None);
        }
        spectrum.push(values);
    }
    let energy = |temperature_k: f64| {
        let term = vibrations::gamma_term(&gamma, temperature_k);
        let sum = vibrations::of_mesh(&mesh, &spectrum, term, temperature_k);
        sum.free_energy * EV_TO_KJ_PER_MOL / molecule_count as f64
    };
    Ok(Some(StableTruth {
        free_energy_kj_per_mol: TEMPERATURES_K.map(energy),
        lowest,
    }))
}

/// The translation −R.
pub fn opposite(translation: Translation) -> Translation {
    translation.map(|x| -x)
}
