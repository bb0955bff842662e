//! The space group of a crystal, its action on atoms, and positions symmetrised by it.
//!
//! The group is found by a crystallographic symmetry library; nothing here is tabulated. An operation maps fractional
//! column coordinates x → W x + w. Atom i goes to atom i' in another cell: W xᵢ + w = xᵢ' + tᵢ with tᵢ integer.

use nalgebra::{Matrix3, Vector3};

use crate::crystal::Crystal;
use crate::supercell::{Supercell, Translation};

/// Why no space group could be found.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
#[error("no space group was found at a tolerance of {tolerance} Å: {detail}")]
pub struct SymmetryError {
    /// Tolerance, as text.
    pub tolerance: String,
    /// The library's words.
    pub detail: String,
}

/// One operation of the space group.
#[derive(Debug, Clone, PartialEq)]
pub struct Operation {
    /// W, acting on fractional column coordinates.
    pub rotation: [[i64; 3]; 3],
    /// The same rotation in Cartesian coordinates.
    pub cartesian: Matrix3<f64>,
    /// Atom i goes to atom `permutation[i]`.
    pub permutation: Vec<usize>,
    /// tᵢ: the cell that atom i lands in.
    pub shifts: Vec<Translation>,
}

impl Operation {
    /// W applied to a lattice translation.
    pub fn rotate(&self, translation: &Translation) -> Translation {
        let w = &self.rotation;
        std::array::from_fn(|r| (0..3).map(|c| w[r][c] * translation[c]).sum())
    }

    /// W⁻ᵀ, the action on fractional reciprocal coordinates. W is unimodular, so that the result is integer.
    pub fn reciprocal_rotation(&self) -> [[i64; 3]; 3] {
        let w = &self.rotation;
        let cofactor = |r: usize, c: usize| {
            let (r1, r2, c1, c2) = ((r + 1) % 3, (r + 2) % 3, (c + 1) % 3, (c + 2) % 3);
            w[r1][c1] * w[r2][c2] - w[r1][c2] * w[r2][c1]
        };
        let determinant: i64 = (0..3).map(|c| w[0][c] * cofactor(0, c)).sum();
        std::array::from_fn(|r| std::array::from_fn(|c| determinant * cofactor(r, c)))
    }

    /// Whether this is the inversion, x → −x + w.
    pub fn is_inversion(&self) -> bool {
        self.rotation == [[-1, 0, 0], [0, -1, 0], [0, 0, -1]]
    }
}

/// A space group with its action on the atoms of one crystal.
#[derive(Debug, Clone, PartialEq)]
pub struct SpaceGroup {
    /// Number in International Tables for Crystallography, Volume A.
    pub number: u32,
    /// Short Hermann–Mauguin symbol.
    pub symbol: String,
    /// Operations in the given cell, pure translations of a centred cell included; the identity first.
    pub operations: Vec<Operation>,
}

impl SpaceGroup {
    /// The space group of `crystal` with positions taken as equal within `tolerance_ang` (Å).
    ///
    /// Atoms are told apart by element and mass.
    ///
    /// # Errors
    /// [`SymmetryError`] where the library finds none.
    pub fn find(crystal: &Crystal, tolerance_ang: f64) -> Result<Self, SymmetryError> {
        let error = |detail: String| SymmetryError {
            tolerance: format!("{tolerance_ang:e}"),
            detail,
        };
        let lattice = moyo::base::Lattice::new(*crystal.cell());
        let cell = moyo::base::Cell::new(lattice, crystal.positions().to_vec(), kinds(crystal));
        let dataset = moyo::MoyoDataset::with_default(&cell, tolerance_ang)
            .map_err(|e| error(format!("{e:?}")))?;
        let mut operations = dataset
            .operations
            .iter()
            .map(|found| {
                let rotation = found.rotation;
                let rotation =
                    std::array::from_fn(|r| std::array::from_fn(|c| i64::from(rotation[(r, c)])));
                operation(crystal, rotation, &found.translation, 4.0 * tolerance_ang)
                    .ok_or_else(|| error("an operation maps an atom onto no atom".to_owned()))
            })
            .collect::<Result<Vec<_>, _>>()?;
        operations.sort_by_key(|op| (!is_identity(op), op.rotation.map(|row| row.map(|x| -x))));
        let number = u32::try_from(dataset.number).unwrap_or_default();
        Ok(Self {
            number,
            symbol: dataset.hm_symbol,
            operations,
        })
    }

    /// The group that holds the identity only.
    pub fn trivial(crystal: &Crystal) -> Self {
        let n = crystal.atom_count();
        let identity = Operation {
            rotation: [[1, 0, 0], [0, 1, 0], [0, 0, 1]],
            cartesian: Matrix3::identity(),
            permutation: (0..n).collect(),
            shifts: vec![[0, 0, 0]; n],
        };
        Self {
            number: 1,
            symbol: "P 1".to_owned(),
            operations: vec![identity],
        }
    }

    /// The operations that map the supercell lattice onto itself, as a group of their own.
    #[must_use]
    pub fn keeping(&self, supercell: &Supercell) -> Self {
        let kept = self
            .operations
            .iter()
            .filter(|op| supercell.is_kept_by(&op.rotation));
        Self {
            operations: kept.cloned().collect(),
            ..self.clone()
        }
    }

    /// The inversion, if the group has one.
    pub fn inversion(&self) -> Option<&Operation> {
        self.operations.iter().find(|op| op.is_inversion())
    }

    /// For each atom the lowest atom of its orbit.
    pub fn orbit_representatives(&self) -> Vec<usize> {
        let atoms = self.operations.first().map_or(0, |op| op.permutation.len());
        (0..atoms)
            .map(|i| {
                self.operations
                    .iter()
                    .map(|op| op.permutation[i])
                    .min()
                    .unwrap_or(i)
            })
            .collect()
    }

    /// The crystal with positions averaged over the group. The projection is exact: a second one changes nothing.
    ///
    /// With centroid c of the atoms as written and m the mean of the tᵢ, the operation acts as
    /// x → W(x − c) + c + m − tᵢ on atom i', and these actions close under composition.
    pub fn symmetrised(&self, crystal: &Crystal) -> Crystal {
        let n = crystal.atom_count();
        let positions = crystal.positions();
        let centroid = positions.iter().sum::<Vector3<f64>>() / n as f64;
        let mut moved = vec![Vector3::zeros(); n];
        for op in &self.operations {
            let w = Matrix3::from_fn(|r, c| op.rotation[r][c] as f64);
            let mean: Vector3<f64> =
                op.shifts.iter().map(as_vector).sum::<Vector3<f64>>() / n as f64;
            for i in 0..n {
                let image =
                    w * (positions[i] - centroid) + centroid + mean - as_vector(&op.shifts[i]);
                moved[op.permutation[i]] += image;
            }
        }
        let order = self.operations.len() as f64;
        let symmetrised = moved.into_iter().map(|sum| sum / order).collect();
        crystal
            .with_positions(symmetrised)
            .unwrap_or_else(|_| crystal.clone())
    }
}

fn as_vector(translation: &Translation) -> Vector3<f64> {
    Vector3::from(translation.map(|x| x as f64))
}

fn is_identity(op: &Operation) -> bool {
    op.rotation == [[1, 0, 0], [0, 1, 0], [0, 0, 1]]
        && op
            .permutation
            .iter()
            .enumerate()
            .all(|(i, &image)| i == image)
}

/// Labels that are equal for atoms of the same element and mass.
fn kinds(crystal: &Crystal) -> Vec<i32> {
    let mut seen: Vec<(crate::Element, u64)> = Vec::new();
    crystal
        .elements()
        .iter()
        .zip(crystal.masses_u())
        .map(|(element, mass)| {
            let kind = (*element, mass.to_bits());
            let label = seen
                .iter()
                .position(|known| *known == kind)
                .unwrap_or_else(|| {
                    seen.push(kind);
                    seen.len() - 1
                });
            i32::try_from(label).unwrap_or(i32::MAX)
        })
        .collect()
}

#[allow(
    clippy::cast_possible_truncation,
    reason = "a rounded difference of fractional positions is a small integer"
)]
fn operation(
    crystal: &Crystal,
    rotation: [[i64; 3]; 3],
    translation: &Vector3<f64>,
    tolerance_ang: f64,
) -> Option<Operation> {
    let w = Matrix3::from_fn(|r, c| rotation[r][c] as f64);
    let positions = crystal.positions();
    let kinds = kinds(crystal);
    let mut permutation = Vec::with_capacity(positions.len());
    let mut shifts = Vec::with_capacity(positions.len());
    for (i, position) in positions.iter().enumerate() {
        let image = w * position + translation;
        let candidates = (0..positions.len()).filter(|&j| kinds[j] == kinds[i]);
        let (target, shift, distance) = candidates
            .map(|j| {
                let shift = (image - positions[j]).map(f64::round);
                let distance = crystal.cartesian(&(image - positions[j] - shift)).norm();
                (j, shift, distance)
            })
            .min_by(|a, b| a.2.total_cmp(&b.2))?;
        if distance > tolerance_ang {
            return None;
        }
        permutation.push(target);
        shifts.push([shift.x as i64, shift.y as i64, shift.z as i64]);
    }
    let mut hit = vec![false; positions.len()];
    for &target in &permutation {
        hit[target] = true;
    }
    let columns = crystal.cell().transpose();
    let cartesian = columns * w * columns.try_inverse()?;
    hit.iter().all(|h| *h).then_some(Operation {
        rotation,
        cartesian,
        permutation,
        shifts,
    })
}
