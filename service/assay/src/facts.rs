//! Facts about the crystal that a report states beside its findings.

use tarehouse_physics::elastic::ElasticConstants;
use tarehouse_physics::units::EV_TO_KJ_PER_MOL;
use tarehouse_physics::vibrations;

use crate::checks::acoustic::{projection_change, velocities};
use crate::report::{CrystalFacts, FreeEnergy, Mesh};
use crate::spectra::PointSpectrum;
use crate::verdict::judged;
use crate::workup::Workup;

pub(crate) fn facts(
    workup: &Workup<'_>,
    spectra: &[PointSpectrum],
    energies: &[FreeEnergy],
) -> CrystalFacts {
    let units = workup.submission.formula_units();
    let (relative_norm, largest) = projection_change(workup);
    let sound = velocities(workup);
    CrystalFacts {
        space_group_number: workup.group.number,
        space_group_symbol: workup.group.symbol.clone(),
        volume_per_formula_unit_ang3: workup.crystal.volume_ang3() / units,
        density_g_per_cm3: workup.crystal.density_g_per_cm3(),
        molecule_count: u32::try_from(workup.molecules.molecules().len()).unwrap_or(u32::MAX),
        sound_velocity_min_m_per_s: sound.map(|range| range.0),
        sound_velocity_max_m_per_s: sound.map(|range| range.1),
        projection_relative_norm: relative_norm,
        projection_largest_ev_per_ang2: largest,
        projection_free_energy_kj_per_mol: projection_free_energy(workup, spectra, energies),
        lattice_energy_kj_per_mol: workup.submission.energy.lattice_energy_ev * EV_TO_KJ_PER_MOL
            / units,
        polar_modes: crate::polar::modes_by_direction(workup),
        compressibility_per_gpa: ElasticConstants::of(&workup.acoustic, &workup.crystal)
            .compressibility_per_gpa(),
    }
}

/// F of the projected minus F of the raw constants at the judged temperature; `None` where either is soft.
fn projection_free_energy(
    workup: &Workup<'_>,
    spectra: &[PointSpectrum],
    energies: &[FreeEnergy],
) -> Option<f64> {
    let judged = judged(workup, energies)?;
    let raw: Vec<Vec<f64>> = spectra.iter().map(|s| s.raw.clone()).collect();
    let exact: Vec<Vec<f64>> = spectra.iter().map(|s| s.eigenvalues.clone()).collect();
    let is_soft = |all: &[Vec<f64>]| all.iter().flatten().any(|x| *x <= 0.0);
    if is_soft(&raw) || is_soft(&exact) {
        return None;
    }
    let gamma = vibrations::gamma_term(&workup.gamma, judged.temperature_k);
    let sum = |values: &[Vec<f64>]| {
        vibrations::of_mesh(&workup.mesh, values, gamma, judged.temperature_k).free_energy
    };
    let to_kj = EV_TO_KJ_PER_MOL / workup.submission.formula_units();
    Some((sum(&exact) - sum(&raw)) * to_kj)
}

pub(crate) fn mesh(workup: &Workup<'_>) -> Mesh {
    let count = |x: usize| u32::try_from(x).unwrap_or(u32::MAX);
    Mesh {
        divisions: workup.mesh.divisions(),
        point_count: count(workup.mesh.point_count()),
        irreducible_count: count(
            workup
                .mesh
                .points()
                .iter()
                .filter(|p| p.multiplicity > 0)
                .count(),
        ),
    }
}
