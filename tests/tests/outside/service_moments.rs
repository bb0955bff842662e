//! Moments of the spectra of model crystals on the service's meshes against exact numbers
//! (`reference/lattice_exact.toml`).

use tarehouse_physics::symmetry::SpaceGroup;
use tarehouse_tests::models::{SpringCrystal, bcc, chain, fcc};

use crate::reference::assert_near;
use crate::service::{MeshModes, diagonal, dynamics};

fn exact() -> toml::Table {
    include_str!("../../reference/lattice_exact.toml")
        .parse()
        .unwrap()
}

/// A whole number or a fraction.
fn fraction(text: &str) -> f64 {
    match text.split_once('/') {
        Some((above, below)) => above.parse::<f64>().unwrap() / below.parse::<f64>().unwrap(),
        None => text.parse().unwrap(),
    }
}

fn moments(section: &str, key: &str) -> Vec<f64> {
    let file = exact();
    let list = file[section][key].as_array().unwrap();
    list.iter()
        .map(|entry| fraction(entry.as_str().unwrap()))
        .collect()
}

/// Modes on the n × n × n mesh, reduced by the space group. Four cells along each axis hold every spring.
fn modes(model: &SpringCrystal, n: u32) -> MeshModes {
    let dynamics = dynamics(model, diagonal(4));
    let group = SpaceGroup::find(model.crystal(), 1e-3).unwrap();
    MeshModes::on(&dynamics, [n; 3], &group)
}

/// ⟨ω²ᵏ⟩ a mode; the acoustic modes at Γ contribute nothing.
fn even_moment(modes: &MeshModes, power: i32) -> f64 {
    let sums = modes.eigenvalues.iter().enumerate().map(|(point, values)| {
        modes.mesh.weight(point) * values.iter().map(|x| x.powi(power)).sum::<f64>()
    });
    sums.sum::<f64>() / 3.0
}

#[test]
fn even_moments_are_exact_on_meshes_finer_than_their_order() {
    // tr Dᵏ is a trigonometric polynomial of order k in each fractional coordinate, which a mesh of more than k
    // divisions integrates exactly (Monkhorst & Pack, Phys. Rev. B 13, 5188 (1976)); the moments count closed walks.
    let cases = [
        (fcc(1.0, 1.0), moments("fcc_nn_central", "moments_w2n")),
        (
            bcc(1.0, 0.0, 1.0),
            moments("bcc_nn_central", "moments_w2n_K2_0"),
        ),
    ];
    for (model, expected) in cases {
        for n in [3_u32, 5, 8, 11] {
            let modes = modes(&model, n);
            for (power, expected) in (1..).zip(&expected) {
                let found = even_moment(&modes, power);
                let order = u32::try_from(power).unwrap();
                if order < n {
                    assert_near("moment", found, *expected, 1e-12, 0.0);
                }
            }
        }
    }
    // A mesh that is too coarse is wrong.
    let coarse = even_moment(&modes(&fcc(1.0, 1.0), 3), 3);
    assert!((coarse / 114.0 - 1.0).abs() > 1e-3, "{coarse}");
}

#[test]
fn chain_moments_are_those_of_its_closed_form() {
    // ⟨ω²⟩ = ω_m²/2, ⟨ω⁴⟩ = 3ω_m⁴/8, in all three directions of the net.
    let section = &exact()["chain_monatomic"];
    let modes = modes(&chain(&[0.25], 0.25, 1.0), 7);
    // Each polarisation is the sum of three such chains with ω_m = 1.
    let second = 3.0 * section["mean_w2_over_wm2"].as_float().unwrap();
    assert_near("second", even_moment(&modes, 1), second, 1e-13, 0.0);
    // ⟨(x + y + z)²⟩ = 3⟨x²⟩ + 6⟨x⟩².
    let fourth = 3.0 * section["mean_w4_over_wm4"].as_float().unwrap() + 6.0 * 0.25;
    assert_near("fourth", even_moment(&modes, 2), fourth, 1e-13, 0.0);
}

#[test]
fn mean_frequency_and_logarithm_converge_fast_with_the_gamma_correction() {
    // Without the correction the Γ-centred 8³ mesh is off by 3.8e-4 in ⟨ω⟩ and by 2.9e-3 in ⟨ln ω⟩
    // (reference/fcc_nn_mesh_convergence.csv).
    let section = &exact()["fcc_nn_central"];
    let frequency = section["mean_w"].as_float().unwrap();
    let logarithm = section["mean_ln_w"].as_float().unwrap();
    let model = fcc(1.0, 1.0);
    let errors: Vec<[f64; 2]> = [8, 12, 16, 24]
        .into_iter()
        .map(|n| {
            let modes = modes(&model, n);
            [
                modes.mean(|w| w) / 3.0 - frequency,
                modes.mean(f64::ln) / 3.0 - logarithm,
            ]
        })
        .collect();
    // The rest falls as the sixth power of the spacing for ⟨ω⟩, as the fifth for ⟨ln ω⟩.
    let bounds = [
        [1.7e-5, 6e-5],
        [1.4e-6, 7e-6],
        [2.4e-7, 1.7e-6],
        [2.1e-8, 2.2e-7],
    ];
    for (error, bound) in errors.iter().zip(bounds) {
        assert!(error[0].abs() < bound[0], "⟨ω⟩: {errors:?}");
        assert!(error[1].abs() < bound[1], "⟨ln ω⟩: {errors:?}");
    }
    for which in [0, 1] {
        let halved = errors[0][which] / errors[2][which];
        assert!(halved > 2.0_f64.powf(4.8), "order: {errors:?}");
    }
}

#[test]
fn scalar_net_has_its_spanning_tree_constant() {
    // A chain of equal springs in a net of equal springs is the simple cubic scalar lattice, three times:
    // λ = 2 Σ (1 − cos q), ⟨ln λ⟩ as in the reference file (spanning trees of the cubic lattice).
    let expected = exact()["scalar"]["sc_mean_ln_w2"].as_float().unwrap();
    let modes = modes(&chain(&[1.0], 1.0, 1.0), 16);
    let found = 2.0 * modes.mean(f64::ln) / 3.0;
    assert_near("⟨ln λ⟩", found, expected, 0.0, 2e-6);
}
