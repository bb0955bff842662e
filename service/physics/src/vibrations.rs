//! Thermodynamics of a crystal from its modes on the q-mesh.

use crate::gamma_point::GammaCorrection;
use crate::qmesh::QMesh;
use crate::thermodynamics::Harmonic;
use crate::units::phonon_energy_unit_ev;

/// Thermodynamic functions of one primitive cell: the mesh sum over positive eigenvalues λ (eV/Å²/u) plus the Γ
/// correction of [`gamma_term`] at the same temperature, with the weight of one mesh point.
///
/// `eigenvalues` by point of the mesh; at Γ the 3n − 3 optical ones. Points of weight zero are skipped. Summed in the
/// order of the points, so that the result does not depend on the number of threads.
pub fn of_mesh(
    mesh: &QMesh,
    eigenvalues: &[Vec<f64>],
    gamma_term: Harmonic,
    temperature_k: f64,
) -> Harmonic {
    let unit = phonon_energy_unit_ev();
    let mut total = Harmonic::default();
    for (point, values) in eigenvalues.iter().enumerate() {
        let weight = mesh.weight(point);
        if weight > 0.0 {
            let modes = values
                .iter()
                .map(|x| Harmonic::of_mode(unit * x.sqrt(), temperature_k));
            total += modes.sum::<Harmonic>() * weight;
        }
    }
    total + gamma_term * (mesh.point_count() as f64).recip()
}

/// c(T) for F, U, S and C_V at once, eV and eV/K.
pub fn gamma_term(gamma: &GammaCorrection, temperature_k: f64) -> Harmonic {
    let [free_energy, internal_energy, entropy, heat_capacity] = gamma.apply(|energy_ev| {
        let mode = Harmonic::of_mode(energy_ev, temperature_k);
        [
            mode.free_energy,
            mode.internal_energy,
            mode.entropy,
            mode.heat_capacity,
        ]
    });
    Harmonic {
        free_energy,
        internal_energy,
        entropy,
        heat_capacity,
    }
}
