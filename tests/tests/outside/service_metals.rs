//! The service's dynamics of Born–von Kármán metals (`reference/bvk_models.toml`) against a second program, neutron
//! frequencies (`reference/phonon_measured.csv`), calorimetry (`reference/calorimetry.csv`) and ultrasound
//! (`reference/elastic.csv`).
//!
//! Bands are those of harmonic calculations with frequencies frozen at the temperature at which they were measured.

use nalgebra::Vector3;
use tarehouse_physics::dynamics::Dynamics;
use tarehouse_physics::symmetry::SpaceGroup;
use tarehouse_physics::thermodynamics::Harmonic;
use tarehouse_physics::units::{BOLTZMANN_EV_PER_K, EV_TO_KJ_PER_MOL};
use tarehouse_tests::models::metals::Metal;

use crate::reference::{assert_near, number, rows};
use crate::service::{MeshModes, cubic_elastic_gpa, diagonal, dynamics, thz};

const ROOM_K: f64 = 298.15;
/// Gas constant, J/mol/K.
const GAS_CONSTANT: f64 = BOLTZMANN_EV_PER_K * EV_TO_KJ_PER_MOL * 1e3;

/// Six cells along each axis hold the eighth shell of fcc, two cube edges away, without aliasing.
fn folded(metal: &Metal) -> Dynamics {
    dynamics(&metal.model(), diagonal(6))
}

fn modes(metal: &Metal) -> MeshModes {
    let dynamics = folded(metal);
    let group = SpaceGroup::find(dynamics.crystal(), 1e-3).unwrap();
    assert_eq!(group.operations.len(), 48);
    MeshModes::on(&dynamics, [18; 3], &group)
}

/// A column of the calorimetry of an element.
fn calorimetry(element: &str, column: &str) -> f64 {
    let table = rows(include_str!("../../reference/calorimetry.csv"));
    let row = table.iter().find(|row| row["element"] == element).unwrap();
    number(row, column)
}

/// kJ/mol and J/mol/K of one mole of atoms.
fn molar(modes: &MeshModes, temperature_k: f64) -> Harmonic {
    let state = modes.state(temperature_k) * EV_TO_KJ_PER_MOL;
    Harmonic {
        entropy: 1e3 * state.entropy,
        heat_capacity: 1e3 * state.heat_capacity,
        ..state
    }
}

#[test]
fn special_points_agree_with_a_second_program() {
    for (name, metal) in Metal::all() {
        // Four cube edges: X, L, K and W of fcc, H, P and N of bcc all fit.
        let model = metal.model();
        let folded = dynamics(&model, diagonal(8));
        for (point, reduced, expected) in metal.zone_boundary() {
            let q = model.fractional_q(metal.a_angstrom, reduced);
            let supercell = folded.constants().supercell();
            assert!(supercell.is_commensurate(&q, 1e-12), "{name} {point}");
            let found = thz(&folded.eigenvalues(&q).unwrap());
            for (found, expected) in found.iter().zip(expected) {
                // Half a unit of the last digit of the table, and the last bit.
                let what = format!("{name} at {point}");
                assert_near(&what, *found, expected, 0.0, 5e-5 + 1e-9);
            }
        }
    }
}

/// Root of the mean square and largest relative difference of the frequencies of one element from the measured ones.
fn frequency_errors(name: &str) -> (f64, f64) {
    let metal = &Metal::all()[name];
    let (dynamics, model) = (folded(metal), metal.model());
    let table = rows(include_str!("../../reference/phonon_measured.csv"));
    let measured: Vec<_> = table
        .iter()
        .filter(|row| row["element"] == metal.element)
        .collect();
    assert!(measured.len() > 80, "{name}");
    let (mut squares, mut largest) = (0.0, 0.0_f64);
    for row in &measured {
        let triple = |columns: [&str; 3]| columns.map(|column| number(row, column));
        let q = model.fractional_q(metal.a_angstrom, triple(["qx", "qy", "qz"]));
        let polarisation = Vector3::from(triple(["ex", "ey", "ez"])).normalize();
        let matrix = dynamics.matrix(&q);
        // A polarisation fixed by symmetry is an eigenvector.
        let eigenvalue: f64 = (0..9)
            .map(|k| polarisation[k / 3] * matrix[k].re * polarisation[k % 3])
            .sum();
        let error = thz(&[eigenvalue])[0] / number(row, "nu_THz") - 1.0;
        squares += error * error;
        largest = largest.max(error.abs());
    }
    ((squares / measured.len() as f64).sqrt(), largest)
}

#[test]
fn frequencies_agree_with_neutron_scattering() {
    // Cu: Svensson, Brockhouse & Rowe, Phys. Rev. 155, 619 (1967). Al: Stedman & Nilsson, Phys. Rev. 145, 492 (1966).
    // Na: Woods, Brockhouse, March, Stewart & Bowers, Phys. Rev. 128, 1112 (1962). Nb: Nakagawa & Woods (1965). Pb:
    // Brockhouse, Arase, Caglioti, Rao & Woods, Phys. Rev. 128, 1099 (1962).
    for (name, rms, worst) in [
        ("Cu_296K_axial6", 0.02, 0.07),
        ("Cu_296K_general4", 0.02, 0.07),
        ("Al_80K_axial8", 0.02, 0.07),
        ("Al_80K_general4", 0.02, 0.07),
        ("Na_90K_general5", 0.02, 0.07),
        ("Nb_296K_general6", 0.04, 0.15),
        ("Pb_100K_general6", 0.04, 0.15),
    ] {
        let (found, largest) = frequency_errors(name);
        assert!(found < rms && largest < worst, "{name} {found} {largest}");
    }
}

#[test]
fn entropies_agree_with_calorimetry() {
    // S(298.15 K) with that of the electrons γT, CODATA Key Values 1989. Al and Na were measured with neutrons below
    // 100 K: their frequencies are too high for room temperature, and their entropy must come out low.
    for (name, least, most) in [
        ("Cu_296K_axial6", -0.01, 0.01),
        ("Cu_296K_general4", -0.01, 0.01),
        ("Al_80K_axial8", -0.04, 0.0),
        ("Al_80K_general4", -0.04, 0.0),
        ("Na_90K_general5", -0.05, 0.0),
    ] {
        let metal = &Metal::all()[name];
        let electrons = 1e-3 * calorimetry(&metal.element, "gamma_mJ_molK2") * ROOM_K;
        let found = molar(&modes(metal), ROOM_K).entropy + electrons;
        let error = found / calorimetry(&metal.element, "S298") - 1.0;
        assert!(error > least && error < most, "{name} {found} {error}");
    }
}

#[test]
fn dense_mesh_limits_agree_with_a_second_program() {
    // The second program extrapolated from 16³, 24³ and 32³ half-shifted meshes.
    for (name, metal) in Metal::all() {
        let modes = modes(&metal);
        let (room, computed) = (molar(&modes, ROOM_K), &metal.computed);
        let value = |key: &str| metal.computed_value(key);
        assert_near(&name, room.entropy, value("S_298_J_molK"), 2e-5, 0.0);
        assert_near(&name, room.free_energy, value("F_298_kJ_mol"), 0.0, 2e-4);
        assert_near(&name, room.heat_capacity, computed.heat_capacity, 1e-5, 0.0);
        let zero_point = molar(&modes, 0.0).free_energy;
        assert_near(&name, zero_point, computed.zero_point_kj_per_mol, 1e-5, 0.0);
        for (temperature_k, key) in [(100.0, "100"), (200.0, "200"), (250.0, "250")] {
            let expected = value(&format!("Cv_{key}_J_molK"));
            let found = molar(&modes, temperature_k).heat_capacity;
            assert_near(&name, found, expected, 2e-5, 0.0);
        }
    }
}

/// C_p = C_V + γT + the expansion term A C_p² T with A = 9α²BV/C_p² at room temperature (Nernst & Lindemann, Z.
/// Elektrochem. 17, 817 (1911)), J/mol/K.
fn pressure_heat_capacity(metal: &Metal, modes: &MeshModes, temperature_k: f64) -> f64 {
    let of = |column: &str| calorimetry(&metal.element, column);
    let expansion = 1e-6 * of("alpha_1e-6_perK");
    let atoms_per_cube = if metal.lattice() == tarehouse_tests::models::Cubic::Face {
        4.0
    } else {
        2.0
    };
    let volume_m3 = metal.a_angstrom.powi(3) * 1e-30 / atoms_per_cube
        * tarehouse_physics::units::AVOGADRO_PER_MOL;
    let at_room = 9.0 * expansion * expansion * 1e9 * of("B_GPa") * volume_m3;
    let share = at_room / of("Cp298").powi(2);
    let fixed =
        molar(modes, temperature_k).heat_capacity + 1e-3 * of("gamma_mJ_molK2") * temperature_k;
    (0..50).fold(fixed, |capacity, _| {
        fixed + share * capacity * capacity * temperature_k
    })
}

#[test]
fn heat_capacities_agree_with_calorimetry() {
    // NIST-JANAF 1998. Copper tables themselves differ by up to 1 % below room temperature.
    for (name, at_100_k) in [("Cu_296K_axial6", 0.025), ("Al_80K_axial8", 0.025)] {
        let metal = &Metal::all()[name];
        let modes = modes(metal);
        for (temperature_k, column, tolerance) in [
            (100.0, "Cp100", at_100_k),
            (200.0, "Cp200", 0.01),
            (250.0, "Cp250", 0.01),
            (ROOM_K, "Cp298", 0.01),
        ] {
            let found = pressure_heat_capacity(metal, &modes, temperature_k);
            let measured = calorimetry(&metal.element, column);
            assert_near(name, found, measured, tolerance, 0.0);
        }
    }
    let sodium = modes(&Metal::all()["Na_90K_general5"]);
    assert!(molar(&sodium, ROOM_K).heat_capacity < 3.0 * GAS_CONSTANT);
}

#[test]
fn enthalpies_agree_with_calorimetry() {
    // H(298.15 K) − H(0) with ½γT² of the electrons, CODATA Key Values 1989. Expansion is not in the harmonic sum.
    for (name, least, most) in [
        ("Cu_296K_axial6", -0.02, 0.02),
        ("Al_80K_axial8", -0.04, 0.04),
    ] {
        let metal = &Metal::all()[name];
        let modes = modes(metal);
        let electrons = 0.5e-6 * calorimetry(&metal.element, "gamma_mJ_molK2") * ROOM_K * ROOM_K;
        let found = molar(&modes, ROOM_K).internal_energy - molar(&modes, 0.0).internal_energy;
        let error = (found + electrons) / calorimetry(&metal.element, "H298_minus_H0") - 1.0;
        assert!(error > least && error < most, "{name} {found} {error}");
    }
}

#[test]
fn long_waves_have_the_elastic_constants_of_the_model() {
    for (name, metal) in Metal::all() {
        let expected = metal.elastic_gpa();
        let found = cubic_elastic_gpa(&folded(&metal));
        for (found, expected) in found.iter().zip(expected) {
            // The table has two decimals.
            assert_near(&name, *found, expected, 0.0, 0.0051);
        }
    }
}

#[test]
fn elastic_constants_agree_with_ultrasound() {
    // Simmons & Wang (1971) at 300 K for copper; for aluminium, measured at 80 K with neutrons, the low-temperature
    // constants. C' and C₁₂ of the general models lean on few shells: only the axial ones are compared.
    for (name, temperature, tolerance) in [
        ("Cu_296K_axial6", "300", 0.10),
        ("Al_80K_axial8", "0", 0.15),
    ] {
        let metal = &Metal::all()[name];
        let table = rows(include_str!("../../reference/elastic.csv"));
        let row = table
            .iter()
            .find(|row| row["element"] == metal.element && row["T_K"] == temperature)
            .unwrap();
        let found = cubic_elastic_gpa(&folded(metal));
        for (found, column) in found.iter().zip(["C11", "C12", "C44"]) {
            assert_near(name, *found, number(row, column), tolerance, 0.0);
        }
    }
}
