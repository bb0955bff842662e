//! A crystal: cell, atoms, masses. Any cell is allowed, left-handed ones too.

use nalgebra::{Matrix3, Vector3};

use crate::elements::Element;
use crate::units::U_PER_ANG3_TO_G_PER_CM3;

/// What is wrong with a crystal, one entry a fault.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum CrystalError {
    /// The cell vectors are not finite, or span no volume.
    #[error("the cell vectors span no volume ({volume_ang3} Å³)")]
    SingularCell {
        /// Volume found, Å³.
        volume_ang3: f64,
    },
    /// No atoms.
    #[error("the crystal holds no atoms")]
    Empty,
    /// Lists of different lengths.
    #[error("{elements} elements, but {positions} positions")]
    PositionCount {
        /// Number of elements.
        elements: usize,
        /// Number of positions.
        positions: usize,
    },
    /// Lists of different lengths.
    #[error("{elements} elements, but {masses} masses")]
    MassCount {
        /// Number of elements.
        elements: usize,
        /// Number of masses.
        masses: usize,
    },
    /// A coordinate is not a finite number.
    #[error("the position of atom {atom} is not finite")]
    PositionNotFinite {
        /// Index of the atom.
        atom: usize,
    },
    /// A mass is not a positive finite number.
    #[error("the mass of atom {atom} is {mass_u} u")]
    MassNotPositive {
        /// Index of the atom.
        atom: usize,
        /// Mass found.
        mass_u: f64,
    },
    /// The element has no standard atomic weight and no mass was given.
    #[error("atom {atom} is {element}, which has no standard atomic weight: give masses")]
    NoStandardWeight {
        /// Index of the atom.
        atom: usize,
        /// Its element.
        element: Element,
    },
}

/// Smallest cell volume taken for a volume, Å³: far below one atom, far above rounding.
const VOLUME_MIN_ANG3: f64 = 1e-3;

/// Cell and atoms of a crystal; see the module documentation.
#[derive(Debug, Clone, PartialEq)]
pub struct Crystal {
    cell: Matrix3<f64>,
    elements: Vec<Element>,
    positions: Vec<Vector3<f64>>,
    masses_u: Vec<f64>,
}

impl Crystal {
    /// A crystal from cell vectors (rows of `cell`, Å), elements, fractional positions and masses in u; without masses
    /// the standard atomic weights are used.
    ///
    /// # Errors
    /// Everything that is wrong, at once.
    pub fn new(
        cell: Matrix3<f64>,
        elements: Vec<Element>,
        positions: Vec<Vector3<f64>>,
        masses_u: Option<Vec<f64>>,
    ) -> Result<Self, Vec<CrystalError>> {
        let mut errors = Vec::new();
        let volume_ang3 = cell.determinant().abs();
        if volume_ang3.is_nan() || volume_ang3 <= VOLUME_MIN_ANG3 || volume_ang3.is_infinite() {
            errors.push(CrystalError::SingularCell { volume_ang3 });
        }
        if elements.is_empty() {
            errors.push(CrystalError::Empty);
        }
        if positions.len() != elements.len() {
            let (elements, positions) = (elements.len(), positions.len());
            errors.push(CrystalError::PositionCount {
                elements,
                positions,
            });
        }
        for (atom, position) in positions.iter().enumerate() {
            if !position.iter().all(|x| x.is_finite()) {
                errors.push(CrystalError::PositionNotFinite { atom });
            }
        }
        let masses_u = masses_u.unwrap_or_else(|| standard_masses(&elements, &mut errors));
        if masses_u.len() != elements.len() {
            let (elements, masses) = (elements.len(), masses_u.len());
            errors.push(CrystalError::MassCount { elements, masses });
        }
        for (atom, &mass_u) in masses_u.iter().enumerate() {
            if !(mass_u.is_finite() && mass_u > 0.0) {
                errors.push(CrystalError::MassNotPositive { atom, mass_u });
            }
        }
        if errors.is_empty() {
            Ok(Self {
                cell,
                elements,
                positions,
                masses_u,
            })
        } else {
            Err(errors)
        }
    }

    /// Rows are the cell vectors a, b, c in Å.
    pub fn cell(&self) -> &Matrix3<f64> {
        &self.cell
    }

    /// Number of atoms in the cell.
    pub fn atom_count(&self) -> usize {
        self.elements.len()
    }

    /// Elements, by atom.
    pub fn elements(&self) -> &[Element] {
        &self.elements
    }

    /// Fractional positions as written: not wrapped into the cell.
    pub fn positions(&self) -> &[Vector3<f64>] {
        &self.positions
    }

    /// Masses in u, by atom.
    pub fn masses_u(&self) -> &[f64] {
        &self.masses_u
    }

    /// Cartesian vector of fractional coordinates, Å.
    pub fn cartesian(&self, fractional: &Vector3<f64>) -> Vector3<f64> {
        self.cell.tr_mul(fractional)
    }

    /// Cell volume, Å³.
    pub fn volume_ang3(&self) -> f64 {
        self.cell.determinant().abs()
    }

    /// Density, g/cm³.
    pub fn density_g_per_cm3(&self) -> f64 {
        self.masses_u.iter().sum::<f64>() / self.volume_ang3() * U_PER_ANG3_TO_G_PER_CM3
    }

    /// Rows are the reciprocal vectors with 2π, Å⁻¹: aᵢ·bⱼ = 2π δᵢⱼ.
    pub fn reciprocal(&self) -> Matrix3<f64> {
        let inverse = self.cell.try_inverse().unwrap_or_else(Matrix3::zeros);
        inverse.transpose() * (2.0 * std::f64::consts::PI)
    }

    /// The same crystal with its atoms elsewhere. `positions` must hold one finite position per atom.
    ///
    /// # Errors
    /// As [`Crystal::new`].
    pub fn with_positions(&self, positions: Vec<Vector3<f64>>) -> Result<Self, Vec<CrystalError>> {
        Self::new(
            self.cell,
            self.elements.clone(),
            positions,
            Some(self.masses_u.clone()),
        )
    }
}

fn standard_masses(elements: &[Element], errors: &mut Vec<CrystalError>) -> Vec<f64> {
    elements
        .iter()
        .enumerate()
        .map(|(atom, element)| {
            element.standard_weight_u().unwrap_or_else(|| {
                errors.push(CrystalError::NoStandardWeight {
                    atom,
                    element: *element,
                });
                1.0
            })
        })
        .collect()
}
