//! Which forms are stable, what the packages show of it, and how the ranking changes with temperature.

use nalgebra::Vector3;
use tarehouse_demo_data::constants::RealSpaceConstants;
use tarehouse_demo_data::folded::Interpolation;
use tarehouse_demo_data::forms::{self, Form};
use tarehouse_demo_data::harmonic::{Mesh, Spectrum};
use tarehouse_demo_data::scenario;
use tarehouse_physics::units::{
    BOLTZMANN_EV_PER_K, EV_TO_KJ_PER_MOL, eigenvalue_of_wavenumber, wavenumber_per_cm,
};

use crate::packages::entry;

fn exact(form: &Form) -> RealSpaceConstants {
    RealSpaceConstants::of(&form.crystal().unwrap()).unwrap()
}

fn stable_forms() -> impl Iterator<Item = Form> {
    forms::ALL
        .into_iter()
        .filter(|form| *form != forms::DROSMELIDE_V)
}

const GOOD: [&str; 5] = [
    "drosmelide-i",
    "drosmelide-ii",
    "drosmelide-iii",
    "pelquonol-alpha",
    "pelquonol-beta",
];

/// Largest |λ| that rounding leaves of a rigid translation, eV/Å²/u.
const RIGID: f64 = 1e-10;

#[test]
fn stable_forms_have_no_soft_mode_on_a_fine_mesh() {
    for form in stable_forms() {
        let exact = exact(&form);
        let reciprocal = exact.crystal().reciprocal();
        for half_shifted in [false, true] {
            let mesh = Mesh::with_spacing(&reciprocal, 0.13, [2, 2, 2], half_shifted);
            let lowest = Spectrum::exact(&exact, &mesh).unwrap().lowest();
            assert!(
                lowest > if half_shifted { 1e-6 } else { -RIGID },
                "{}: {lowest}",
                form.label
            );
        }
    }
}

#[test]
fn the_unstable_form_is_soft_at_a_commensurate_point() {
    let entry = entry("drosmelide-v-unstable");
    let (_, exact, constants) = entry.parts().unwrap();
    let q = Vector3::new(0.5, 0.0, 0.0);
    assert!(constants.supercell().is_commensurate(&q, 1e-12));
    let lowest = exact.eigenvalues(&q).unwrap()[0];
    assert!(
        wavenumber_per_cm(lowest) < -15.0,
        "{}",
        wavenumber_per_cm(lowest)
    );
    let interpolation = Interpolation::new(exact.crystal(), &constants);
    let seen = interpolation.eigenvalues(&q).unwrap()[0];
    assert!((seen - lowest).abs() < 0.05 * lowest.abs());
}

fn interpolated_lowest(name: &str) -> (f64, f64) {
    let entry = entry(name);
    let (_, exact, constants) = entry.parts().unwrap();
    let multiples = entry.supercell.map(|x| u32::try_from(x).unwrap());
    let mesh = Mesh::with_spacing(&exact.crystal().reciprocal(), 0.2, multiples, false);
    let interpolation = Interpolation::new(exact.crystal(), &constants);
    let (mut at_gamma, mut elsewhere) = (f64::MAX, f64::MAX);
    for (q, _) in mesh.points() {
        let lowest = interpolation.eigenvalues(&q).unwrap()[0];
        let slot = if q.norm() < 1e-12 {
            &mut at_gamma
        } else {
            &mut elsewhere
        };
        *slot = slot.min(lowest);
    }
    (at_gamma, elsewhere)
}

#[test]
fn good_packages_show_no_soft_point_away_from_gamma() {
    for name in GOOD {
        let (at_gamma, elsewhere) = interpolated_lowest(name);
        println!(
            "{name}: {:.2} at Γ, {:.2} elsewhere",
            wavenumber_per_cm(at_gamma),
            wavenumber_per_cm(elsewhere)
        );
        assert!(wavenumber_per_cm(elsewhere) > 5.0, "{name}: {elsewhere}");
        assert!(at_gamma > -1e-3, "{name}");
    }
}

#[test]
fn thin_and_noisy_packages_show_soft_points_that_are_not_there() {
    let (_, thin) = interpolated_lowest("drosmelide-iv-thin");
    let (_, noisy) = interpolated_lowest("drosmelide-ii-noisy");
    println!(
        "thin {:.2}, noisy {:.2}",
        wavenumber_per_cm(thin),
        wavenumber_per_cm(noisy)
    );
    assert!(wavenumber_per_cm(thin) < -10.0);
    assert!(wavenumber_per_cm(noisy) < -3.0);
}

/// Lattice energy plus free energy, kJ/mol of molecules.
fn free_energy_kj(form: &Form, temperatures: &[f64]) -> Vec<f64> {
    let crystal = form.crystal().unwrap();
    let exact = RealSpaceConstants::of(&crystal).unwrap();
    let mesh = Mesh::with_spacing(&exact.crystal().reciprocal(), 0.2, [1; 3], true);
    let spectrum = Spectrum::exact(&exact, &mesh).unwrap();
    let per_molecule = EV_TO_KJ_PER_MOL / crystal.molecule_count() as f64;
    let at = |t: &f64| (crystal.energy_ev() + spectrum.free_energy_ev(*t)) * per_molecule;
    temperatures.iter().map(at).collect()
}

#[test]
fn the_order_of_the_forms_changes_with_temperature() {
    let temperatures = [0.0, 300.0, 500.0];
    let [one, two, three, four, alpha, beta] = [
        forms::DROSMELIDE_I,
        forms::DROSMELIDE_II,
        forms::DROSMELIDE_III,
        forms::DROSMELIDE_IV,
        forms::PELQUONOL_ALPHA,
        forms::PELQUONOL_BETA,
    ]
    .map(|form| free_energy_kj(&form, &temperatures));
    println!("{one:.3?}\n{two:.3?}\n{three:.3?}\n{alpha:.3?}\n{beta:.3?}");
    assert!(one[0] + 0.5 < two[0] && two[0] + 0.3 < three[0]);
    assert!(two[1] + 0.5 < one[1] && one[1] < three[1]);
    assert!(two[2] + 0.5 < three[2] && three[2] + 0.3 < one[2]);
    assert!(alpha[0] + 0.1 < beta[0] && beta[1] + 0.1 < alpha[1]);
    for (k, good) in [one[0], two[1], two[2]].into_iter().enumerate() {
        assert!(four[k] < good, "form IV at {} K", temperatures[k]);
    }
    let energies = [
        forms::DROSMELIDE_I,
        forms::DROSMELIDE_II,
        forms::DROSMELIDE_III,
    ]
    .map(|form| {
        let crystal = form.crystal().unwrap();
        crystal.energy_ev() / crystal.molecule_count() as f64 * EV_TO_KJ_PER_MOL
    });
    assert!(energies[2] - energies[0] < 4.0);
}

#[test]
fn claims_agree_with_another_mesh() {
    let mut claimed = 0;
    for entry in scenario::entries().into_iter().filter(|entry| entry.claims) {
        let (submission, _) = entry.build().unwrap();
        let exact = exact(&entry.form);
        let mesh = Mesh::with_spacing(&exact.crystal().reciprocal(), 0.16, [1; 3], true);
        let spectrum = Spectrum::exact(&exact, &mesh).unwrap();
        let count = submission.formula_units();
        let zero = submission.claims.zero_point_energy_ev.unwrap();
        for &(t, free) in submission
            .claims
            .free_energy_ev
            .iter()
            .chain(&[(0.0, zero)])
        {
            let gap = (free - spectrum.free_energy_ev(t)) / count * EV_TO_KJ_PER_MOL;
            assert!(gap.abs() < 0.01, "{} at {t} K: {gap} kJ/mol", entry.name);
        }
        claimed += 1;
    }
    assert!(claimed >= 2);
}

#[test]
fn interpolation_of_the_good_packages_keeps_the_free_energy() {
    for name in GOOD {
        let entry = entry(name);
        let (model, exact, constants) = entry.parts().unwrap();
        let mesh = Mesh::with_spacing(&exact.crystal().reciprocal(), 0.2, [1; 3], true);
        let interpolation = Interpolation::new(exact.crystal(), &constants);
        let points = mesh
            .points()
            .into_iter()
            .map(|(q, weight)| (interpolation.eigenvalues(&q).unwrap(), weight))
            .collect();
        let seen = Spectrum { points }.free_energy_ev(300.0);
        let truth = Spectrum::exact(&exact, &mesh)
            .unwrap()
            .free_energy_ev(300.0);
        let gap = (seen - truth) / model.molecule_count() as f64 * EV_TO_KJ_PER_MOL;
        println!("{name}: {gap:.4} kJ/mol");
        assert!(gap.abs() < 0.05, "{name}: {gap}");
    }
}

#[test]
fn one_oscillator_has_the_free_energy_of_its_ladder() {
    // 1000 cm⁻¹ is 0.123 984 198 eV: 1 eV = 8065.543 937 cm⁻¹ (CODATA 2022, from memory).
    let quantum = 1000.0 / 8_065.543_937;
    let spectrum = Spectrum {
        points: vec![(vec![eigenvalue_of_wavenumber(1000.0)], 2.0)],
    };
    assert!((spectrum.free_energy_ev(0.0) - 0.5 * quantum).abs() < 1e-9);
    for temperature in [100.0, 300.0, 3000.0] {
        let thermal = BOLTZMANN_EV_PER_K * temperature;
        let ladder: f64 = (0..400)
            .map(|level| (-(f64::from(level) + 0.5) * quantum / thermal).exp())
            .sum();
        assert!((spectrum.free_energy_ev(temperature) + thermal * ladder.ln()).abs() < 1e-8);
    }
}

#[test]
fn meshes_count_every_point_once() {
    for half_shifted in [false, true] {
        let mesh = Mesh {
            divisions: [4, 3, 2],
            half_shifted,
        };
        let points = mesh.points();
        let total: f64 = points.iter().map(|(_, weight)| weight).sum();
        assert!((total - 24.0).abs() < 1e-12);
        let at_gamma = points.iter().filter(|(q, _)| q.norm() < 1e-12).count();
        assert_eq!(at_gamma, usize::from(!half_shifted));
        for (k, (q, _)) in points.iter().enumerate() {
            let twins = points.iter().skip(k + 1).filter(|(other, _)| {
                let same = |gap: Vector3<f64>| gap.iter().all(|x| (x - x.round()).abs() < 1e-9);
                same(q - other) || same(q + other)
            });
            assert_eq!(twins.count(), 0);
        }
    }
}
