//! The dynamical matrix interpolated from folded constants, as anyone who has only the package must do.
//!
//! Each pair is carried by its nearest periodic images; equidistant ones share equally (Parlinski, Li & Kawazoe, Phys.
//! Rev. Lett. 78, 4063 (1997)). Exact at commensurate wave vectors, elsewhere only if the range fits the supercell.

use nalgebra::{Matrix3, Vector3};
use tarehouse_eigensolver::{c64, hermitian_eigenvalues};
use tarehouse_physics::{Crystal, ForceConstants};

use crate::ModelError;
use crate::constants::PhaseSum;

/// Distances that differ by less are ties, Å.
const TIE_ANG: f64 = 1e-3;
/// Supercell vectors searched each way along each axis.
const IMAGES: i32 = 2;

/// Folded constants prepared for interpolation.
#[derive(Debug, Clone)]
pub struct Interpolation<'a> {
    crystal: &'a Crystal,
    constants: &'a ForceConstants,
    /// For each block [l][i][j] the separations of its nearest images, in fractional coordinates of the cell.
    images: Vec<Vec<Vector3<f64>>>,
}

impl<'a> Interpolation<'a> {
    /// Finds the nearest images of every pair.
    pub fn new(crystal: &'a Crystal, constants: &'a ForceConstants) -> Self {
        let n = crystal.atom_count();
        let supercell = constants.supercell();
        let matrix: Matrix3<f64> = supercell.matrix_f64();
        let range = -IMAGES..=IMAGES;
        let shifts: Vec<Vector3<f64>> = range
            .clone()
            .flat_map(|x| range.clone().map(move |y| (x, y)))
            .flat_map(|(x, y)| range.clone().map(move |z| (x, y, z)))
            .map(|(x, y, z)| matrix.tr_mul(&Vector3::new(x.into(), y.into(), z.into())))
            .collect();
        let positions = crystal.positions();
        let inverse = matrix.try_inverse().unwrap_or_else(Matrix3::zeros);
        let images = (0..constants.blocks().len())
            .map(|k| {
                let (l, i, j) = (k / (n * n), k / n % n, k % n);
                let cell = Vector3::from(supercell.translations()[l].map(|x| x as f64));
                let gap = cell + positions[j] - positions[i];
                // Bring the separation near the origin first, so that a few shifts reach all candidates.
                let whole = inverse.tr_mul(&gap).map(f64::round);
                let gap = gap - matrix.tr_mul(&whole);
                nearest(crystal, &gap, &shifts)
            })
            .collect();
        Self {
            crystal,
            constants,
            images,
        }
    }

    /// Distance of the nearest images of each block [l][i][j], Å.
    pub fn distances_ang(&self) -> Vec<f64> {
        let length = |images: &Vec<Vector3<f64>>| {
            images
                .first()
                .map_or(0.0, |separation| self.crystal.cartesian(separation).norm())
        };
        self.images.iter().map(length).collect()
    }

    /// The interpolated dynamical matrix at q, row-major, eV/Å²/u.
    pub fn dynamical_matrix(&self, q: &Vector3<f64>) -> Vec<c64> {
        let n = self.crystal.atom_count();
        let mut sum = PhaseSum::new(self.crystal);
        for (k, (block, images)) in self.constants.blocks().iter().zip(&self.images).enumerate() {
            let weight = 1.0 / images.len() as f64;
            for separation in images {
                sum.add(k / n % n, k % n, block, q.dot(separation), weight);
            }
        }
        sum.finish()
    }

    /// Eigenvalues of the interpolated dynamical matrix at q, ascending, eV/Å²/u.
    ///
    /// # Errors
    /// [`ModelError::Eigenproblem`].
    pub fn eigenvalues(&self, q: &Vector3<f64>) -> Result<Vec<f64>, ModelError> {
        hermitian_eigenvalues(3 * self.crystal.atom_count(), &self.dynamical_matrix(q))
            .map_err(|error| ModelError::Eigenproblem(error.to_string()))
    }
}

fn nearest(crystal: &Crystal, gap: &Vector3<f64>, shifts: &[Vector3<f64>]) -> Vec<Vector3<f64>> {
    let candidates: Vec<(f64, Vector3<f64>)> = shifts
        .iter()
        .map(|shift| gap + shift)
        .map(|separation| (crystal.cartesian(&separation).norm(), separation))
        .collect();
    let least = candidates.iter().map(|(d, _)| *d).fold(f64::MAX, f64::min);
    candidates
        .into_iter()
        .filter(|(distance, _)| *distance < least + TIE_ANG)
        .map(|(_, separation)| separation)
        .collect()
}
