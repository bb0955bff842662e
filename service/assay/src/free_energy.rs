//! Free energies of one formula unit on the policy's temperature grid, each with its bracket.
//!
//! The central value uses λ_eff for soft modes that are called numerical. The bracket's half width is
//! 2.5 standard deviations of the null draws, ½|their bias|, 1.4 |F(other sharing) − F(nearest images)|,
//! F_rms(k0 + k1 T) and a floor, added up; multiples and floor from the policy. It holds the upload's own noise, aliasing and
//! residual force. It does not hold the level of theory, anharmonicity or expansion.

use rayon::prelude::*;
use tarehouse_physics::thermodynamics::Harmonic;
use tarehouse_physics::units::EV_TO_KJ_PER_MOL;
use tarehouse_physics::vibrations;

use crate::report::FreeEnergy;
use crate::spectra::{PointSpectrum, mean_and_deviation};
use crate::workup::Workup;

/// Free energies on the grid. Where a cluster is possibly physical there is no harmonic free energy: `defined` is false.
pub(crate) fn free_energies(
    workup: &Workup<'_>,
    spectra: &[PointSpectrum],
    defined: bool,
) -> Vec<FreeEnergy> {
    let grid = &workup.limits.temperature_grid_k;
    if !defined {
        return grid.iter().map(|t| undefined(*t)).collect();
    }
    let central: Vec<Vec<f64>> = spectra.iter().map(|s| s.effective.clone()).collect();
    let other: Vec<Vec<f64>> = spectra.iter().map(|s| s.other_sharing.clone()).collect();
    let draws: Vec<Vec<Vec<f64>>> = (0..workup.limits.soft_modes.noise_draws)
        .map(|k| spectra.iter().map(|s| s.drawn[k].clone()).collect())
        .collect();
    grid.par_iter()
        .map(|t| at(workup, &central, &other, &draws, *t))
        .collect()
}

fn undefined(temperature_k: f64) -> FreeEnergy {
    FreeEnergy {
        temperature_k,
        defined: false,
        central_kj_per_mol: 0.0,
        lower_kj_per_mol: 0.0,
        upper_kj_per_mol: 0.0,
        internal_energy_kj_per_mol: 0.0,
        entropy_j_per_mol_k: 0.0,
        heat_capacity_j_per_mol_k: 0.0,
    }
}

fn at(
    workup: &Workup<'_>,
    central: &[Vec<f64>],
    other: &[Vec<f64>],
    draws: &[Vec<Vec<f64>>],
    temperature_k: f64,
) -> FreeEnergy {
    let limits = &workup.limits.bracket;
    let to_kj = EV_TO_KJ_PER_MOL / workup.submission.formula_units();
    let gamma_term = vibrations::gamma_term(&workup.gamma, temperature_k);
    let sum = |eigenvalues: &[Vec<f64>]| {
        vibrations::of_mesh(&workup.mesh, eigenvalues, gamma_term, temperature_k) * to_kj
    };
    let value = sum(central);
    let drawn: Vec<Harmonic> = draws.iter().map(|draw| sum(draw)).collect();
    let drawn_energies: Vec<f64> = drawn.iter().map(|h| h.free_energy).collect();
    let (_, deviation) = mean_and_deviation(&drawn_energies);
    let trusts_bias = !workup.noise.summary.bound_only && !workup.noise.summary.truncated;
    let bias = if trusts_bias {
        drawn.iter().copied().sum::<Harmonic>() * (drawn.len() as f64).recip() + value * -1.0
    } else {
        Harmonic::default()
    };
    let centre = value + bias * -0.5;
    let alias = (sum(other).free_energy - value.free_energy).abs();
    let per_molecule =
        workup.molecules.molecules().len() as f64 / workup.submission.formula_units();
    let residual = residual_force(workup)
        * (limits.residual_force_k0 + limits.residual_force_k1_per_k * temperature_k);
    let half_width = limits.draw_multiple * deviation
        + 0.5 * bias.free_energy.abs()
        + limits.alias_multiple * alias
        + (residual + limits.floor_kj_per_mol) * per_molecule;
    FreeEnergy {
        temperature_k,
        defined: true,
        central_kj_per_mol: centre.free_energy,
        lower_kj_per_mol: centre.free_energy - half_width,
        upper_kj_per_mol: centre.free_energy + half_width,
        internal_energy_kj_per_mol: centre.internal_energy,
        entropy_j_per_mol_k: 1e3 * centre.entropy,
        heat_capacity_j_per_mol_k: 1e3 * centre.heat_capacity,
    }
}

/// Declared rms residual force, eV/Å. With only the largest |F_i| declared, that bounds it from above; with neither, the
/// policy's value.
fn residual_force(workup: &Workup<'_>) -> f64 {
    let settings = &workup.submission.settings;
    settings
        .force_residual_rms_ev_per_angstrom
        .or(settings.force_residual_max_ev_per_angstrom)
        .unwrap_or(
            workup
                .limits
                .bracket
                .residual_force_undeclared_ev_per_angstrom,
        )
}
