use nalgebra::{Matrix3, Vector3};
use tarehouse_physics::force_constants::{FirstIndex, ForceConstantUnit};
use tarehouse_physics::{Crystal, Element, Supercell};

use super::*;
use crate::submission::{Declaration, Displaced, LongRange, Settings};

const RESOLUTION: Resolution = Resolution {
    temperature_k: 300.0,
    free_energy_kj_per_mol: 2.0,
    wavenumber_per_cm: 5.0,
    free_energy_floor_kj_per_mol: 0.01,
    wavenumber_floor_per_cm: 0.1,
};

fn setup(cells: [i64; 3], edge_ang: f64, settings: &Settings) -> Setup {
    let argon = Element::from_symbol("Ar").unwrap();
    let cell = Matrix3::identity() * edge_ang;
    let crystal = Crystal::new(cell, vec![argon], vec![Vector3::zeros()], None).unwrap();
    let rows = [[cells[0], 0, 0], [0, cells[1], 0], [0, 0, cells[2]]];
    let supercell = Supercell::with_default_translations(rows).unwrap();
    let declaration = Declaration {
        unit: ForceConstantUnit::EvPerAngstrom2,
        first_index: FirstIndex::Displaced,
        displaced: Displaced::All,
        raw: true,
        enforced: Vec::new(),
        long_range: LongRange::Included,
    };
    Setup::new(settings, &declaration, &supercell, &crystal, false)
}

fn member(name: &str, setup: Setup, energy: f64, half_width: f64, branch: f64) -> Member {
    let free_energy = vec![FreeEnergy {
        temperature_k: 300.0,
        defined: true,
        central_kj_per_mol: energy,
        lower_kj_per_mol: energy - half_width,
        upper_kj_per_mol: energy + half_width,
        internal_energy_kj_per_mol: 0.0,
        entropy_j_per_mol_k: 0.0,
        heat_capacity_j_per_mol_k: 0.0,
    }];
    let lowest_branches = vec![LowestBranch {
        q: [0.0; 3],
        wavenumber_per_cm: branch,
        lower_per_cm: branch - 1.0,
        upper_per_cm: branch + 1.0,
    }];
    Member {
        name: name.to_owned(),
        setup,
        free_energy,
        lowest_branches,
    }
}

/// Members with ever smaller displacements.
fn displacements(energies: &[(f64, f64)]) -> Vec<Member> {
    let members = energies
        .iter()
        .enumerate()
        .map(|(k, (energy, half_width))| {
            let settings = Settings {
                displacement_angstrom: Some(0.04 / f64::powi(2.0, i32::try_from(k).unwrap())),
                ..Settings::default()
            };
            member(
                &k.to_string(),
                setup([2, 2, 2], 4.0, &settings),
                *energy,
                *half_width,
                40.0,
            )
        });
    members.collect()
}

fn concluded(energies: &[(f64, f64)]) -> (Conclusion, String) {
    let series = judge(&displacements(energies), &RESOLUTION);
    (series.conclusion, series.reason)
}

/// Values with their brackets, what follows, and a word of the reason.
type Example = (&'static [(f64, f64)], Conclusion, &'static str);

#[test]
fn a_series_stops_only_after_two_small_changes_that_do_not_grow() {
    use Conclusion::{CannotBeTold, StillMoving, Stopped};
    let cases: [Example; 9] = [
        (
            &[(5.0, 0.1), (4.90, 0.1), (4.85, 0.1)],
            Stopped,
            "not growing",
        ),
        (
            &[(9.0, 0.1), (5.0, 0.1), (4.90, 0.1), (4.85, 0.1)],
            Stopped,
            "not growing",
        ),
        (
            &[(5.0, 0.1), (4.90, 0.1), (4.79, 0.1)],
            CannotBeTold,
            "grow",
        ),
        (
            &[(5.0, 0.1), (4.95, 0.1), (4.50, 0.1)],
            StillMoving,
            "-0.450 kJ/mol",
        ),
        (
            &[(5.0, 0.1), (4.00, 0.1), (4.00, 0.1)],
            CannotBeTold,
            "Only the last change",
        ),
        // The last two values agree with each other to the digit: that alone proves nothing.
        (&[(4.0, 0.1), (4.0, 0.1)], CannotBeTold, "3 members"),
        (&[(5.0, 0.1), (4.0, 0.1)], StillMoving, "still moves"),
        (&[(4.0, 2.0), (4.0, 2.0), (4.0, 2.0)], CannotBeTold, "hide"),
        (&[(4.0, 0.1)], CannotBeTold, "missing"),
    ];
    for (energies, expected, words) in cases {
        let (found, reason) = concluded(energies);
        if energies.len() > 1 {
            assert!(reason.contains(words), "{energies:?}: {reason}");
        }
        assert_eq!(found, expected, "{energies:?}: {reason}");
    }
}

#[test]
fn brackets_combine_in_squares_on_the_sides_that_face() {
    // sqrt(0.1² + 0.1²) = 0.1414: a change of 0.15 is outside, though 0.1 + 0.1 would hold it.
    assert_eq!(
        concluded(&[(5.0, 0.1), (5.0, 0.1), (5.15, 0.1)]).0,
        Conclusion::StillMoving
    );
    assert_eq!(
        concluded(&[(5.0, 0.1), (5.14, 0.1), (5.0, 0.1)]).0,
        Conclusion::Stopped
    );
    let before = Value {
        central: 0.0,
        lower: -3.0,
        upper: 0.3,
    };
    let after = Value {
        central: 1.0,
        lower: 0.6,
        upper: 9.0,
    };
    assert!((Change::between(&before, &after).combined - 0.5).abs() < 1e-12);
    assert!((Change::between(&after, &before).combined - 0.5).abs() < 1e-12);
}

#[test]
fn members_are_put_from_loose_to_tight_whatever_the_order_given() {
    let mut members = displacements(&[(5.0, 0.1), (4.90, 0.1), (4.85, 0.1)]);
    members.rotate_left(1);
    let series = judge(&members, &RESOLUTION);
    assert_eq!(series.order, [2, 0, 1]);
    assert_eq!(series.differing.len(), 1);
    assert_eq!(series.differing[0].setting, "displacement_angstrom");
    assert_eq!(series.differing[0].values, ["0.04", "0.02", "0.01"]);
    assert_eq!(series.conclusion, Conclusion::Stopped);
    let change = series.quantities[0].changes[1].unwrap();
    assert!((change.change + 0.05).abs() < 1e-12);
    assert!((change.combined - 0.02_f64.sqrt()).abs() < 1e-12);
    let widths: Vec<f64> = series.quantities[1]
        .values
        .iter()
        .map(|v| v.unwrap().central)
        .collect();
    assert!(widths.iter().all(|w| (w - 0.1).abs() < 1e-12));
    assert_eq!(series.quantities[1].conclusion, None);
}

#[test]
fn two_differing_settings_are_named_and_conclude_nothing() {
    let mut members = displacements(&[(5.0, 0.1), (4.90, 0.1), (4.85, 0.1)]);
    let settings = Settings {
        displacement_angstrom: Some(0.01),
        scf_tolerance_ev_per_atom: Some(1e-9),
        ..Settings::default()
    };
    members[2].setup = setup([2, 2, 2], 4.0, &settings);
    let series = judge(&members, &RESOLUTION);
    assert_eq!(series.conclusion, Conclusion::CannotBeTold);
    let names: Vec<&str> = series
        .differing
        .iter()
        .map(|setting| setting.setting)
        .collect();
    assert_eq!(
        names,
        ["displacement_angstrom", "scf_tolerance_ev_per_atom"]
    );
    assert!(
        series
            .reason
            .contains("displacement_angstrom, scf_tolerance_ev_per_atom")
    );
    assert_eq!(
        series.differing[1].values,
        ["undeclared", "undeclared", "1e-9"]
    );
}

#[test]
fn a_supercell_series_grows_along_every_axis_and_keeps_its_geometry() {
    let of = |cells: &[[i64; 3]], edges: &[f64]| {
        let members: Vec<Member> = cells
            .iter()
            .zip(edges)
            .map(|(cells, edge)| {
                member(
                    "m",
                    setup(*cells, *edge, &Settings::default()),
                    5.0,
                    0.1,
                    40.0,
                )
            })
            .collect();
        judge(&members, &RESOLUTION)
    };
    let good = of(&[[3, 3, 3], [1, 1, 1], [2, 2, 2]], &[4.0; 3]);
    assert_eq!(good.order, [1, 2, 0]);
    assert_eq!(good.differing[0].values, ["1×1×1", "2×2×2", "3×3×3"]);
    assert_eq!(good.conclusion, Conclusion::Stopped, "{}", good.reason);
    let thin = of(&[[2, 2, 2], [1, 3, 3], [3, 3, 3]], &[4.0; 3]);
    assert_eq!(thin.conclusion, Conclusion::CannotBeTold);
    assert!(
        thin.reason.contains("shorter along an axis"),
        "{}",
        thin.reason
    );
    let moved = of(&[[1, 1, 1], [2, 2, 2], [3, 3, 3]], &[4.0, 4.0, 4.1]);
    assert!(
        moved.reason.contains("geometry, supercell"),
        "{}",
        moved.reason
    );
    let same = of(&[[2, 2, 2], [2, 2, 2], [2, 2, 2]], &[4.0; 3]);
    assert!(
        same.reason.contains("No declared setting differs"),
        "{}",
        same.reason
    );
    let twice = of(&[[1, 1, 1], [2, 2, 2], [2, 2, 2]], &[4.0; 3]);
    assert!(twice.reason.contains("same supercell"), "{}", twice.reason);
}

#[test]
fn residual_forces_count_only_where_nothing_else_differs() {
    let of = |k_spacings: [f64; 3]| {
        let members: Vec<Member> = k_spacings
            .iter()
            .zip([3e-4, 2e-4, 1e-4])
            .map(|(k_spacing, residual)| {
                let settings = Settings {
                    k_spacing_per_angstrom: Some(*k_spacing),
                    force_residual_rms_ev_per_angstrom: Some(residual),
                    ..Settings::default()
                };
                member("m", setup([2, 2, 2], 4.0, &settings), 5.0, 0.1, 40.0)
            })
            .collect();
        judge(&members, &RESOLUTION)
    };
    let sampled = of([0.4, 0.3, 0.2]);
    assert_eq!(sampled.differing.len(), 1);
    assert_eq!(sampled.differing[0].setting, "k_spacing_per_angstrom");
    let relaxed = of([0.2; 3]);
    assert_eq!(
        relaxed.differing[0].setting,
        "force_residual_rms_ev_per_angstrom"
    );
    assert_eq!(relaxed.conclusion, Conclusion::Stopped);
}

#[test]
fn a_branch_that_moves_moves_the_series_and_points_match_modulo_the_lattice() {
    let mut members = displacements(&[(5.0, 0.1), (5.0, 0.1), (5.0, 0.1)]);
    members[2].lowest_branches[0] = LowestBranch {
        q: [1.0, 0.0, 0.0],
        wavenumber_per_cm: 30.0,
        lower_per_cm: 29.0,
        upper_per_cm: 31.0,
    };
    let extra = LowestBranch {
        q: [0.5, 0.0, 0.0],
        ..members[0].lowest_branches[0]
    };
    members[0].lowest_branches.push(extra);
    let series = judge(&members, &RESOLUTION);
    assert_eq!(
        series.quantities.len(),
        3,
        "only what all members share is compared"
    );
    assert_eq!(
        series.quantities[2].kind,
        QuantityKind::LowestBranch([0.0; 3])
    );
    assert_eq!(series.quantities[0].conclusion, Some(Conclusion::Stopped));
    assert_eq!(series.conclusion, Conclusion::StillMoving);
    assert!(series.reason.contains("-10.000 cm"), "{}", series.reason);
}

#[test]
fn an_undefined_free_energy_cannot_be_told() {
    let mut members = displacements(&[(5.0, 0.1), (5.0, 0.1), (5.0, 0.1), (5.0, 0.1)]);
    members[0].free_energy[0].defined = false;
    assert_eq!(judge(&members, &RESOLUTION).conclusion, Conclusion::Stopped);
    members[1].free_energy[0].defined = false;
    let series = judge(&members, &RESOLUTION);
    assert_eq!(series.conclusion, Conclusion::CannotBeTold);
    assert!(
        series.reason.contains("last three members"),
        "{}",
        series.reason
    );
}
