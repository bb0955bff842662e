//! Ways into the service's own lattice dynamics: what an examination does, step by step, without judgement.

use nalgebra::{Matrix3, Vector3};
use tarehouse_physics::dynamics::Dynamics;
use tarehouse_physics::gamma_point::GammaCorrection;
use tarehouse_physics::images::PairImages;
use tarehouse_physics::long_wave::AcousticMatrix;
use tarehouse_physics::qmesh::QMesh;
use tarehouse_physics::symmetry::SpaceGroup;
use tarehouse_physics::thermodynamics::Harmonic;
use tarehouse_physics::units::{EV_PER_ANG3_TO_GPA, LIGHT_SPEED_M_PER_S, wavenumber_per_cm};
use tarehouse_physics::vibrations;
use tarehouse_physics::{Crystal, ForceConstants};
use tarehouse_tests::models::SpringCrystal;

/// Ties of the built-in policy, Å.
pub(crate) const TIE_TOLERANCE_ANG: f64 = 1e-3;
/// Floor of the long-wave stiffness of the built-in policy.
pub(crate) const STIFFNESS_FLOOR: f64 = 0.03;

/// A diagonal supercell matrix.
pub(crate) fn diagonal(n: i64) -> [[i64; 3]; 3] {
    [[n, 0, 0], [0, n, 0], [0, 0, n]]
}

/// Dynamics of constants without use of symmetry.
pub(crate) fn dynamics_of(crystal: &Crystal, constants: &ForceConstants) -> Dynamics {
    let images = PairImages::find(crystal, constants.supercell(), TIE_TOLERANCE_ANG);
    Dynamics::new(crystal, constants, &images)
}

/// Dynamics of a spring crystal whose constants were folded into a supercell.
pub(crate) fn dynamics(model: &SpringCrystal, supercell: [[i64; 3]; 3]) -> Dynamics {
    dynamics_of(model.crystal(), &model.constants(supercell))
}

/// Frequencies in THz from eigenvalues.
pub(crate) fn thz(eigenvalues: &[f64]) -> Vec<f64> {
    let unit = LIGHT_SPEED_M_PER_S * 1e-10;
    eigenvalues
        .iter()
        .map(|&value| wavenumber_per_cm(value) * unit)
        .collect()
}

/// Modes on a mesh, with the replacement of the acoustic ones at Γ.
pub(crate) struct MeshModes {
    pub(crate) mesh: QMesh,
    /// By inequivalent point; at Γ the optical ones.
    pub(crate) eigenvalues: Vec<Vec<f64>>,
    pub(crate) gamma: GammaCorrection,
}

impl MeshModes {
    /// The modes on a mesh, as an examination computes them.
    pub(crate) fn new(dynamics: &Dynamics, mesh: QMesh) -> Self {
        let acoustic = AcousticMatrix::new(dynamics).unwrap();
        let crystal = dynamics.crystal();
        let gamma = GammaCorrection::new(&acoustic, crystal, mesh.divisions(), STIFFNESS_FLOOR);
        let eigenvalues = mesh
            .points()
            .iter()
            .enumerate()
            .map(|(point, entry)| match point {
                0 => acoustic.optical_modes().eigenvalues,
                _ => dynamics.eigenvalues(&entry.q).unwrap(),
            })
            .collect();
        Self {
            mesh,
            eigenvalues,
            gamma,
        }
    }

    /// The modes on a mesh of these divisions, reduced by `group`.
    pub(crate) fn on(dynamics: &Dynamics, divisions: [u32; 3], group: &SpaceGroup) -> Self {
        let supercell = dynamics.constants().supercell();
        Self::new(dynamics, QMesh::with_divisions(divisions, supercell, group))
    }

    /// Thermodynamic functions of one cell, eV and eV/K.
    pub(crate) fn state(&self, temperature_k: f64) -> Harmonic {
        let gamma_term = vibrations::gamma_term(&self.gamma, temperature_k);
        vibrations::of_mesh(&self.mesh, &self.eigenvalues, gamma_term, temperature_k)
    }

    /// Mean over the mesh of Σ_ν f(ω), ω in sqrt(eV/Å²/u), with the Γ correction.
    pub(crate) fn mean(&self, f: impl Fn(f64) -> f64) -> f64 {
        let sums = self.eigenvalues.iter().enumerate().map(|(point, values)| {
            self.mesh.weight(point) * values.iter().map(|x| f(x.sqrt())).sum::<f64>()
        });
        let unit = tarehouse_physics::units::phonon_energy_unit_ev();
        let [at_gamma] = self.gamma.apply(|energy_ev| [f(energy_ev / unit)]);
        sums.sum::<f64>() + at_gamma / self.mesh.point_count() as f64
    }
}

/// Elastic constants C₁₁, C₁₂, C₄₄ of a cubic crystal with the cube axes along x, y, z, GPa: density times the
/// stiffness of long waves along [100] and [110].
pub(crate) fn cubic_elastic_gpa(dynamics: &Dynamics) -> [f64; 3] {
    let acoustic = AcousticMatrix::new(dynamics).unwrap();
    let crystal = dynamics.crystal();
    let density = crystal.masses_u().iter().sum::<f64>() / crystal.volume_ang3();
    let scale = density * EV_PER_ANG3_TO_GPA;
    let along = |q: Vector3<f64>| -> Matrix3<f64> { acoustic.at(&q) * scale };
    let cube = along(Vector3::x());
    let face = along(Vector3::new(1.0, 1.0, 0.0));
    let (c11, c44) = (cube[(0, 0)], cube[(1, 1)]);
    // M_xy along (1, 1, 0) is C₁₂ + C₄₄.
    [c11, face[(0, 1)] - c44, c44]
}
