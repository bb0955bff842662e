//! Born–von Kármán metals (`reference/bvk_models.toml`): constants fitted to neutron frequencies,
//! outputs of a second program, and calorimetry (`reference/calorimetry.csv`).

use nalgebra::{Matrix3, Vector3};
use tarehouse_physics::thermodynamics::Harmonic;
use tarehouse_physics::units::{
    EV_TO_KJ_PER_MOL, LIGHT_SPEED_M_PER_S, phonon_energy_unit_ev, wavenumber_per_cm,
};
use tarehouse_tests::models::SpringCrystal;
use tarehouse_tests::models::metals::Metal;

use crate::reference::{assert_near, number, rows};

const ROOM_K: f64 = 298.15;

/// Frequencies in THz from eigenvalues.
fn thz(eigenvalues: &[f64]) -> Vec<f64> {
    eigenvalues
        .iter()
        .map(|&value| wavenumber_per_cm(value) * LIGHT_SPEED_M_PER_S * 1e-10)
        .collect()
}

/// The mesh of the second program: 16³ points, half-shifted, primitive reciprocal basis.
fn mesh_energies_ev(model: &SpringCrystal) -> Vec<f64> {
    let fraction = |i: u32| (f64::from(i) + 0.5) / 16.0;
    let mut energies = Vec::with_capacity(3 * 4096);
    for index in 0..4096 {
        let q = [index / 256, index / 16 % 16, index % 16].map(fraction);
        let eigenvalues = model.eigenvalues(&Vector3::from(q));
        energies.extend(
            eigenvalues
                .iter()
                .map(|x| phonon_energy_unit_ev() * x.sqrt()),
        );
    }
    energies
}

fn room_state(model: &SpringCrystal) -> Harmonic {
    Harmonic::of_modes(&mesh_energies_ev(model), ROOM_K) * (EV_TO_KJ_PER_MOL / 4096.0)
}

#[test]
fn entropy_and_free_energy_agree_with_a_second_program() {
    let metals = Metal::all();
    assert_eq!(metals.len(), 8);
    for (name, metal) in metals {
        let state = room_state(&metal.model());
        let computed = &metal.computed;
        assert_near(
            &name,
            1e3 * state.entropy,
            computed.entropy_mesh16,
            0.0,
            1e-8,
        );
        assert_near(
            &name,
            state.free_energy,
            computed.free_energy_mesh16,
            0.0,
            1e-8,
        );
        // Heat capacity and zero point were extrapolated to a dense mesh.
        assert_near(
            &name,
            1e3 * state.heat_capacity,
            computed.heat_capacity,
            2e-4,
            0.0,
        );
        let cold = Harmonic::of_modes(&mesh_energies_ev(&metal.model()), 0.0);
        let zero_point = cold.free_energy * EV_TO_KJ_PER_MOL / 4096.0;
        assert_near(&name, zero_point, computed.zero_point_kj_per_mol, 3e-5, 0.0);
    }
}

#[test]
fn zone_boundary_frequencies_agree_with_a_second_program() {
    for (name, metal) in Metal::all() {
        let model = metal.model();
        for (point, reduced, expected) in metal.zone_boundary() {
            assert_eq!(expected.len(), 3, "{name} {point}");
            let q = model.fractional_q(metal.a_angstrom, reduced);
            for (found, expected) in thz(&model.eigenvalues(&q)).iter().zip(expected) {
                let what = format!("{name} at {point}");
                assert_near(&what, *found, expected, 0.0, 6e-5);
            }
        }
    }
}

#[test]
fn folding_keeps_commensurate_wave_vectors() {
    // Parlinski, Li & Kawazoe, Phys. Rev. Lett. 78, 4063 (1997): constants folded into a supercell
    // give the exact matrix wherever S·q is integer, however far they reach. In a Bravais crystal
    // D(q) = Σ_l Φ[l] cos(q·R_l)/m there.
    let aluminium = &Metal::all()["Al_80K_axial8"];
    let model = aluminium.model();
    for supercell in [
        [[2, 0, 0], [0, 2, 0], [0, 0, 2]],
        [[-2, 2, 2], [2, -2, 2], [2, 2, -2]],
        [[3, 1, 0], [0, 2, -1], [1, 0, 2]],
    ] {
        let constants = model.constants(supercell);
        for q in constants.supercell().commensurate_points() {
            let mut matrix = Matrix3::zeros();
            for (l, translation) in constants.supercell().translations().iter().enumerate() {
                let cell = Vector3::from(translation.map(|x| x as f64));
                let phase = (std::f64::consts::TAU * q.dot(&cell)).cos();
                matrix += constants.block(l, 0, 0) * (phase / aluminium.mass_u);
            }
            let mut found: Vec<f64> = matrix.symmetric_eigenvalues().iter().copied().collect();
            found.sort_by(f64::total_cmp);
            for (found, expected) in found.iter().zip(model.eigenvalues(&q)) {
                assert_near("λ", *found, expected, 0.0, 1e-12);
            }
        }
    }
}

/// Entropy at 298.15 K with that of the electrons γT, J/mol/K, and the measured one.
fn entropies(name: &str) -> (f64, f64) {
    let metal = &Metal::all()[name];
    let table = rows(include_str!("../../reference/calorimetry.csv"));
    let row = table
        .iter()
        .find(|row| row["element"] == metal.element)
        .unwrap();
    let electrons = 1e-3 * number(row, "gamma_mJ_molK2") * ROOM_K;
    let vibrations = 1e3 * room_state(&metal.model()).entropy;
    (vibrations + electrons, number(row, "S298"))
}

#[test]
fn entropies_agree_with_calorimetry() {
    // CODATA Key Values (1989) and NIST-JANAF (1998). Copper was measured with neutrons at 296 K;
    // aluminium, sodium and lead below 100 K, so that their entropy must come out low; for niobium
    // γ holds the phonon enhancement.
    for name in ["Cu_296K_axial6", "Cu_296K_general4"] {
        let (found, measured) = entropies(name);
        assert_near(name, found, measured, 0.01, 0.0);
    }
    let cold = [
        ("Al_80K_axial8", 0.04),
        ("Al_80K_general4", 0.04),
        ("Na_90K_general5", 0.05),
        ("Pb_100K_general6", 0.05),
    ];
    for (name, band) in cold {
        let (found, measured) = entropies(name);
        assert!(
            found < measured && found > measured * (1.0 - band),
            "{name} {found} {measured}"
        );
    }
    let (found, measured) = entropies("Nb_296K_general6");
    assert_near("Nb", found, measured, 0.05, 0.0);
}

#[test]
fn shells_have_the_symmetry_of_their_vectors() {
    for (name, metal) in Metal::all() {
        let model = metal.model();
        let at = |q: [f64; 3]| model.eigenvalues(&model.fractional_q(metal.a_angstrom, q));
        // The same frequencies along directions that the cube makes equal, in a general direction.
        let expected = at([0.31, 0.17, 0.05]);
        for q in [
            [-0.17, 0.05, 0.31],
            [0.05, -0.31, -0.17],
            [0.17, 0.31, 0.05],
        ] {
            for (a, b) in at(q).iter().zip(&expected) {
                assert_near(&name, *a, *b, 0.0, 1e-12);
            }
        }
        let folded = model.constants([[3, 0, 0], [0, 3, 0], [0, 0, 3]]);
        let sum: Matrix3<f64> = folded.blocks().iter().sum();
        assert_near(&name, sum.amax(), 0.0, 0.0, 1e-12);
    }
}
