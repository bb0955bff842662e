//! A handful of space groups, as operations on fractional coordinates.
//!
//! Operations are those of the standard settings of International Tables for Crystallography, volume A (monoclinic:
//! unique axis b). All groups here are primitive.

use nalgebra::{Matrix3, Vector3};
use tarehouse_physics::supercell::Translation;

use crate::ModelError;

/// Largest distance in fractional units at which two sites are taken for one.
const SAME_SITE: f64 = 1e-6;

/// An operation s ↦ W s + w on fractional column coordinates.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Operation {
    /// Diagonal of W: all groups here have diagonal rotation parts.
    pub signs: [i64; 3],
    /// w.
    pub shift: [f64; 3],
}

impl Operation {
    /// Image of a point.
    pub fn apply(&self, point: &Vector3<f64>) -> Vector3<f64> {
        Vector3::from_fn(|c, _| self.signs[c] as f64 * point[c] + self.shift[c])
    }

    /// W as an integer matrix.
    pub fn rotation(&self) -> [[i64; 3]; 3] {
        std::array::from_fn(|r| std::array::from_fn(|c| if r == c { self.signs[r] } else { 0 }))
    }

    /// The rotation in Cartesian axes, Aᵀ W A⁻ᵀ with the cell vectors as rows of A.
    pub fn cartesian(&self, cell: &Matrix3<f64>) -> Matrix3<f64> {
        let inverse = cell.try_inverse().unwrap_or_else(Matrix3::zeros);
        let diagonal = Matrix3::from_diagonal(&Vector3::from(self.signs.map(|s| s as f64)));
        cell.transpose() * diagonal * inverse.transpose()
    }
}

/// Shape that a space group asks of the cell.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum CrystalSystem {
    /// Any cell.
    Triclinic,
    /// b at right angles to a and c.
    Monoclinic,
    /// All angles right.
    Orthorhombic,
}

/// A space group.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum SpaceGroup {
    /// P1, no. 1.
    P1,
    /// P-1, no. 2.
    PBar1,
    /// P2₁, no. 4.
    P21,
    /// Pc, no. 7.
    Pc,
    /// P2₁/c, no. 14.
    P21c,
    /// P2₁/n, no. 14 with another choice of a and c.
    P21n,
    /// P2₁2₁2₁, no. 19.
    P212121,
    /// Pca2₁, no. 29.
    Pca21,
    /// Pna2₁, no. 33.
    Pna21,
}

const E: ([i64; 3], [f64; 3]) = ([1, 1, 1], [0.0, 0.0, 0.0]);
const I: ([i64; 3], [f64; 3]) = ([-1, -1, -1], [0.0, 0.0, 0.0]);

impl SpaceGroup {
    /// All groups of this module.
    pub const ALL: [Self; 9] = [
        Self::P1,
        Self::PBar1,
        Self::P21,
        Self::Pc,
        Self::P21c,
        Self::P21n,
        Self::P212121,
        Self::Pca21,
        Self::Pna21,
    ];

    /// Short symbol in plain letters.
    pub fn symbol(self) -> &'static str {
        match self {
            Self::P1 => "P1",
            Self::PBar1 => "P-1",
            Self::P21 => "P2_1",
            Self::Pc => "Pc",
            Self::P21c => "P2_1/c",
            Self::P21n => "P2_1/n",
            Self::P212121 => "P2_12_12_1",
            Self::Pca21 => "Pca2_1",
            Self::Pna21 => "Pna2_1",
        }
    }

    /// Shape of its cell.
    pub fn system(self) -> CrystalSystem {
        match self {
            Self::P1 | Self::PBar1 => CrystalSystem::Triclinic,
            Self::P21 | Self::Pc | Self::P21c | Self::P21n => CrystalSystem::Monoclinic,
            Self::P212121 | Self::Pca21 | Self::Pna21 => CrystalSystem::Orthorhombic,
        }
    }

    /// Its operations modulo lattice translations, the identity first.
    pub fn operations(self) -> Vec<Operation> {
        let list: &[([i64; 3], [f64; 3])] = match self {
            Self::P1 => &[E],
            Self::PBar1 => &[E, I],
            Self::P21 => &[E, ([-1, 1, -1], [0.0, 0.5, 0.0])],
            Self::Pc => &[E, ([1, -1, 1], [0.0, 0.0, 0.5])],
            Self::P21c => &[
                E,
                ([-1, 1, -1], [0.0, 0.5, 0.5]),
                I,
                ([1, -1, 1], [0.0, 0.5, 0.5]),
            ],
            Self::P21n => &[
                E,
                ([-1, 1, -1], [0.5, 0.5, 0.5]),
                I,
                ([1, -1, 1], [0.5, 0.5, 0.5]),
            ],
            Self::P212121 => &[
                E,
                ([-1, -1, 1], [0.5, 0.0, 0.5]),
                ([-1, 1, -1], [0.0, 0.5, 0.5]),
                ([1, -1, -1], [0.5, 0.5, 0.0]),
            ],
            Self::Pca21 => &[
                E,
                ([-1, -1, 1], [0.0, 0.0, 0.5]),
                ([1, -1, 1], [0.5, 0.0, 0.0]),
                ([-1, 1, 1], [0.5, 0.0, 0.5]),
            ],
            Self::Pna21 => &[
                E,
                ([-1, -1, 1], [0.0, 0.0, 0.5]),
                ([1, -1, 1], [0.5, 0.5, 0.0]),
                ([-1, 1, 1], [0.5, 0.5, 0.5]),
            ],
        };
        list.iter()
            .map(|&(signs, shift)| Operation { signs, shift })
            .collect()
    }
}

/// Where an operation sends each atom of a crystal: atom i of the home cell to atom `atom[i]` of the cell at `shift[i]`.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct AtomMap {
    /// Image atoms.
    pub atom: Vec<usize>,
    /// Cells of the images.
    pub shift: Vec<Translation>,
}

impl AtomMap {
    /// The map of `operation`, with index `index`, over fractional positions.
    ///
    /// # Errors
    /// [`ModelError::NotSymmetric`] when an image is no atom.
    pub fn new(
        operation: &Operation,
        index: usize,
        positions: &[Vector3<f64>],
    ) -> Result<Self, ModelError> {
        let mut map = Self {
            atom: Vec::with_capacity(positions.len()),
            shift: Vec::with_capacity(positions.len()),
        };
        for (atom, position) in positions.iter().enumerate() {
            let image = operation.apply(position);
            let found = positions.iter().enumerate().find_map(|(k, other)| {
                let gap = image - other;
                let near = gap.iter().all(|x| (x - x.round()).abs() < SAME_SITE);
                near.then_some((k, gap))
            });
            let Some((target, gap)) = found else {
                return Err(ModelError::NotSymmetric {
                    operation: index,
                    atom,
                });
            };
            map.atom.push(target);
            map.shift.push(whole(&gap));
        }
        Ok(map)
    }
}

/// The nearest lattice translation to a fractional vector of moderate length.
#[allow(
    clippy::cast_possible_truncation,
    reason = "fractional coordinates of a model crystal are a few units at most"
)]
pub(crate) fn whole(fractional: &Vector3<f64>) -> Translation {
    std::array::from_fn(|c| fractional[c].round() as i64)
}
