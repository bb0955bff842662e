//! A crystal of equal molecules, its energy, and the derivatives of its energy.
//!
//! Molecules are kept whole: atoms of a molecule stand next to each other in the list and in space, whatever cell they
//! reach into. Positions are Cartesian.

use nalgebra::{DMatrix, DVector, Matrix3, Vector3};
use tarehouse_physics::supercell::Translation;
use tarehouse_physics::{Crystal, Supercell};

use crate::ModelError;
use crate::compound::Compound;
use crate::potential::PairValue;
use crate::symmetry::SpaceGroup;

/// Index pairs of the six strain components, in the order in which derivatives hold them.
pub const STRAIN_AXES: [(usize, usize); 6] = [(0, 0), (1, 1), (2, 2), (1, 2), (0, 2), (0, 1)];

/// A crystal of equal molecules; see the module documentation.
#[derive(Debug, Clone, PartialEq)]
pub struct MolecularCrystal {
    compound: Compound,
    cell: Matrix3<f64>,
    positions: Vec<Vector3<f64>>,
}

/// One interacting pair: atom `first` of the home cell and atom `second` of the cell at `translation`.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Pair {
    /// Atom of the home cell.
    pub first: usize,
    /// The other atom.
    pub second: usize,
    /// Cell of the other atom.
    pub translation: Translation,
    /// From the first to the second, Å.
    pub separation: Vector3<f64>,
    /// The pair function at that distance.
    pub value: PairValue,
}

/// Energy per cell with its derivatives; the coordinates are 3n Cartesian displacements (Å), then the six strains of
/// [`STRAIN_AXES`] (an off-diagonal strain e stands for ε_ab = ε_ba = e).
#[derive(Debug, Clone, PartialEq)]
pub struct Derivatives {
    /// eV per cell.
    pub energy_ev: f64,
    /// 3n + 6 first derivatives.
    pub gradient: DVector<f64>,
    /// Second derivatives.
    pub hessian: DMatrix<f64>,
}

impl MolecularCrystal {
    /// A crystal from cell vectors (rows, Å) and Cartesian positions, molecule after molecule.
    ///
    /// # Errors
    /// [`ModelError::Crystal`] when the positions do not make whole molecules, [`ModelError::CellLost`] without a cell.
    pub fn new(
        compound: Compound,
        cell: Matrix3<f64>,
        positions: Vec<Vector3<f64>>,
    ) -> Result<Self, ModelError> {
        let volume_ang3 = cell.determinant().abs();
        if !(volume_ang3.is_finite() && volume_ang3 > 1.0) {
            return Err(ModelError::CellLost { volume_ang3 });
        }
        if positions.is_empty() || !positions.len().is_multiple_of(compound.sites().len()) {
            let (found, size) = (positions.len(), compound.sites().len());
            let detail = format!("{found} positions do not make molecules of {size} atoms");
            return Err(ModelError::Crystal(detail));
        }
        Ok(Self {
            compound,
            cell,
            positions,
        })
    }

    /// The crystal in which every operation of `group` makes one molecule of the given one (fractional positions).
    ///
    /// # Errors
    /// As [`MolecularCrystal::new`].
    pub fn from_group(
        compound: Compound,
        group: SpaceGroup,
        cell: Matrix3<f64>,
        molecule: &[Vector3<f64>],
    ) -> Result<Self, ModelError> {
        let positions = group
            .operations()
            .iter()
            .flat_map(|operation| molecule.iter().map(|point| operation.apply(point)))
            .map(|fractional| cell.tr_mul(&fractional))
            .collect();
        Self::new(compound, cell, positions)
    }

    /// Its compound.
    pub fn compound(&self) -> &Compound {
        &self.compound
    }

    /// Rows are the cell vectors, Å.
    pub fn cell(&self) -> &Matrix3<f64> {
        &self.cell
    }

    /// Cartesian positions, Å.
    pub fn positions(&self) -> &[Vector3<f64>] {
        &self.positions
    }

    /// Number of atoms in the cell.
    pub fn atom_count(&self) -> usize {
        self.positions.len()
    }

    /// Number of molecules in the cell.
    pub fn molecule_count(&self) -> usize {
        self.positions.len() / self.compound.sites().len()
    }

    /// Fractional positions.
    pub fn fractional(&self) -> Vec<Vector3<f64>> {
        let inverse = self.cell.try_inverse().unwrap_or_else(Matrix3::zeros);
        self.positions.iter().map(|x| inverse.tr_mul(x)).collect()
    }

    /// Shortest distance between the planes that bound the cell, Å.
    pub fn cell_heights(&self) -> Vector3<f64> {
        let inverse = self.cell.try_inverse().unwrap_or_else(Matrix3::zeros);
        Vector3::from_fn(|c, _| 1.0 / inverse.column(c).norm())
    }

    /// The crystal as the house knows it, with standard atomic weights.
    ///
    /// # Errors
    /// [`ModelError::Crystal`] with everything that is wrong.
    pub fn to_crystal(&self) -> Result<Crystal, ModelError> {
        let elements = (0..self.atom_count())
            .map(|atom| self.compound.sites()[self.site(atom)].element)
            .collect();
        Crystal::new(self.cell, elements, self.fractional(), None)
            .map_err(|errors| ModelError::Crystal(format!("{errors:?}")))
    }

    /// The same crystal described by a larger cell: atom i of translation l becomes atom l·n + i.
    ///
    /// # Errors
    /// As [`MolecularCrystal::new`].
    pub fn replicated(&self, supercell: &Supercell) -> Result<Self, ModelError> {
        let positions = supercell
            .translations()
            .iter()
            .flat_map(|translation| {
                let offset = self.lattice_vector(translation);
                self.positions.iter().map(move |x| x + offset)
            })
            .collect();
        Self::new(
            self.compound.clone(),
            supercell.vectors(&self.cell),
            positions,
        )
    }

    /// The same crystal after the Cartesian displacements of its atoms (Å).
    ///
    /// # Errors
    /// As [`MolecularCrystal::new`].
    pub fn displaced(&self, displacements: &[Vector3<f64>]) -> Result<Self, ModelError> {
        let positions = self.positions.iter().zip(displacements);
        let positions = positions.map(|(x, u)| x + u).collect();
        Self::new(self.compound.clone(), self.cell, positions)
    }

    /// The crystal after a homogeneous deformation x ↦ F x of cell and atoms.
    ///
    /// # Errors
    /// As [`MolecularCrystal::new`].
    pub fn deformed(&self, deformation: &Matrix3<f64>) -> Result<Self, ModelError> {
        let positions = self.positions.iter().map(|x| deformation * x).collect();
        let cell = self.cell * deformation.transpose();
        Self::new(self.compound.clone(), cell, positions)
    }

    /// A lattice vector in Cartesian axes, Å.
    pub fn lattice_vector(&self, translation: &Translation) -> Vector3<f64> {
        let fractional = Vector3::from_fn(|c, _| translation[c] as f64);
        self.cell.tr_mul(&fractional)
    }

    /// Calls `visit` once for every interacting pair of the crystal per cell, always in the same order.
    pub fn for_each_pair(&self, mut visit: impl FnMut(&Pair)) {
        let size = self.compound.sites().len();
        for molecule in 0..self.molecule_count() {
            for &(i, j, spring) in self.compound.springs() {
                let (first, second) = (molecule * size + i, molecule * size + j);
                let separation = self.positions[second] - self.positions[first];
                visit(&Pair {
                    first,
                    second,
                    translation: [0, 0, 0],
                    separation,
                    value: spring.at(separation.norm()),
                });
            }
        }
        let reach = self.cell_heights().map(|h| self.compound.cutoff() / h);
        let fractional = self.fractional();
        for first in 0..self.atom_count() {
            for second in first..self.atom_count() {
                let gap = fractional[second] - fractional[first];
                self.visit_contacts(first, second, &gap, &reach, &mut visit);
            }
        }
    }

    fn visit_contacts(
        &self,
        first: usize,
        second: usize,
        gap: &Vector3<f64>,
        reach: &Vector3<f64>,
        visit: &mut impl FnMut(&Pair),
    ) {
        let size = self.compound.sites().len();
        let contact = self.compound.contact(self.site(first), self.site(second));
        let cutoff2 = contact.cutoff * contact.cutoff;
        let same_molecule = first / size == second / size;
        let lower = crate::symmetry::whole(&(-gap - reach).map(f64::floor));
        let upper = crate::symmetry::whole(&(reach - gap).map(f64::ceil));
        let apart = self.positions[second] - self.positions[first];
        for x in lower[0]..=upper[0] {
            for y in lower[1]..=upper[1] {
                for z in lower[2]..=upper[2] {
                    let translation = [x, y, z];
                    let at_home = translation == [0, 0, 0];
                    let counted_before = first == second && translation <= [0, 0, 0];
                    if (same_molecule && at_home) || counted_before {
                        continue;
                    }
                    let separation = apart + self.lattice_vector(&translation);
                    if separation.norm_squared() < cutoff2 {
                        visit(&Pair {
                            first,
                            second,
                            translation,
                            separation,
                            value: contact.at(separation.norm()),
                        });
                    }
                }
            }
        }
    }

    /// Static energy, eV per cell; isolated molecules at rest have none.
    pub fn energy_ev(&self) -> f64 {
        let mut energy = 0.0;
        self.for_each_pair(|pair| energy += pair.value.energy);
        energy
    }

    /// Force on each atom of the cell, eV/Å.
    pub fn forces(&self) -> Vec<Vector3<f64>> {
        let mut forces = vec![Vector3::zeros(); self.atom_count()];
        self.for_each_pair(|pair| {
            let pull = pair.value.gradient(&pair.separation);
            forces[pair.first] += pull;
            forces[pair.second] -= pull;
        });
        forces
    }

    /// Stress: ∂E/∂ε divided by the volume, eV/Å³; positive under tension.
    pub fn stress_ev_per_ang3(&self) -> Matrix3<f64> {
        let mut stress = Matrix3::zeros();
        self.for_each_pair(|pair| {
            stress += pair.value.gradient(&pair.separation) * pair.separation.transpose();
        });
        stress / self.cell.determinant().abs()
    }

    /// Energy with all first and second derivatives by displacement and strain.
    ///
    /// A separation changes by u_j − u_i + ε d, which is linear in the coordinates, so that the second derivative of the
    /// energy is Σ Bᵀ (∂²V/∂d²) B. Cost: 144 products a pair.
    pub fn derivatives(&self) -> Derivatives {
        let order = 3 * self.atom_count() + 6;
        let mut result = Derivatives {
            energy_ev: 0.0,
            gradient: DVector::zeros(order),
            hessian: DMatrix::zeros(order, order),
        };
        self.for_each_pair(|pair| {
            result.energy_ev += pair.value.energy;
            let columns = pair_columns(pair, order - 6);
            let pull = pair.value.gradient(&pair.separation);
            let block = pair.value.hessian(&pair.separation);
            for (row, left) in &columns {
                result.gradient[*row] += left.dot(&pull);
                let bent = block * left;
                for (column, right) in &columns {
                    result.hessian[(*row, *column)] += bent.dot(right);
                }
            }
        });
        result
    }

    /// Index of an atom in its molecule.
    pub fn site(&self, atom: usize) -> usize {
        atom % self.compound.sites().len()
    }
}

/// Columns of B: how the separation of a pair moves with each coordinate that moves it.
fn pair_columns(pair: &Pair, strain_offset: usize) -> [(usize, Vector3<f64>); 12] {
    std::array::from_fn(|k| match k {
        0..3 => (3 * pair.first + k, -axis(k)),
        3..6 => (3 * pair.second + k - 3, axis(k - 3)),
        _ => {
            let (a, b) = STRAIN_AXES[k - 6];
            let mut column = axis(a) * pair.separation[b];
            if a != b {
                column += axis(b) * pair.separation[a];
            }
            (strain_offset + k - 6, column)
        }
    })
}

fn axis(index: usize) -> Vector3<f64> {
    Vector3::from_fn(|c, _| if c == index { 1.0 } else { 0.0 })
}
