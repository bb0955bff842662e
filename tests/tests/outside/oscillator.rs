//! One harmonic mode against tables made at 30 digits (`reference/einstein_table.csv`,
//! `reference/mode_298K.csv`).

use tarehouse_physics::thermodynamics::{Harmonic, zero_point_energy_ev};
use tarehouse_physics::units::{BOLTZMANN_EV_PER_K, EV_TO_KJ_PER_MOL, EV_TO_PER_CM};

use crate::reference::{assert_near, number, rows};

#[test]
fn reduced_functions_agree_with_the_table_of_einstein_functions() {
    let table = rows(include_str!("../../reference/einstein_table.csv"));
    assert_eq!(table.len(), 19);
    for temperature_k in [3.0, 298.15, 2000.0] {
        let thermal_energy = BOLTZMANN_EV_PER_K * temperature_k;
        for row in &table {
            let energy = number(row, "x") * thermal_energy;
            let full = Harmonic::of_mode(energy, temperature_k);
            let thermal = Harmonic::thermal_of_mode(energy, temperature_k);
            let columns = [
                ("F_over_kT", full.free_energy / thermal_energy),
                ("F_thermal_over_kT", thermal.free_energy / thermal_energy),
                ("U_over_kT", full.internal_energy / thermal_energy),
                (
                    "U_thermal_over_kT",
                    thermal.internal_energy / thermal_energy,
                ),
                ("S_over_k", full.entropy / BOLTZMANN_EV_PER_K),
                ("Cv_over_k", full.heat_capacity / BOLTZMANN_EV_PER_K),
            ];
            for (column, found) in columns {
                // F crosses zero near x = 1, and the table took its thermal part as a difference of
                // 30-digit numbers: there the absolute error counts.
                let absolute = match column {
                    "F_over_kT" => 1e-13,
                    "F_thermal_over_kT" => 1e-32,
                    _ => 0.0,
                };
                assert_near(column, found, number(row, column), 1e-12, absolute);
            }
        }
    }
}

#[test]
fn single_modes_at_room_temperature_agree_with_the_table() {
    let table = rows(include_str!("../../reference/mode_298K.csv"));
    assert_eq!(table.len(), 17);
    for row in &table {
        let energy = number(row, "wavenumber") / EV_TO_PER_CM;
        let full = Harmonic::of_mode(energy, 298.15);
        let thermal = Harmonic::thermal_of_mode(energy, 298.15);
        let columns = [
            ("ZPE", zero_point_energy_ev(energy)),
            ("F", full.free_energy),
            ("F_thermal", thermal.free_energy),
            ("U_thermal", thermal.internal_energy),
            ("S", 1e3 * full.entropy),
            ("Cv", 1e3 * full.heat_capacity),
        ];
        for (column, found) in columns {
            // The table has 13 digits.
            let found = found * EV_TO_KJ_PER_MOL;
            assert_near(
                column,
                found,
                number(row, column),
                2e-12,
                1e-12 * f64::from(column == "F"),
            );
        }
    }
}

#[test]
fn extreme_reduced_energies_do_not_overflow() {
    // Trap named with the table: x = 1000 overflows eˣ.
    for x in [1000.0, 1e4] {
        let energy = x * BOLTZMANN_EV_PER_K * 10.0;
        let mode = Harmonic::of_mode(energy, 10.0);
        assert_near("F", mode.free_energy, 0.5 * energy, 1e-15, 0.0);
        assert_near("U", mode.internal_energy, 0.5 * energy, 1e-15, 0.0);
        assert_near("S", mode.entropy, 0.0, 0.0, 0.0);
        assert_near("C", mode.heat_capacity, 0.0, 0.0, 0.0);
    }
}
