//! Force constants: second derivatives of the energy, proven to have a consistent shape, finite values and a known unit.
//!
//! Φ[l, i, j] is the 3×3 block of the second derivative with respect to the displacement of atom i of the home cell
//! (row) and of atom j of the cell at translation R_l (column), summed over the periodic images of the supercell.
//! Inside the house the first index is always the displaced atom and the unit is eV/Å².

use nalgebra::Matrix3;

use crate::supercell::Supercell;
use crate::units::{BOHR_ANGSTROM, EV_PER_ANG2_TO_N_PER_M, HARTREE_EV};

/// Unit in which constants were given.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum ForceConstantUnit {
    /// eV/Å².
    EvPerAngstrom2,
    /// Hartree per square Bohr radius.
    HartreePerBohr2,
    /// Rydberg per square Bohr radius.
    RydbergPerBohr2,
    /// N/m.
    NewtonPerMetre,
}

impl ForceConstantUnit {
    /// All units, in the order of the package format.
    pub const ALL: [Self; 4] = [
        Self::EvPerAngstrom2,
        Self::HartreePerBohr2,
        Self::RydbergPerBohr2,
        Self::NewtonPerMetre,
    ];

    /// Value of one such unit in eV/Å².
    pub fn in_ev_per_ang2(self) -> f64 {
        let hartree_per_bohr2 = HARTREE_EV / (BOHR_ANGSTROM * BOHR_ANGSTROM);
        match self {
            Self::EvPerAngstrom2 => 1.0,
            Self::HartreePerBohr2 => hartree_per_bohr2,
            Self::RydbergPerBohr2 => 0.5 * hartree_per_bohr2,
            Self::NewtonPerMetre => 1.0 / EV_PER_ANG2_TO_N_PER_M,
        }
    }

    /// Its name in the package format.
    pub fn name(self) -> &'static str {
        match self {
            Self::EvPerAngstrom2 => "eV/angstrom^2",
            Self::HartreePerBohr2 => "hartree/bohr^2",
            Self::RydbergPerBohr2 => "rydberg/bohr^2",
            Self::NewtonPerMetre => "N/m",
        }
    }
}

/// What the first atom index of an array stands for.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum FirstIndex {
    /// The atom that was displaced.
    Displaced,
    /// The atom on which the force was read.
    Response,
}

/// What is wrong with an array of constants.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
pub enum ForceConstantsError {
    /// The array does not have L·9n² entries.
    #[error("{found} values, but {cells} cells of {atoms} atoms need {expected}")]
    Length {
        /// Number of cells.
        cells: usize,
        /// Number of atoms.
        atoms: usize,
        /// Number of values needed.
        expected: usize,
        /// Number of values found.
        found: usize,
    },
    /// Some entries are not finite.
    #[error("{count} values are not finite, the first at [{}]", index.map(|i| i.to_string()).join(", "))]
    NotFinite {
        /// How many.
        count: usize,
        /// Index [l, i, a, j, b] of the first.
        index: [usize; 5],
    },
}

/// Force constants in eV/Å², first index displaced; see the module documentation.
#[derive(Debug, Clone, PartialEq)]
pub struct ForceConstants {
    supercell: Supercell,
    atom_count: usize,
    blocks: Vec<Matrix3<f64>>,
}

impl ForceConstants {
    /// Constants from an array of shape (L, n, 3, n, 3) in C order.
    ///
    /// # Errors
    /// [`ForceConstantsError`].
    pub fn from_array(
        supercell: Supercell,
        atom_count: usize,
        values: &[f64],
        unit: ForceConstantUnit,
        first_index: FirstIndex,
    ) -> Result<Self, ForceConstantsError> {
        let (cells, atoms, found) = (supercell.cell_count(), atom_count, values.len());
        let expected = cells
            .saturating_mul(9)
            .saturating_mul(atoms)
            .saturating_mul(atoms);
        if found != expected {
            return Err(ForceConstantsError::Length {
                cells,
                atoms,
                expected,
                found,
            });
        }
        let count = values.iter().filter(|x| !x.is_finite()).count();
        if let Some(flat) = values.iter().position(|x| !x.is_finite()) {
            let index = unravel(flat, atoms);
            return Err(ForceConstantsError::NotFinite { count, index });
        }
        let scale = unit.in_ev_per_ang2();
        let given = |l: usize, i: usize, j: usize| {
            Matrix3::from_fn(|a, b| scale * values[(((l * atoms + i) * 3 + a) * atoms + j) * 3 + b])
        };
        let block = |l: usize, i: usize, j: usize| match first_index {
            FirstIndex::Displaced => given(l, i, j),
            FirstIndex::Response => given(supercell.negative(l), j, i).transpose(),
        };
        let blocks = (0..cells)
            .flat_map(|l| (0..atoms).flat_map(move |i| (0..atoms).map(move |j| (l, i, j))))
            .map(|(l, i, j)| block(l, i, j))
            .collect();
        Ok(Self {
            supercell,
            atom_count,
            blocks,
        })
    }

    /// Constants from blocks in the order [l][i][j], eV/Å². Entries must be finite.
    ///
    /// # Errors
    /// [`ForceConstantsError`].
    pub fn from_blocks(
        supercell: Supercell,
        atom_count: usize,
        blocks: Vec<Matrix3<f64>>,
    ) -> Result<Self, ForceConstantsError> {
        let (cells, atoms, found) = (supercell.cell_count(), atom_count, blocks.len());
        let expected = cells * atoms * atoms;
        if found != expected {
            let (expected, found) = (9 * expected, 9 * found);
            return Err(ForceConstantsError::Length {
                cells,
                atoms,
                expected,
                found,
            });
        }
        let bad = |block: &Matrix3<f64>| !block.iter().all(|x| x.is_finite());
        if let Some(first) = blocks.iter().position(bad) {
            let (l, i, j) = (
                first / (atoms * atoms),
                first / atoms % atoms,
                first % atoms,
            );
            let count = blocks.iter().flatten().filter(|x| !x.is_finite()).count();
            return Err(ForceConstantsError::NotFinite {
                count,
                index: [l, i, 0, j, 0],
            });
        }
        Ok(Self {
            supercell,
            atom_count,
            blocks,
        })
    }

    /// The supercell in which they were computed.
    pub fn supercell(&self) -> &Supercell {
        &self.supercell
    }

    /// Number of atoms n in the primitive cell.
    pub fn atom_count(&self) -> usize {
        self.atom_count
    }

    /// The 3×3 block Φ[l, i, j], eV/Å²; rows belong to the displaced atom i.
    pub fn block(&self, cell: usize, displaced: usize, response: usize) -> &Matrix3<f64> {
        &self.blocks[(cell * self.atom_count + displaced) * self.atom_count + response]
    }

    /// All blocks in the order [l][i][j].
    pub fn blocks(&self) -> &[Matrix3<f64>] {
        &self.blocks
    }

    /// Constants of the same shape with each block replaced; `f` sees the flat index [l][i][j] and the block.
    ///
    /// The caller sees to it that the new values are finite.
    #[must_use]
    pub fn map_blocks(&self, mut f: impl FnMut(usize, &Matrix3<f64>) -> Matrix3<f64>) -> Self {
        let blocks = self
            .blocks
            .iter()
            .enumerate()
            .map(|(flat, block)| f(flat, block))
            .collect();
        self.with_blocks(blocks)
    }

    /// Constants of a supercell from blocks of this crate's own making: the right number of them, all finite.
    pub(crate) fn of_blocks(
        supercell: &Supercell,
        atom_count: usize,
        blocks: Vec<Matrix3<f64>>,
    ) -> Self {
        debug_assert_eq!(
            blocks.len(),
            supercell.cell_count() * atom_count * atom_count
        );
        Self {
            supercell: supercell.clone(),
            atom_count,
            blocks,
        }
    }

    /// Constants of the same crystal and supercell with other values. Values must be finite.
    pub(crate) fn with_blocks(&self, blocks: Vec<Matrix3<f64>>) -> Self {
        debug_assert_eq!(blocks.len(), self.blocks.len());
        Self {
            supercell: self.supercell.clone(),
            atom_count: self.atom_count,
            blocks,
        }
    }

    /// The array of shape (L, n, 3, n, 3) in C order, eV/Å², first index displaced.
    pub fn to_array(&self) -> Vec<f64> {
        let n = self.atom_count;
        let mut values = vec![0.0; 9 * self.blocks.len()];
        for (flat, block) in self.blocks.iter().enumerate() {
            let (l, i, j) = (flat / (n * n), flat / n % n, flat % n);
            for a in 0..3 {
                for b in 0..3 {
                    values[(((l * n + i) * 3 + a) * n + j) * 3 + b] = block[(a, b)];
                }
            }
        }
        values
    }

    /// Index of the block of an atom with itself, l₀ with R = 0.
    pub fn home_cell(&self) -> usize {
        self.supercell.index_of(&[0, 0, 0])
    }

    /// Largest singular value of the self blocks Φ[0, i, i], eV/Å²: the scale to which residuals are compared. It does
    /// not depend on the orientation of the axes.
    pub fn largest_self_constant(&self) -> f64 {
        let home = self.home_cell();
        (0..self.atom_count)
            .map(|i| self.block(home, i, i).singular_values().max())
            .fold(0.0, f64::max)
    }
}

/// Index [l, i, a, j, b] of a flat position in an array of shape (L, n, 3, n, 3).
fn unravel(flat: usize, atoms: usize) -> [usize; 5] {
    let (rest, b) = (flat / 3, flat % 3);
    let (rest, j) = (rest / atoms, rest % atoms);
    let (rest, a) = (rest / 3, rest % 3);
    [rest / atoms, rest % atoms, a, j, b]
}
