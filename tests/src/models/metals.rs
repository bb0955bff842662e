//! Born–von Kármán models of cubic metals from `reference/bvk_models.toml`; units, sources and
//! marks are in that file.

use nalgebra::Matrix3;
use serde::Deserialize;
use std::collections::BTreeMap;
use tarehouse_physics::units::EV_PER_ANG2_TO_N_PER_M;

use super::{Cubic, SpringCrystal, cubic_crystal, cubic_operations};

/// Vectors that stand for the shells of fcc, in half edges.
const FACE_SHELLS: [[i64; 3]; 8] = [
    [1, 1, 0],
    [2, 0, 0],
    [2, 1, 1],
    [2, 2, 0],
    [3, 1, 0],
    [2, 2, 2],
    [3, 2, 1],
    [4, 0, 0],
];
/// Vectors that stand for the shells of bcc, in half edges.
const BODY_SHELLS: [[i64; 3]; 6] = [
    [1, 1, 1],
    [2, 0, 0],
    [2, 2, 0],
    [3, 1, 1],
    [2, 2, 2],
    [4, 0, 0],
];

/// One model as it stands in the file.
#[derive(Debug, Clone, Deserialize)]
pub struct Metal {
    /// Chemical symbol.
    pub element: String,
    lattice: String,
    /// Cube edge, Å.
    pub a_angstrom: f64,
    /// Mass, u.
    pub mass_u: f64,
    #[serde(rename = "K_N_per_m")]
    stiffness_n_per_m: BTreeMap<String, f64>,
    /// What a second program computed from the same constants.
    pub computed: Computed,
}

/// Outputs of the second program; wavenumbers as frequencies in THz, ascending.
#[derive(Debug, Clone, Deserialize)]
pub struct Computed {
    /// Entropy at 298.15 K on the half-shifted 16³ mesh, J/mol/K.
    #[serde(rename = "S_298_mesh16")]
    pub entropy_mesh16: f64,
    /// Free energy at 298.15 K on the half-shifted 16³ mesh, kJ/mol.
    #[serde(rename = "F_298_mesh16")]
    pub free_energy_mesh16: f64,
    /// Zero-point energy in the limit of dense meshes, kJ/mol.
    #[serde(rename = "E_zero_point_kJ_mol")]
    pub zero_point_kj_per_mol: f64,
    /// Heat capacity at 298.15 K in the limit of dense meshes, J/mol/K.
    #[serde(rename = "Cv_298_J_molK")]
    pub heat_capacity: f64,
    #[serde(flatten)]
    rest: BTreeMap<String, toml::Value>,
}

impl Metal {
    /// All models of the file, by name.
    ///
    /// # Panics
    /// If the file is not what this module expects.
    #[allow(clippy::expect_used, reason = "the file is part of the tests")]
    pub fn all() -> BTreeMap<String, Self> {
        toml::from_str(include_str!("../../reference/bvk_models.toml")).expect("a readable file")
    }

    /// Its lattice.
    pub fn lattice(&self) -> Cubic {
        if self.lattice == "fcc" {
            Cubic::Face
        } else {
            Cubic::Body
        }
    }

    /// Its zone-boundary points: name, wave vector in units of 2π/a, tabulated frequencies in THz.
    pub fn zone_boundary(&self) -> Vec<(&'static str, [f64; 3], Vec<f64>)> {
        const FACE: [(&str, [f64; 3]); 4] = [
            ("X", [1.0, 0.0, 0.0]),
            ("L", [0.5, 0.5, 0.5]),
            ("K", [0.75, 0.75, 0.0]),
            ("W", [1.0, 0.5, 0.0]),
        ];
        const BODY: [(&str, [f64; 3]); 3] = [
            ("H", [1.0, 0.0, 0.0]),
            ("P", [0.5, 0.5, 0.5]),
            ("N", [0.5, 0.5, 0.0]),
        ];
        let points: &[(&'static str, [f64; 3])] = match self.lattice() {
            Cubic::Face => &FACE,
            Cubic::Body => &BODY,
        };
        points
            .iter()
            .map(|&(name, reduced)| (name, reduced, self.tabulated(name)))
            .collect()
    }

    /// The crystal with all shells of the model.
    pub fn model(&self) -> SpringCrystal {
        let shells: &[[i64; 3]] = match self.lattice() {
            Cubic::Face => &FACE_SHELLS,
            Cubic::Body => &BODY_SHELLS,
        };
        let filled: Vec<_> = shells
            .iter()
            .zip(1..)
            .map(|(&vector, shell)| (vector, self.tensor(vector, shell)))
            .filter(|(_, tensor)| tensor.amax() > 0.0)
            .collect();
        cubic_crystal(self.lattice(), self.a_angstrom, self.mass_u, &filled)
    }

    /// A single output of the second program by its key; NaN where there is none.
    pub fn computed_value(&self, key: &str) -> f64 {
        let value = self.computed.rest.get(key);
        value.and_then(toml::Value::as_float).unwrap_or(f64::NAN)
    }

    /// C₁₁, C₁₂, C₄₄ of the model in GPa, as the second program found them.
    pub fn elastic_gpa(&self) -> Vec<f64> {
        self.list("C11_C12_C44_GPa")
    }

    fn tabulated(&self, point: &str) -> Vec<f64> {
        self.list(&format!("nu_THz_{point}"))
    }

    fn list(&self, key: &str) -> Vec<f64> {
        let values = self.computed.rest.get(key).and_then(toml::Value::as_array);
        let values = values.into_iter().flatten();
        values.filter_map(toml::Value::as_float).collect()
    }

    /// K of one shell, eV/Å²: the listed elements, and those that follow by K = Kᵀ and the
    /// operations that keep R.
    fn tensor(&self, vector: [i64; 3], shell: u32) -> Matrix3<f64> {
        let stabiliser: Vec<_> = cubic_operations()
            .into_iter()
            .filter(|operation| operation.apply(vector) == vector)
            .collect();
        let mut tensor = Matrix3::zeros();
        for (name, value) in &self.stiffness_n_per_m {
            let Some(axes) = name.strip_prefix(&shell.to_string()) else {
                continue;
            };
            let axes: Vec<usize> = axes.bytes().map(|byte| usize::from(byte - b'X')).collect();
            let mut seed = Matrix3::zeros();
            seed[(axes[0], axes[1])] = value / EV_PER_ANG2_TO_N_PER_M;
            for operation in &stabiliser {
                let matrix = operation.matrix();
                let image: Matrix3<f64> = matrix * seed * matrix.transpose();
                for (index, element) in image.iter().enumerate().filter(|(_, x)| **x != 0.0) {
                    let (a, b) = (index % 3, index / 3);
                    tensor[(a, b)] = *element;
                    tensor[(b, a)] = *element;
                }
            }
        }
        tensor
    }
}
