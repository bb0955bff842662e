//! What is left of the mesh error of F(300 K) with the correction at Γ, on invented molecular crystals.
//!
//! Each crystal is folded into a supercell that holds its constants without aliasing; the same dynamics is summed on a
//! coarse, on the standard and on a fine mesh. What differs is the mesh alone.

use std::fmt::Write as _;

use rand::SeedableRng;
use rand_chacha::ChaCha8Rng;
use rayon::prelude::*;
use tarehouse_demo_data::forms::{
    DROSMELIDE_I, DROSMELIDE_II, DROSMELIDE_III, Form, PELQUONOL_ALPHA, PELQUONOL_BETA, Substance,
};
use tarehouse_demo_data::packing::random_packing;
use tarehouse_demo_data::relax::{Limits, relax};
use tarehouse_demo_data::scenario::diagonal_supercell;
use tarehouse_demo_data::{MolecularCrystal, RealSpaceConstants, SpaceGroup};
use tarehouse_physics::Crystal;
use tarehouse_physics::dynamics::Dynamics;
use tarehouse_physics::images::PairImages;
use tarehouse_physics::projection::projected;
use tarehouse_physics::symmetry;
use tarehouse_physics::units::EV_TO_KJ_PER_MOL;

use crate::service::{MeshModes, TIE_TOLERANCE_ANG};

const TEMPERATURE_K: f64 = 300.0;
/// Coarser meshes, then the spacing of the standard mesh of the built-in policy, Å⁻¹.
const SPACINGS: [f64; 3] = [0.40, 0.30, 0.20];
/// Spacing of the mesh that stands for the integral, Å⁻¹.
const FINE: f64 = 0.08;
/// Twice the range of the invented potentials, Å: supercells as thick hold every constant unaliased.
const UNALIASED_ANG: f64 = 12.0;
/// A minimum for every purpose here.
const RELAXED: Limits = Limits {
    force_ev_per_ang: 1e-9,
    stress_ev_per_ang3: 1e-9,
    iterations: 300,
};
/// Median and largest error at the standard spacing that are allowed, kJ/mol per molecule. Asked for are 0.001 and 0.01;
/// measured were 0.00008 and 0.00040 over the crystals below.
const MEDIAN_MAX: f64 = 0.0002;
const LARGEST_MAX: f64 = 0.001;

/// Forms of the demonstration data, and seeds of random packings that relax to minima stable on a fine mesh.
const FORMS: [Form; 5] = [
    DROSMELIDE_I,
    DROSMELIDE_II,
    DROSMELIDE_III,
    PELQUONOL_ALPHA,
    PELQUONOL_BETA,
];
const PACKINGS: [(Substance, SpaceGroup, u64); 9] = [
    (Substance::Drosmelide, SpaceGroup::P1, 0),
    (Substance::Drosmelide, SpaceGroup::PBar1, 5),
    (Substance::Drosmelide, SpaceGroup::P21, 3),
    (Substance::Drosmelide, SpaceGroup::Pc, 5),
    (Substance::Pelquonol, SpaceGroup::P1, 0),
    (Substance::Pelquonol, SpaceGroup::PBar1, 2),
    (Substance::Pelquonol, SpaceGroup::P21, 0),
    (Substance::Pelquonol, SpaceGroup::P21, 2),
    (Substance::Pelquonol, SpaceGroup::P21c, 4),
];

fn packed(substance: Substance, group: SpaceGroup, seed: u64) -> MolecularCrystal {
    let mut rng = ChaCha8Rng::seed_from_u64(seed);
    let compound = substance.compound().unwrap();
    let start = random_packing(&compound, group, &mut rng).unwrap().unwrap();
    relax(&start, group, RELAXED).unwrap()
}

/// Dynamics of a model crystal as an examination sets it up, with its space group.
fn dynamics(model: &MolecularCrystal) -> (Dynamics, symmetry::SpaceGroup) {
    let exact = RealSpaceConstants::of(model).unwrap();
    let group = symmetry::SpaceGroup::find(exact.crystal(), 1e-3).unwrap();
    let crystal = group.symmetrised(exact.crystal());
    let counts = model.cell_heights().map(|h| (UNALIASED_ANG / h).ceil());
    let counts: [i64; 3] =
        std::array::from_fn(|c| (1..9).find(|n| *n as f64 >= counts[c]).unwrap());
    let supercell = diagonal_supercell(counts).unwrap();
    let constants = projected(&exact.folded(&supercell).unwrap(), &group);
    let images = PairImages::find(&crystal, &supercell, TIE_TOLERANCE_ANG);
    let dynamics = match group.inversion() {
        Some(inversion) => Dynamics::with_inversion(&crystal, &constants, &images, inversion),
        None => Dynamics::new(&crystal, &constants, &images),
    };
    (dynamics, group)
}

/// n = ceil(|b|/Δ), without rounding up to the supercell.
fn divisions(crystal: &Crystal, spacing: f64) -> [u32; 3] {
    let reciprocal = crystal.reciprocal();
    std::array::from_fn(|axis| {
        let wanted = reciprocal.row(axis).norm() / spacing;
        (1..500).find(|n| f64::from(*n) >= wanted).unwrap()
    })
}

struct Outcome {
    name: String,
    group: u32,
    /// F at [`SPACINGS`] less that on the fine mesh, kJ/mol per molecule.
    errors: [f64; 3],
}

fn outcome(name: String, model: &MolecularCrystal) -> Outcome {
    let (dynamics, group) = dynamics(model);
    let free_energy = |spacing: f64| {
        let modes = MeshModes::on(&dynamics, divisions(dynamics.crystal(), spacing), &group);
        let lowest = modes.eigenvalues.iter().flatten().copied();
        assert!(lowest.fold(f64::INFINITY, f64::min) > 0.0, "{name} is soft");
        assert!(!modes.gamma.unstable, "{name} has soft long waves");
        let state = modes.state(TEMPERATURE_K);
        state.free_energy * EV_TO_KJ_PER_MOL / model.molecule_count() as f64
    };
    let fine = free_energy(FINE);
    let errors = SPACINGS.map(|spacing| free_energy(spacing) - fine);
    Outcome {
        name,
        group: group.number,
        errors,
    }
}

fn median(mut values: Vec<f64>) -> f64 {
    values.sort_by(f64::total_cmp);
    values[values.len() / 2]
}

#[test]
fn standard_mesh_with_the_gamma_correction_is_converged() {
    let mut models: Vec<(String, MolecularCrystal)> = FORMS
        .iter()
        .map(|form| {
            (
                format!("{:?} {}", form.substance, form.label),
                form.crystal().unwrap(),
            )
        })
        .collect();
    models.extend(
        PACKINGS
            .into_par_iter()
            .map(|(substance, group, seed)| {
                let name = format!("{substance:?} {} {seed}", group.symbol());
                (name, packed(substance, group, seed))
            })
            .collect::<Vec<_>>(),
    );
    let outcomes: Vec<Outcome> = models
        .into_par_iter()
        .map(|(name, model)| outcome(name, &model))
        .collect();
    let mut table = String::new();
    for outcome in &outcomes {
        writeln!(
            table,
            "{} {}: {:.5?}",
            outcome.name, outcome.group, outcome.errors
        )
        .unwrap();
    }
    let groups: std::collections::BTreeSet<u32> = outcomes.iter().map(|o| o.group).collect();
    assert!(outcomes.len() >= 8 && groups.len() >= 5, "{groups:?}");
    let sizes = |which: usize| outcomes.iter().map(move |o| o.errors[which].abs());
    let largest = [0, 1, 2].map(|which| sizes(which).fold(0.0, f64::max));
    let medians = [0, 1, 2].map(|which| median(sizes(which).collect()));
    writeln!(table, "medians {medians:.5?}, largest {largest:.5?}").unwrap();
    assert!(
        medians[2] <= MEDIAN_MAX && largest[2] <= LARGEST_MAX,
        "{table}"
    );
    // At least the fourth power of the spacing. At 0.40 Å⁻¹ single crystals are not yet in the regime of a power law: the
    // median of all falls step by step, the root of the mean square from first to last, the largest in the last step.
    let fourth_power = |coarse: usize, fine: usize| (SPACINGS[coarse] / SPACINGS[fine]).powi(4);
    let rms = [0, 1, 2].map(|which| sizes(which).map(|x| x * x).sum::<f64>().sqrt());
    assert!(medians[0] / medians[1] >= fourth_power(0, 1), "{table}");
    assert!(medians[1] / medians[2] >= fourth_power(1, 2), "{table}");
    assert!(largest[1] / largest[2] >= fourth_power(1, 2), "{table}");
    assert!(rms[0] / rms[2] >= fourth_power(0, 2), "{table} {rms:?}");
}
