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

use crate::report::{BracketParts, FreeEnergy};
use crate::spectra::{PointSpectrum, mean_and_deviation};
use crate::workup::Workup;

/// Free energies on the grid, with what their brackets are made of.
pub(crate) struct FreeEnergies {
    /// By temperature.
    pub(crate) values: Vec<FreeEnergy>,
    /// By temperature; empty where undefined.
    pub(crate) parts: Vec<BracketParts>,
    /// Joint draws: each holds one F for every temperature. Empty where undefined.
    pub(crate) draws: Vec<Vec<f64>>,
}

impl FreeEnergies {
    /// The parts of the bracket at the policy's judged temperature, where defined.
    pub(crate) fn judged_parts(&self, workup: &Workup<'_>) -> Option<BracketParts> {
        let judged = workup.limits.bracket.judged_temperature_k;
        let is_judged = |f: &FreeEnergy| (f.temperature_k - judged).abs() < f64::EPSILON;
        let place = self.values.iter().position(is_judged)?;
        self.parts.get(place).copied()
    }
}

/// Free energies on the grid. Where a cluster is possibly physical there is no harmonic free energy: `defined` is false.
pub(crate) fn free_energies(
    workup: &Workup<'_>,
    spectra: &[PointSpectrum],
    defined: bool,
) -> FreeEnergies {
    let grid = &workup.limits.temperature_grid_k;
    if !defined {
        let values = grid.iter().map(|t| undefined(*t)).collect();
        return FreeEnergies {
            values,
            parts: Vec::new(),
            draws: Vec::new(),
        };
    }
    let central: Vec<Vec<f64>> = spectra.iter().map(|s| s.effective.clone()).collect();
    let other: Vec<Vec<f64>> = spectra.iter().map(|s| s.other_sharing.clone()).collect();
    let draws: Vec<Vec<Vec<f64>>> = (0..workup.limits.soft_modes.noise_draws)
        .map(|k| spectra.iter().map(|s| s.drawn[k].clone()).collect())
        .collect();
    let points: Vec<Point> = grid
        .par_iter()
        .map(|t| at(workup, &central, &other, &draws, *t))
        .collect();
    let draws = joint_draws(workup, &points);
    let (values, parts) = points.into_iter().map(|p| (p.value, p.parts)).unzip();
    FreeEnergies {
        values,
        parts,
        draws,
    }
}

/// One temperature: value, bracket, and the deviation of each null draw from their mean.
struct Point {
    value: FreeEnergy,
    parts: BracketParts,
    deviations: Vec<f64>,
}

/// Joint draws of F(T), so that differences between forms and their crossings keep the correlation in T.
///
/// δ(T) = Σ_k g_k d_k(T)/√(K − 1) + g_a a(T), with d_k the deviations of the K null draws, a the alias part of the
/// bracket taken as two standard deviations, and g independent standard normals from the package digest: the covariance
/// over T is that of the null draws, without further diagonalisation. Numerical noise only.
fn joint_draws(workup: &Workup<'_>, points: &[Point]) -> Vec<Vec<f64>> {
    let null_draws = workup.limits.soft_modes.noise_draws;
    let scale = (null_draws as f64 - 1.0).sqrt().recip();
    let mut normal = workup.noise.normal_stream();
    (0..workup.limits.bracket.joint_draws)
        .map(|_| {
            let weights: Vec<f64> = (0..null_draws).map(|_| scale * normal()).collect();
            let alias = 0.5 * normal();
            points
                .iter()
                .map(|point| {
                    let noise: f64 = weights
                        .iter()
                        .zip(&point.deviations)
                        .map(|(g, d)| g * d)
                        .sum();
                    point.value.central_kj_per_mol + noise + alias * point.parts.alias_kj_per_mol
                })
                .collect()
        })
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
) -> Point {
    let limits = &workup.limits.bracket;
    let to_kj = EV_TO_KJ_PER_MOL / workup.submission.formula_units();
    let gamma_term = vibrations::gamma_term(&workup.gamma, temperature_k);
    let sum = |eigenvalues: &[Vec<f64>]| {
        vibrations::of_mesh(&workup.mesh, eigenvalues, gamma_term, temperature_k) * to_kj
    };
    let value = sum(central);
    let drawn: Vec<Harmonic> = draws.iter().map(|draw| sum(draw)).collect();
    let drawn_energies: Vec<f64> = drawn.iter().map(|h| h.free_energy).collect();
    let (mean, deviation) = mean_and_deviation(&drawn_energies);
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
    let parts = BracketParts {
        noise_kj_per_mol: limits.draw_multiple * deviation,
        bias_kj_per_mol: 0.5 * bias.free_energy.abs(),
        alias_kj_per_mol: limits.alias_multiple * alias,
        residual_force_kj_per_mol: residual * per_molecule,
        floor_kj_per_mol: limits.floor_kj_per_mol * per_molecule,
    };
    let half_width = parts.half_width_kj_per_mol();
    let value = FreeEnergy {
        temperature_k,
        defined: true,
        central_kj_per_mol: centre.free_energy,
        lower_kj_per_mol: centre.free_energy - half_width,
        upper_kj_per_mol: centre.free_energy + half_width,
        internal_energy_kj_per_mol: centre.internal_energy,
        entropy_j_per_mol_k: 1e3 * centre.entropy,
        heat_capacity_j_per_mol_k: 1e3 * centre.heat_capacity,
    };
    let deviations = drawn_energies.iter().map(|f| f - mean).collect();
    Point {
        value,
        parts,
        deviations,
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
