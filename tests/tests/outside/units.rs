//! Constants and conversions against the SI and CODATA (`reference/constants.toml`). The tolerance
//! of 1e-8 holds for any CODATA year.

use tarehouse_physics::force_constants::ForceConstantUnit;
use tarehouse_physics::units::*;

use crate::reference::assert_near;

const YEAR_PROOF: f64 = 1e-8;

fn section(name: &str) -> toml::Table {
    let file: toml::Table = include_str!("../../reference/constants.toml")
        .parse()
        .unwrap();
    file[name].as_table().unwrap().clone()
}

#[track_caller]
fn assert_all(section_name: &str, pairs: &[(&str, f64)], relative: f64) {
    let table = section(section_name);
    for &(key, found) in pairs {
        assert_near(key, found, table[key].as_float().unwrap(), relative, 0.0);
    }
}

#[test]
fn exact_constants_are_those_of_the_si() {
    let pairs = [
        ("h_J_s", PLANCK_J_S),
        ("k_B_J_per_K", BOLTZMANN_J_PER_K),
        ("c_m_per_s", LIGHT_SPEED_M_PER_S),
        ("N_A_per_mol", AVOGADRO_PER_MOL),
        ("e_C", ELEMENTARY_CHARGE_C),
        ("k_B_eV_per_K", BOLTZMANN_EV_PER_K),
        ("eV_to_cm1", EV_TO_PER_CM),
        ("eV_to_kJ_per_mol", EV_TO_KJ_PER_MOL),
        ("eV_per_A2_to_N_per_m", EV_PER_ANG2_TO_N_PER_M),
        ("eV_per_A3_to_GPa", EV_PER_ANG3_TO_GPA),
        ("k_B_cm1_per_K", BOLTZMANN_EV_PER_K * EV_TO_PER_CM),
        ("R_J_per_molK", 1e3 * BOLTZMANN_EV_PER_K * EV_TO_KJ_PER_MOL),
    ];
    assert_all("exact", &pairs, 1e-14);
}

#[test]
fn measured_constants_and_frequency_units_agree_with_both_codata_years() {
    let unit_per_cm = wavenumber_unit_per_cm();
    let unit_thz = angular_frequency_unit_per_s() / (2.0 * std::f64::consts::PI) * 1e-12;
    let newton = unit_per_cm * (1.0 / EV_PER_ANG2_TO_N_PER_M).sqrt();
    let hartree = ForceConstantUnit::HartreePerBohr2.in_ev_per_ang2();
    let both = [
        ("u_kg", ATOMIC_MASS_KG),
        ("E_h_J", HARTREE_J),
        ("a_0_m", BOHR_M),
        ("E_h_eV", HARTREE_EV),
        ("sqrt_eV_per_A2_u_in_cm1", unit_per_cm),
        ("sqrt_eV_per_A2_u_in_THz", unit_thz),
        ("sqrt_N_per_m_u_in_cm1", newton),
        ("sqrt_Eh_per_a02_u_in_cm1", unit_per_cm * hartree.sqrt()),
        ("E_h_per_a02_in_eV_per_A2", hartree),
        (
            "Ry_per_a02_in_eV_per_A2",
            ForceConstantUnit::RydbergPerBohr2.in_ev_per_ang2(),
        ),
        ("E_h_in_kJ_per_mol", HARTREE_EV * EV_TO_KJ_PER_MOL),
    ];
    assert_all("codata2018", &both, YEAR_PROOF);
    assert_all("codata2022", &both, YEAR_PROOF);
    let energy_mev = 1e3 * phonon_energy_unit_ev();
    let latest = [
        ("sqrt_eV_per_A2_u_in_meV", energy_mev),
        (
            "sqrt_eV_per_A2_u_in_K",
            1e-3 * energy_mev / BOLTZMANN_EV_PER_K,
        ),
        ("sqrt_eV_per_A2_u_in_cm1", unit_per_cm),
    ];
    assert_all("codata2022", &latest, 1e-11);
}

#[test]
fn force_constant_units_convert_to_newton_per_metre() {
    let newton = ForceConstantUnit::NewtonPerMetre.in_ev_per_ang2();
    assert_all("exact", &[("N_per_m_to_eV_per_A2", newton)], 1e-14);
    let electronvolt = ForceConstantUnit::EvPerAngstrom2.in_ev_per_ang2();
    assert_near("eV/Å²", electronvolt, 1.0, 0.0, 0.0);
    let hartree = ForceConstantUnit::HartreePerBohr2.in_ev_per_ang2() / newton;
    assert_all(
        "codata2022",
        &[("E_h_per_a02_in_N_per_m", hartree)],
        YEAR_PROOF,
    );
}

#[test]
fn worked_example_of_a_spring_in_fcc() {
    // Computed with the conversions of `constants.toml`: nearest-neighbour fcc, λ in K/m at X and
    // L, in cm⁻¹.
    let cases = [
        (
            1.0,
            1.0,
            [
                (8.0, 1_474.942_433),
                (4.0, 1_042.941_796),
                (2.0, 737.471_216),
            ],
        ),
        (
            2.5,
            39.95,
            [(8.0, 368.966_284), (4.0, 260.898_562), (2.0, 184.483_142)],
        ),
    ];
    for (stiffness, mass, values) in cases {
        for (square, expected) in values {
            let eigenvalue = square * stiffness / mass;
            let found = wavenumber_per_cm(eigenvalue);
            assert_near("wavenumber", found, expected, 0.0, 6e-7);
            assert_near(
                "inverse",
                eigenvalue_of_wavenumber(found),
                eigenvalue,
                1e-14,
                0.0,
            );
            assert_near(
                "imaginary",
                wavenumber_per_cm(-eigenvalue),
                -found,
                0.0,
                0.0,
            );
        }
    }
}
