//! Displacement runs: forces on a supercell in which one atom is displaced, and constants from their differences.
//!
//! They come from the full potential, so that finite displacements carry their anharmonic error, as real ones do. Each
//! run is one evaluation of the supercell; disturb the forces before they are differenced to put noise at its source.

use nalgebra::{Matrix3, Vector3};
use rayon::prelude::*;
use tarehouse_physics::{ForceConstants, Supercell};

use crate::ModelError;
use crate::molecular_crystal::MolecularCrystal;

/// One run.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Run {
    /// Atom of the home cell that is displaced.
    pub atom: usize,
    /// Displacement, Å; zero is the rest run.
    pub vector: Vector3<f64>,
}

/// Both signs of every Cartesian displacement of every atom: +x, −x, +y, … of atom 0, then atom 1 and so on.
pub fn central_runs(atom_count: usize, displacement: f64) -> Vec<Run> {
    (0..atom_count)
        .flat_map(|atom| (0..6).map(move |k| (atom, k)))
        .map(|(atom, k)| {
            let mut vector = Vector3::zeros();
            vector[k / 2] = if k % 2 == 0 {
                displacement
            } else {
                -displacement
            };
            Run { atom, vector }
        })
        .collect()
}

/// Forces of each run (eV/Å), in the order of translations and atoms: shape (m, L·n).
///
/// # Errors
/// [`ModelError`].
pub fn forces(
    model: &MolecularCrystal,
    supercell: &Supercell,
    runs: &[Run],
) -> Result<Vec<Vec<Vector3<f64>>>, ModelError> {
    let large = model.replicated(supercell)?;
    let home = supercell.index_of(&[0, 0, 0]) * model.atom_count();
    runs.par_iter()
        .map(|run| {
            let mut shift = vec![Vector3::zeros(); large.atom_count()];
            if let Some(slot) = shift.get_mut(home + run.atom) {
                *slot = run.vector;
            }
            Ok(large.displaced(&shift)?.forces())
        })
        .collect()
}

/// Constants from the forces of [`central_runs`]: Φ[l,i,j]_ab = −(F⁺ − F⁻)_{jb} / 2h, a the axis of displacement.
///
/// # Errors
/// [`ModelError::Constants`] when the forces do not belong to such runs.
pub fn central_differences(
    supercell: &Supercell,
    atom_count: usize,
    displacement: f64,
    forces: &[Vec<Vector3<f64>>],
) -> Result<ForceConstants, ModelError> {
    let (cells, n) = (supercell.cell_count(), atom_count);
    if forces.len() != 6 * n || forces.iter().any(|run| run.len() != cells * n) {
        let detail = format!("{} runs do not make central differences", forces.len());
        return Err(ModelError::Constants(detail));
    }
    let blocks = (0..cells * n * n)
        .map(|k| {
            let (l, i, j) = (k / (n * n), k / n % n, k % n);
            Matrix3::from_fn(|a, b| {
                let (above, below) = (&forces[6 * i + 2 * a], &forces[6 * i + 2 * a + 1]);
                -(above[l * n + j][b] - below[l * n + j][b]) / (2.0 * displacement)
            })
        })
        .collect();
    ForceConstants::from_blocks(supercell.clone(), n, blocks)
        .map_err(|error| ModelError::Constants(error.to_string()))
}
