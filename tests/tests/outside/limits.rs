//! Limits that hold for any crystal: high temperature, Dulong and Petit, isotopes.

use nalgebra::Vector3;
use tarehouse_physics::thermodynamics::Harmonic;
use tarehouse_physics::units::{BOLTZMANN_EV_PER_K, EV_TO_KJ_PER_MOL};
use tarehouse_tests::models::{SpringCrystal, diatomic_chain, fcc};

use crate::reference::assert_near;

/// B₂ₖ x²ᵏ/(2k (2k)!) for k = 1…5: F/kT − ln x (Thirring, Phys. Z. 14, 867 (1913)); the
/// coefficients from the Bernoulli numbers of Abramowitz & Stegun, Table 23.2.
const SERIES: [f64; 5] = [
    1.0 / 24.0,
    -1.0 / 2880.0,
    1.0 / 181_440.0,
    -1.0 / 9_676_800.0,
    1.0 / 479_001_600.0,
];

fn reduced_free_energy(x: f64) -> f64 {
    let temperature_k = 300.0;
    let thermal_energy = BOLTZMANN_EV_PER_K * temperature_k;
    Harmonic::of_mode(x * thermal_energy, temperature_k).free_energy / thermal_energy
}

fn series(x: f64, terms: usize) -> f64 {
    let powers = (1..).map(|k| x.powi(2 * k));
    let sum: f64 = SERIES
        .iter()
        .take(terms)
        .zip(powers)
        .map(|(c, p)| c * p)
        .sum();
    x.ln() + sum
}

#[test]
fn free_energy_follows_the_high_temperature_series() {
    for x in [0.01, 0.03, 0.1, 0.2, 0.3] {
        assert_near("F/kT", reduced_free_energy(x), series(x, 5), 0.0, 1e-14);
    }
}

#[test]
fn series_errors_are_those_of_the_next_terms() {
    // Computed at 30 digits: what is missing at x = 1 after one to four terms.
    let expected = [-3.4e-4, 5.4e-6, -1.0e-7, 2.0e-9];
    for (terms, error) in (1..).zip(expected) {
        let found = reduced_free_energy(1.0) - series(1.0, terms);
        assert_near("remainder", found, error, 0.04, 0.0);
    }
}

/// Sum over a half-shifted n×n×n mesh per primitive cell.
fn mesh_state(model: &SpringCrystal, n: u32, temperature_k: f64) -> Harmonic {
    let fraction = |i: u32| (f64::from(i) + 0.5) / f64::from(n);
    let weight = f64::from(n).powi(-3);
    let mut total = Harmonic::default();
    for i in 0..n {
        for j in 0..n {
            for k in 0..n {
                let q = Vector3::new(fraction(i), fraction(j), fraction(k));
                for eigenvalue in model.eigenvalues(&q) {
                    total += Harmonic::of_eigenvalue(eigenvalue, temperature_k) * weight;
                }
            }
        }
    }
    total
}

#[test]
fn heat_capacity_rises_to_dulong_and_petit() {
    // 3R = 24.9433878544597 J/mol/K per mole of atoms.
    let model = fcc(1.0, 40.0);
    let molar =
        |temperature_k| 1e3 * EV_TO_KJ_PER_MOL * mesh_state(&model, 4, temperature_k).heat_capacity;
    assert_near("3R", molar(30_000.0), 24.943_387_854_459_7, 1e-5, 0.0);
    assert!(molar(100.0) < molar(200.0) && molar(200.0) < 24.9433);
}

#[test]
fn isotopes_shift_the_classical_free_energy_by_their_masses_only() {
    // F(m₂) − F(m₁) = (3/2) RT ln(m₁/m₂) per mole of substituted atoms, whatever holds them
    // (classical limit; the first quantum correction Σ(ħω)²/24kT is below 1e-6 kT here).
    let temperature_k = 300_000.0;
    let classical =
        |first: f64, second: f64| 1.5 * BOLTZMANN_EV_PER_K * temperature_k * (first / second).ln();
    let free_energy = |model: &SpringCrystal| mesh_state(model, 4, temperature_k).free_energy;
    for stiffness in [0.2, 5.0] {
        let shift = free_energy(&fcc(stiffness, 2.0)) - free_energy(&fcc(stiffness, 1.0));
        assert_near("fcc", shift, classical(1.0, 2.0), 1e-4, 0.0);
        let chain = |mass| diatomic_chain([stiffness, 0.4], 0.7, [12.0, mass]);
        let shift = free_energy(&chain(18.0)) - free_energy(&chain(16.0));
        assert_near("chain", shift, classical(16.0, 18.0), 1e-4, 0.0);
    }
}
