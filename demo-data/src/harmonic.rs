//! A minimal harmonic sum, used for the claims that packages make. The service computes its own.

use nalgebra::{Matrix3, Vector3};
use rayon::prelude::*;
use tarehouse_physics::units::{BOLTZMANN_EV_PER_K, phonon_energy_unit_ev};

use crate::ModelError;
use crate::constants::RealSpaceConstants;

/// A regular mesh of wave vectors in fractional reciprocal coordinates.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Mesh {
    /// Points along each reciprocal axis.
    pub divisions: [u32; 3],
    /// Whether the mesh is displaced by half a step along each axis, so that it misses Γ.
    pub half_shifted: bool,
}

impl Mesh {
    /// The mesh with steps of at most `spacing` Å⁻¹ (2π included), each division a multiple of `multiples`.
    #[allow(
        clippy::cast_possible_truncation,
        clippy::cast_sign_loss,
        reason = "divisions of a mesh are small positive numbers"
    )]
    pub fn with_spacing(
        reciprocal: &Matrix3<f64>,
        spacing: f64,
        multiples: [u32; 3],
        half_shifted: bool,
    ) -> Self {
        let divisions = std::array::from_fn(|c| {
            let least = (reciprocal.row(c).norm() / spacing).ceil().max(1.0) as u32;
            least.next_multiple_of(multiples[c].max(1))
        });
        Self {
            divisions,
            half_shifted,
        }
    }

    /// Its points up to q → −q, each with its multiplicity.
    pub fn points(&self) -> Vec<(Vector3<f64>, f64)> {
        let [nx, ny, nz] = self.divisions;
        let offset = u32::from(self.half_shifted);
        let mut points = Vec::new();
        for x in 0..nx {
            for y in 0..ny {
                for z in 0..nz {
                    let here = [x, y, z];
                    let mirror: [u32; 3] = std::array::from_fn(|c| {
                        let n = self.divisions[c];
                        (2 * n - here[c] - offset) % n
                    });
                    if here > mirror {
                        continue;
                    }
                    let multiplicity = if here == mirror { 1.0 } else { 2.0 };
                    let q = Vector3::from_fn(|c, _| {
                        (f64::from(here[c]) + 0.5 * f64::from(offset))
                            / f64::from(self.divisions[c])
                    });
                    points.push((q, multiplicity));
                }
            }
        }
        points
    }
}

/// Eigenvalues (eV/Å²/u) at the points of a mesh, with the multiplicity of each point.
#[derive(Debug, Clone, PartialEq)]
pub struct Spectrum {
    /// (eigenvalues ascending, multiplicity), by point.
    pub points: Vec<(Vec<f64>, f64)>,
}

impl Spectrum {
    /// The exact spectrum over a mesh.
    ///
    /// # Errors
    /// [`ModelError::Eigenproblem`].
    pub fn exact(constants: &RealSpaceConstants, mesh: &Mesh) -> Result<Self, ModelError> {
        let points = mesh
            .points()
            .into_par_iter()
            .map(|(q, multiplicity)| Ok((constants.eigenvalues(&q)?, multiplicity)))
            .collect::<Result<_, ModelError>>()?;
        Ok(Self { points })
    }

    /// Lowest eigenvalue, eV/Å²/u.
    pub fn lowest(&self) -> f64 {
        let all = self.points.iter().flat_map(|(values, _)| values);
        all.copied().fold(f64::MAX, f64::min)
    }

    /// Vibrational free energy, eV per cell: mean over q of Σ [ħω/2 + kT ln(1 − exp(−ħω/kT))]; at 0 K the zero-point
    /// energy. Modes that are not positive are left out, so that it holds only for a stable crystal.
    pub fn free_energy_ev(&self, temperature_k: f64) -> f64 {
        let thermal = BOLTZMANN_EV_PER_K * temperature_k;
        let mode = |eigenvalue: f64| {
            let quantum = phonon_energy_unit_ev() * eigenvalue.sqrt();
            let excited = if thermal > 0.0 {
                thermal * (-(-quantum / thermal).exp_m1()).ln()
            } else {
                0.0
            };
            0.5 * quantum + excited
        };
        let (mut sum, mut weight) = (0.0, 0.0);
        for (values, multiplicity) in &self.points {
            let here: f64 = values.iter().filter(|x| **x > 0.0).map(|x| mode(*x)).sum();
            sum += multiplicity * here;
            weight += multiplicity;
        }
        sum / weight
    }
}
