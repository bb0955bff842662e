//! The Debye solid, sampled as modes with density 3ω² (Debye, Ann. Phys. 344, 789 (1912)), against
//! `reference/debye_solid.csv` and `reference/debye_functions.csv`.

use tarehouse_physics::thermodynamics::Harmonic;
use tarehouse_physics::units::BOLTZMANN_EV_PER_K;
use tarehouse_tests::quadrature::integrate_from_zero;

use crate::reference::{assert_near, number, rows};

const ENERGY_MAX_EV: f64 = 0.03;

/// ⟨f⟩ of a thermal function over the modes of a Debye solid; t = T/Θ.
fn debye_mean(t: f64, pick: impl Fn(Harmonic) -> f64) -> f64 {
    let temperature_k = t * ENERGY_MAX_EV / BOLTZMANN_EV_PER_K;
    integrate_from_zero(120, |w| {
        3.0 * w * w * pick(Harmonic::thermal_of_mode(w * ENERGY_MAX_EV, temperature_k))
    })
}

#[test]
fn debye_solid_agrees_with_the_table() {
    let table = rows(include_str!("../../reference/debye_solid.csv"));
    assert_eq!(table.len(), 24);
    for row in &table {
        let t = number(row, "t");
        let thermal_energy = t * ENERGY_MAX_EV;
        let columns = [
            (
                "Cv_over_3R",
                debye_mean(t, |m| m.heat_capacity / BOLTZMANN_EV_PER_K),
            ),
            (
                "Uth_over_3RT",
                debye_mean(t, |m| m.internal_energy / thermal_energy),
            ),
            (
                "S_over_3R",
                debye_mean(t, |m| m.entropy / BOLTZMANN_EV_PER_K),
            ),
            (
                "Fth_over_3RT",
                debye_mean(t, |m| m.free_energy / thermal_energy),
            ),
        ];
        for (column, found) in columns {
            assert_near(column, found, number(row, column), 1e-11, 0.0);
        }
    }
}

#[test]
fn thermal_energy_is_the_third_debye_function() {
    // Abramowitz & Stegun, Table 27.1; U_th/3RT = D₃(Θ/T).
    let table = rows(include_str!("../../reference/debye_functions.csv"));
    for row in table.iter().filter(|row| number(row, "x") > 0.0) {
        let x = number(row, "x");
        let found = debye_mean(1.0 / x, |m| m.internal_energy) * x / ENERGY_MAX_EV;
        assert_near("D3", found, number(row, "D3"), 1e-11, 0.0);
    }
}

#[test]
fn low_temperatures_follow_the_cubic_law() {
    // C_V = (12π⁴/5) R (T/Θ)³; at t = 0.05 the law is 1.6e-5 high, at 0.1 2.7 % (computed with the
    // table).
    let law = |t: f64| 12.0 * std::f64::consts::PI.powi(4) / 5.0 * t.powi(3);
    let capacity = |t: f64| 3.0 * debye_mean(t, |m| m.heat_capacity) / BOLTZMANN_EV_PER_K;
    assert_near("t = 0.02", capacity(0.02) / law(0.02), 1.0, 1e-9, 0.0);
    assert_near(
        "t = 0.05",
        law(0.05) / capacity(0.05) - 1.0,
        1.6e-5,
        0.05,
        0.0,
    );
    assert_near("t = 0.1", law(0.1) / capacity(0.1) - 1.0, 0.027, 0.03, 0.0);
}
