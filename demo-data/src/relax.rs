//! Relaxation of atoms and cell by Newton's method inside the subspace that a space group leaves free.
//!
//! Steps that raise the energy are shortened, so that the result is a minimum within the subspace. It may still be a
//! saddle against displacements that break the symmetry: that is how the unstable form of the scenario comes about.

use nalgebra::{DMatrix, DVector, Matrix3, SymmetricEigen, Vector3};

use crate::ModelError;
use crate::molecular_crystal::{MolecularCrystal, STRAIN_AXES};
use crate::symmetry::SpaceGroup;

/// When to stop and how far to go.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Limits {
    /// Largest force component left, eV/Å.
    pub force_ev_per_ang: f64,
    /// Largest stress component left, eV/Å³.
    pub stress_ev_per_ang3: f64,
    /// Largest number of iterations.
    pub iterations: usize,
}

/// Far below 1e-10 eV/Å, a little above what rounding leaves.
pub const TIGHT: Limits = Limits {
    force_ev_per_ang: 2e-11,
    stress_ev_per_ang3: 1e-11,
    iterations: 400,
};

/// Length that turns a strain into a coordinate commensurate with displacements, Å: about one molecule.
const STRAIN_LENGTH: f64 = 5.0;
/// Longest step of a single coordinate, Å.
const STEP_MAX: f64 = 0.25;
/// Eigenvalues below this (eV/Å²) belong to rigid translations along polar axes and are not followed.
const RIGID_EIGENVALUE: f64 = 1e-7;
/// Energy rises below this (eV per cell) are rounding.
const ENERGY_ROUNDING: f64 = 1e-11;
/// Half-lengths tried before a step is taken anyway.
const HALVINGS: usize = 12;

/// The crystal at the stationary point below `start`; `start` itself, bit for bit, when it already fulfils `limits`.
///
/// # Errors
/// [`ModelError::NotRelaxed`] or [`ModelError::CellLost`].
pub fn relax(
    start: &MolecularCrystal,
    group: SpaceGroup,
    limits: Limits,
) -> Result<MolecularCrystal, ModelError> {
    let mut crystal = start.clone();
    for _ in 0..limits.iterations {
        if is_relaxed(&crystal, limits) {
            return Ok(crystal);
        }
        let basis = free_coordinates(&crystal, group);
        let derivatives = crystal.derivatives();
        let gradient = basis.tr_mul(&derivatives.gradient);
        let hessian = basis.tr_mul(&(&derivatives.hessian * &basis));
        let step = newton_step(&gradient, hessian);
        crystal = descend(&crystal, &(basis * step), derivatives.energy_ev)?;
    }
    if is_relaxed(&crystal, limits) {
        return Ok(crystal);
    }
    Err(ModelError::NotRelaxed {
        iterations: limits.iterations,
        force_ev_per_ang: largest_force(&crystal),
    })
}

/// Largest force component, eV/Å.
pub fn largest_force(crystal: &MolecularCrystal) -> f64 {
    let forces = crystal.forces();
    forces.iter().map(Vector3::amax).fold(0.0, f64::max)
}

/// Whether forces and stress are within `limits`.
pub fn is_relaxed(crystal: &MolecularCrystal, limits: Limits) -> bool {
    largest_force(crystal) < limits.force_ev_per_ang
        && crystal.stress_ev_per_ang3().amax() < limits.stress_ev_per_ang3
}

/// Columns span the displacements and strains that keep the symmetry. The atoms must stand in the order of
/// [`MolecularCrystal::from_group`].
fn free_coordinates(crystal: &MolecularCrystal, group: SpaceGroup) -> DMatrix<f64> {
    let operations = group.operations();
    let size = crystal.atom_count() / operations.len();
    let rotations: Vec<Matrix3<f64>> = operations
        .iter()
        .map(|operation| operation.cartesian(crystal.cell()))
        .collect();
    let order = 3 * crystal.atom_count() + 6;
    let norm = 1.0 / (operations.len() as f64).sqrt();
    let mut columns = Vec::new();
    for atom in 0..size {
        for axis in 0..3 {
            let mut column = DVector::zeros(order);
            for (copy, rotation) in rotations.iter().enumerate() {
                for c in 0..3 {
                    column[3 * (copy * size + atom) + c] = norm * rotation[(c, axis)];
                }
            }
            columns.push(column);
        }
    }
    for (k, &(a, b)) in STRAIN_AXES.iter().enumerate() {
        // Rotation parts are diagonal, so that a strain component is kept or reversed as a whole.
        let kept = operations.iter().all(|g| g.signs[a] * g.signs[b] == 1);
        if kept {
            let mut column = DVector::zeros(order);
            column[order - 6 + k] = 1.0 / STRAIN_LENGTH;
            columns.push(column);
        }
    }
    DMatrix::from_columns(&columns)
}

/// −|H|⁻¹ g with rigid translations left out, shortened to [`STEP_MAX`].
fn newton_step(gradient: &DVector<f64>, hessian: DMatrix<f64>) -> DVector<f64> {
    let eigen = SymmetricEigen::new(hessian);
    let mut step = DVector::zeros(gradient.len());
    for (column, value) in eigen.eigenvectors.column_iter().zip(&eigen.eigenvalues) {
        if value.abs() > RIGID_EIGENVALUE {
            step -= column * (column.dot(gradient) / value.abs());
        }
    }
    let longest = step.amax();
    if longest > STEP_MAX {
        step *= STEP_MAX / longest;
    }
    step
}

fn descend(
    crystal: &MolecularCrystal,
    step: &DVector<f64>,
    energy_ev: f64,
) -> Result<MolecularCrystal, ModelError> {
    let mut scale = 1.0;
    let mut moved = moved_by(crystal, &(step * scale))?;
    for _ in 0..HALVINGS {
        if moved.energy_ev() <= energy_ev + ENERGY_ROUNDING {
            break;
        }
        scale *= 0.5;
        moved = moved_by(crystal, &(step * scale))?;
    }
    Ok(moved)
}

fn moved_by(
    crystal: &MolecularCrystal,
    step: &DVector<f64>,
) -> Result<MolecularCrystal, ModelError> {
    let offset = 3 * crystal.atom_count();
    let mut deformation = Matrix3::identity();
    for (k, &(a, b)) in STRAIN_AXES.iter().enumerate() {
        deformation[(a, b)] += step[offset + k];
        if a != b {
            deformation[(b, a)] += step[offset + k];
        }
    }
    let displacements: Vec<Vector3<f64>> = (0..crystal.atom_count())
        .map(|atom| Vector3::from_fn(|c, _| step[3 * atom + c]))
        .collect();
    crystal.deformed(&deformation)?.displaced(&displacements)
}
