//! Lattice images within a distance, and the bonds of a crystal found with them.

use nalgebra::{Matrix3, Vector3};

use crate::crystal::Crystal;
use crate::reduction::short_basis;
use crate::supercell::Translation;

/// A bond from one atom of the home cell to the image of another at a lattice translation of the
/// written positions.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) struct Bond {
    /// The other atom.
    pub(super) to: usize,
    /// Translation of its image.
    pub(super) translation: Translation,
}

/// A lattice with a basis of short vectors beside its own, so that few images need a look however
/// skewed the cell is.
#[derive(Debug)]
pub(super) struct ReducedLattice {
    /// Short vectors as rows, Å: P times the cell.
    vectors: Matrix3<f64>,
    /// Rows of P: the short vectors in the basis of the cell.
    transform: [Translation; 3],
    /// P⁻ᵀ: fractional coordinates of the cell to those of the short vectors.
    to_reduced: Matrix3<f64>,
    /// Lengths of the reciprocal vectors (without 2π) of the short vectors, 1/Å.
    reciprocal_lengths: [f64; 3],
}

impl ReducedLattice {
    /// Reduces the cell (rows, Å).
    pub(super) fn new(cell: &Matrix3<f64>) -> Self {
        let short = short_basis(cell);
        let transform = std::array::from_fn(|r| std::array::from_fn(|c| i64::from(short[(r, c)])));
        let vectors = short.map(f64::from) * cell;
        let inverse = vectors.try_inverse().unwrap_or_else(Matrix3::zeros);
        Self {
            vectors,
            transform,
            to_reduced: inverse.tr_mul(&cell.transpose()),
            reciprocal_lengths: std::array::from_fn(|k| inverse.column(k).norm()),
        }
    }

    /// All lattice translations R with |separation + R| ≤ `limit_ang`, with that distance in Å.
    /// `separation` and R are in the basis of the cell.
    pub(super) fn images_within(
        &self,
        separation: &Vector3<f64>,
        limit_ang: f64,
    ) -> Vec<(Translation, f64)> {
        let reduced = self.to_reduced * separation;
        // A vector of length d has a component of at most d |b_k| along the short vector k.
        let range: [(i64, i64); 3] = std::array::from_fn(|k| {
            let reach = limit_ang * self.reciprocal_lengths[k] + 1e-9;
            (
                integer((-reach - reduced[k]).ceil()),
                integer((reach - reduced[k]).floor()),
            )
        });
        let mut images = Vec::new();
        for i in range[0].0..=range[0].1 {
            for j in range[1].0..=range[1].1 {
                for k in range[2].0..=range[2].1 {
                    let shift = [i, j, k];
                    let shifted = reduced + Vector3::from(shift.map(|x| x as f64));
                    let distance = self.vectors.tr_mul(&shifted).norm();
                    if distance <= limit_ang {
                        images.push((self.in_cell_basis(&shift), distance));
                    }
                }
            }
        }
        images
    }

    /// Length of the shortest lattice vector, Å.
    pub(super) fn shortest_ang(&self) -> f64 {
        let limit = (0..3)
            .map(|k| self.vectors.row(k).norm())
            .fold(f64::INFINITY, f64::min);
        self.images_within(&Vector3::zeros(), limit)
            .into_iter()
            .filter(|(translation, _)| *translation != [0, 0, 0])
            .fold(limit, |shortest, (_, distance)| shortest.min(distance))
    }

    fn in_cell_basis(&self, shift: &Translation) -> Translation {
        std::array::from_fn(|c| (0..3).map(|k| shift[k] * self.transform[k][c]).sum())
    }
}

#[allow(
    clippy::cast_possible_truncation,
    reason = "a whole number far inside 64 bits, and the cast saturates"
)]
fn integer(whole: f64) -> i64 {
    whole as i64
}

/// Bonds of each atom: distance below r_i + r_j + `tolerance_ang`, r the covalent radii.
pub(super) fn find(
    crystal: &Crystal,
    lattice: &ReducedLattice,
    tolerance_ang: f64,
) -> Vec<Vec<Bond>> {
    let mut bonds = vec![Vec::new(); crystal.atom_count()];
    let radius = |atom: usize| crystal.elements()[atom].covalent_radius_angstrom();
    for first in 0..crystal.atom_count() {
        for second in first..crystal.atom_count() {
            let separation = crystal.positions()[second] - crystal.positions()[first];
            let limit = radius(first) + radius(second) + tolerance_ang;
            for (translation, distance) in lattice.images_within(&separation, limit) {
                let is_itself = first == second && translation == [0, 0, 0];
                if is_itself || distance >= limit {
                    continue;
                }
                bonds[first].push(Bond {
                    to: second,
                    translation,
                });
                if first != second {
                    bonds[second].push(Bond {
                        to: first,
                        translation: translation.map(|x| -x),
                    });
                }
            }
        }
    }
    bonds
}
