//! Model crystals against closed forms and high-precision numbers (`reference/lattice_exact.toml`,
//! `reference/fcc_nn_mesh_convergence.csv`).

use nalgebra::Vector3;
use tarehouse_physics::thermodynamics::Harmonic;
use tarehouse_physics::units::{BOLTZMANN_EV_PER_K, phonon_energy_unit_ev};
use tarehouse_tests::closed_forms;
use tarehouse_tests::models::{
    CUBE_EDGE_ANG, SpringCrystal, bcc, chain, diatomic_chain, fcc, soft_boundary_chain,
};
use tarehouse_tests::quadrature::integrate_from_zero;

use crate::reference::{assert_near, number, rows};

fn exact() -> toml::Table {
    include_str!("../../reference/lattice_exact.toml")
        .parse()
        .unwrap()
}

#[track_caller]
fn assert_eigenvalues(model: &SpringCrystal, q: &Vector3<f64>, expected: &[f64]) {
    let found = model.eigenvalues(q);
    assert_eq!(found.len(), expected.len());
    for (found, expected) in found.iter().zip(expected) {
        assert_near("λ", *found, *expected, 1e-12, 1e-12);
    }
}

#[test]
fn chains_have_their_textbook_dispersion() {
    let q = [0.13, 0.4, -0.27];
    let along = [2.0, 0.3, -0.1];
    let expected = closed_forms::chain_in_net(&along, 0.7, 5.0, q);
    assert_eigenvalues(&chain(&along, 0.7, 5.0), &Vector3::from(q), &expected);
    for (springs, masses) in [([2.0, 2.0], [1.0, 3.0]), ([1.5, 0.4], [7.0, 7.0])] {
        let model = diatomic_chain(springs, 9.0, masses);
        for x in [0.0, 0.1, 0.25, 0.5] {
            let theta = 2.0 * std::f64::consts::PI * x;
            let along = closed_forms::diatomic_chain(springs, masses, theta);
            let across = closed_forms::diatomic_chain([9.0, 9.0], masses, theta);
            let mut expected = vec![along[0], along[1]];
            expected.extend([across[0], across[0], across[1], across[1]]);
            expected.sort_by(f64::total_cmp);
            assert_eigenvalues(&model, &Vector3::new(x, 0.0, 0.0), &expected);
        }
    }
}

#[test]
fn cubic_crystals_have_their_zone_boundary_values() {
    let (model, scale) = (fcc(1.7, 3.0), 1.7 / 3.0);
    for (reduced, squares) in closed_forms::fcc_zone_boundary() {
        let q = model.fractional_q(CUBE_EDGE_ANG, reduced);
        assert_eigenvalues(&model, &q, &squares.map(|x| x * scale));
    }
    for zeta in [0.05, 0.3, 0.8] {
        let q = model.fractional_q(CUBE_EDGE_ANG, [zeta, 0.0, 0.0]);
        let squares = closed_forms::fcc_along_cube_axis(zeta);
        assert_eigenvalues(&model, &q, &squares.map(|x| x * scale));
    }
    for second in [0.3, 0.0, -0.2] {
        let model = bcc(1.2, second, 2.0);
        for (reduced, squares) in closed_forms::bcc_zone_boundary(1.2, second) {
            let q = model.fractional_q(CUBE_EDGE_ANG, reduced);
            assert_eigenvalues(&model, &q, &squares.map(|x| x / 2.0));
        }
    }
}

#[test]
fn closed_forms_are_those_of_the_reference_file() {
    let file = exact();
    let list = |section: &str, key: &str| -> Vec<f64> {
        let values = file[section][key].as_array().unwrap();
        values.iter().map(|x| x.as_float().unwrap()).collect()
    };
    let keys = ["w2_X", "w2_L", "w2_W", "w2_K"];
    for ((_, squares), key) in closed_forms::fcc_zone_boundary().iter().zip(keys) {
        for (found, expected) in squares.iter().zip(list("fcc_nn_central", key)) {
            assert_near(key, *found, expected, 1e-14, 0.0);
        }
    }
    let at_n = closed_forms::bcc_zone_boundary(1.0, 0.3)[2].1;
    for (found, expected) in at_n.iter().zip(list("bcc_nn_central", "w2_N_K1_1_K2_0p3")) {
        assert_near("N", *found, expected, 1e-14, 0.0);
    }
}

#[test]
fn soft_chain_is_soft_only_near_its_boundary() {
    let section = &exact()["chain_soft_boundary"];
    let value = |key: &str| section[key].as_float().unwrap();
    let model = soft_boundary_chain(1.0, 1.0);
    let lowest = |x: f64| model.eigenvalues(&Vector3::new(x, 0.0, 0.0))[0];
    assert_near(
        "boundary",
        lowest(0.5),
        value("w2_at_zone_boundary"),
        1e-13,
        0.0,
    );
    let edge = 0.5 * value("first_unstable_q_over_pi");
    assert!(lowest(edge - 1e-4) > 0.0 && lowest(edge + 1e-4) < 0.0);
    // Odd Γ-centred meshes miss it.
    for n in [3_u32, 5, 7, 9] {
        assert!((1..n).all(|i| lowest(f64::from(i) / f64::from(n)) > 0.0));
    }
    let folded = model.constants([[4, 0, 0], [0, 2, 0], [0, 0, 2]]);
    let at_boundary: f64 = folded
        .supercell()
        .translations()
        .iter()
        .enumerate()
        .map(|(l, r)| if r[0] % 2 == 0 { 1.0 } else { -1.0 } * folded.block(l, 0, 0)[(0, 0)])
        .sum();
    assert_near("folded", at_boundary, -0.8, 1e-13, 0.0);
}

#[test]
fn chain_thermodynamics_agrees_with_high_precision_numbers() {
    // The table has 11 to 13 digits. ω = ω_m sin(πu/2), u uniform in (0, 1); t = kT/ħω_m.
    let file = exact();
    let energy_max = 0.02;
    let table = file["chain_monatomic"]["thermal"].as_array().unwrap();
    assert_eq!(table.len(), 6);
    for row in table {
        let value = |key: &str| row[key].as_float().unwrap();
        let temperature_k = value("t") * energy_max / BOLTZMANN_EV_PER_K;
        let mean = |pick: fn(Harmonic) -> f64| {
            integrate_from_zero(160, |u| {
                let energy = energy_max * (0.5 * std::f64::consts::PI * u).sin();
                pick(Harmonic::thermal_of_mode(energy, temperature_k))
            })
        };
        let energies = |x: f64| x / energy_max;
        assert_near(
            "F",
            energies(mean(|m| m.free_energy)),
            value("F"),
            2e-11,
            0.0,
        );
        assert_near(
            "U",
            energies(mean(|m| m.internal_energy)),
            value("U"),
            2e-11,
            0.0,
        );
        let entropy = mean(|m| m.entropy) / BOLTZMANN_EV_PER_K;
        assert_near("S", entropy, value("S"), 2e-11, 0.0);
        let capacity = mean(|m| m.heat_capacity) / BOLTZMANN_EV_PER_K;
        assert_near("C", capacity, value("C"), 2e-11, 0.0);
    }
}

#[test]
fn rings_have_their_closed_zero_point_energy() {
    // ⟨|sin(πk/N)|⟩ = cot(π/2N)/N, and 1/(N sin(π/2N)) half-shifted: the mean of ω/ω_m on a mesh of
    // N points.
    let section = &exact()["chain_monatomic"];
    let model = chain(&[0.25], 0.25, 1.0);
    for n in [4_u32, 8, 32] {
        for (shift, name) in [(0.0, "gamma"), (0.5, "shift")] {
            let zero_point: f64 = (0..n)
                .map(|k| {
                    let q = (f64::from(k) + shift) / f64::from(n);
                    let lambda = model.eigenvalues(&Vector3::new(q, 0.0, 0.0))[0].max(0.0);
                    Harmonic::of_eigenvalue(lambda, 0.0).free_energy
                })
                .sum();
            let found = 2.0 * zero_point / (f64::from(n) * phonon_energy_unit_ev());
            let expected = section[format!("ring_N{n}_{name}").as_str()]
                .as_float()
                .unwrap();
            assert_near(name, found, expected, 1e-12, 0.0);
        }
    }
}

#[test]
fn fcc_meshes_converge_as_tabulated() {
    let model = fcc(1.0, 1.0);
    let table = rows(include_str!("../../reference/fcc_nn_mesh_convergence.csv"));
    for row in table.iter().filter(|row| number(row, "N") < 17.0) {
        let n: u32 = row["N"].parse().unwrap();
        let points = f64::from(n).powi(3);
        for (shift, column) in [(0.5, "mean_w_half"), (0.0, "mean_w_gamma")] {
            let mut sum = 0.0;
            for index in 0..n.pow(3) {
                let q = [index / (n * n), index / n % n, index % n]
                    .map(|i| (f64::from(i) + shift) / f64::from(n));
                let eigenvalues = model.eigenvalues(&Vector3::from(q));
                sum += eigenvalues.iter().map(|x| x.max(0.0).sqrt()).sum::<f64>();
            }
            assert_near(column, sum / (3.0 * points), number(row, column), 0.0, 1e-8);
        }
    }
}
