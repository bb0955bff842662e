//! The oscillator against its own limits and identities, and the curve against the functions that
//! it samples.

use super::*;
use crate::units::{EV_TO_KJ_PER_MOL, EV_TO_PER_CM};

fn assert_close(found: f64, expected: f64, relative: f64) {
    assert!(
        (found - expected).abs() <= relative * expected.abs(),
        "{found:e} instead of {expected:e}"
    );
}

/// The thermal part of a mode with ħω = x kT, in units of kT and k.
fn at_reduced_energy(x: f64) -> Harmonic {
    let temperature_k = 100.0;
    let thermal_energy = BOLTZMANN_EV_PER_K * temperature_k;
    let mode = Harmonic::thermal_of_mode(x * thermal_energy, temperature_k);
    Harmonic {
        free_energy: mode.free_energy / thermal_energy,
        internal_energy: mode.internal_energy / thermal_energy,
        entropy: mode.entropy / BOLTZMANN_EV_PER_K,
        heat_capacity: mode.heat_capacity / BOLTZMANN_EV_PER_K,
    }
}

#[test]
fn small_reduced_energies_follow_the_classical_series() {
    for x in [1e-6_f64, 1e-5, 1e-4, 1e-3] {
        let mode = at_reduced_energy(x);
        let x2 = x * x;
        assert_close(mode.free_energy, x.ln() - x / 2.0 + x2 / 24.0, 1e-14);
        assert_close(mode.internal_energy, 1.0 - x / 2.0 + x2 / 12.0, 2e-14);
        assert_close(mode.entropy, 1.0 - x.ln() + x2 / 24.0, 1e-14);
        assert_close(mode.heat_capacity, 1.0 - x2 / 12.0, 2e-14);
    }
}

#[test]
fn large_reduced_energies_keep_their_relative_accuracy() {
    for x in [40.0_f64, 100.0, 300.0, 700.0] {
        let mode = at_reduced_energy(x);
        let boltzmann = (-x).exp();
        assert_close(mode.free_energy, -boltzmann, 1e-12);
        assert_close(mode.internal_energy, x * boltzmann, 1e-12);
        assert_close(mode.entropy, (x + 1.0) * boltzmann, 1e-12);
        assert_close(mode.heat_capacity, x * x * boltzmann, 1e-12);
    }
}

#[test]
fn functions_are_finite_and_obey_their_identities_over_ten_decades() {
    let temperature_k = 250.0;
    let thermal_energy = BOLTZMANN_EV_PER_K * temperature_k;
    for step in 0..=1000 {
        let x = 10f64.powf(-6.0 + 0.01 * f64::from(step));
        let energy = x * thermal_energy;
        let mode = Harmonic::of_mode(energy, temperature_k);
        assert!(mode.free_energy.is_finite() && mode.entropy >= 0.0 && mode.heat_capacity >= 0.0);
        let balance = mode.internal_energy - temperature_k * mode.entropy - mode.free_energy;
        assert!(balance.abs() < 1e-14 * thermal_energy.max(energy) * 20.0);
    }
}

#[test]
fn entropy_and_heat_capacity_are_derivatives() {
    for wavenumber in [5.0, 60.0, 300.0, 1500.0, 3000.0] {
        let energy = wavenumber / EV_TO_PER_CM;
        for temperature_k in [80.0, 300.0, 700.0] {
            let h = 1e-3 * temperature_k;
            let low = Harmonic::of_mode(energy, temperature_k - h);
            let mode = Harmonic::of_mode(energy, temperature_k);
            let high = Harmonic::of_mode(energy, temperature_k + h);
            let entropy = (low.free_energy - high.free_energy) / (2.0 * h);
            let capacity = (high.internal_energy - low.internal_energy) / (2.0 * h);
            assert!((entropy - mode.entropy).abs() < 2e-4 * mode.entropy + 1e-15);
            assert!((capacity - mode.heat_capacity).abs() < 2e-4 * mode.heat_capacity + 1e-15);
        }
    }
}

#[test]
fn zero_temperature_is_the_exact_limit() {
    for energy in [1e-12, 0.01, 0.4] {
        let cold = Harmonic::of_mode(energy, 0.0);
        let expected = Harmonic {
            free_energy: 0.5 * energy,
            internal_energy: 0.5 * energy,
            entropy: 0.0,
            heat_capacity: 0.0,
        };
        assert_eq!(cold, expected);
    }
    let nearly = Harmonic::of_mode(0.01, f64::MIN_POSITIVE);
    assert_eq!(nearly, Harmonic::of_mode(0.01, 0.0));
}

#[test]
fn the_edge_of_the_domain_is_a_limit_and_beyond_it_is_nothing() {
    let flat = Harmonic::of_mode(0.0, 300.0);
    assert!(flat.free_energy.is_infinite() && flat.free_energy < 0.0);
    assert!(flat.entropy.is_infinite() && flat.entropy > 0.0);
    assert_close(flat.internal_energy, BOLTZMANN_EV_PER_K * 300.0, 1e-15);
    assert_close(flat.heat_capacity, BOLTZMANN_EV_PER_K, 1e-15);
    assert!(Harmonic::of_mode(-0.01, 300.0).free_energy.is_nan());
    assert!(Harmonic::of_mode(0.01, -1.0).heat_capacity.is_nan());
    assert!(Harmonic::of_eigenvalue(-1.0, 300.0).entropy.is_nan());
}

#[test]
fn eigenvalues_and_sums_agree_with_single_modes() {
    let eigenvalue = 1.7_f64;
    let energy = phonon_energy_unit_ev() * eigenvalue.sqrt();
    let mode = Harmonic::of_mode(energy, 200.0);
    assert_eq!(Harmonic::of_eigenvalue(eigenvalue, 200.0), mode);
    let other = Harmonic::of_mode(0.02, 200.0);
    let both = Harmonic::of_modes(&[energy, 0.02], 200.0);
    assert_eq!(both, mode + other);
    let mesh = Harmonic::of_mesh([(0.25, &[energy][..]), (0.75, &[0.02][..])], 200.0);
    assert_close(
        mesh.entropy,
        0.25 * mode.entropy + 0.75 * other.entropy,
        1e-15,
    );
    let expected = 0.25 * mode.free_energy + 0.75 * other.free_energy;
    assert_close(mesh.free_energy, expected, 1e-14);
}

fn sampled(temperatures_k: Vec<f64>, energies_ev: &[f64]) -> FreeEnergyCurve {
    let states: Vec<Harmonic> = temperatures_k
        .iter()
        .map(|&t| Harmonic::of_modes(energies_ev, t))
        .collect();
    FreeEnergyCurve::new(
        temperatures_k,
        states.iter().map(|s| s.free_energy).collect(),
        states.iter().map(|s| s.entropy).collect(),
    )
    .unwrap()
}

#[test]
fn a_curve_reproduces_a_molecular_crystal_between_its_nodes() {
    let energies: Vec<f64> = [
        25.0, 40.0, 48.0, 61.0, 80.0, 110.0, 400.0, 900.0, 1600.0, 3000.0,
    ]
    .iter()
    .map(|w| w / EV_TO_PER_CM)
    .collect();
    let grid: Vec<f64> = (0..=50).map(|i| 10.0 * f64::from(i)).collect();
    let curve = sampled(grid, &energies);
    for step in 0..=1000 {
        let temperature_k = 0.5 * f64::from(step);
        let exact = Harmonic::of_modes(&energies, temperature_k);
        let free_energy = curve.free_energy(temperature_k).unwrap();
        let entropy = curve.entropy(temperature_k).unwrap();
        assert!((free_energy - exact.free_energy).abs() * EV_TO_KJ_PER_MOL < 1e-3);
        assert!((entropy - exact.entropy).abs() * EV_TO_KJ_PER_MOL < 1e-3);
    }
}

#[test]
fn a_curve_is_exact_on_its_nodes_and_for_cubics() {
    let cubic = |t: f64| 2.0 - 3.0 * t + 0.5 * t * t - 0.1 * t * t * t;
    let slope = |t: f64| -3.0 + t - 0.3 * t * t;
    let grid = vec![0.0, 1.0, 2.5, 7.0];
    let curve = FreeEnergyCurve::new(
        grid.clone(),
        grid.iter().map(|&t| cubic(t)).collect(),
        grid.iter().map(|&t| -slope(t)).collect(),
    )
    .unwrap();
    for t in [0.0, 0.3, 1.0, 1.9, 2.5, 4.0, 6.9, 7.0] {
        assert!((curve.free_energy(t).unwrap() - cubic(t)).abs() < 1e-13);
        assert!((curve.entropy(t).unwrap() + slope(t)).abs() < 1e-13);
    }
}

#[test]
fn a_curve_does_not_extrapolate() {
    let curve = sampled(vec![10.0, 100.0, 300.0], &[0.01]);
    assert!(curve.free_energy(10.0).is_ok() && curve.free_energy(300.0).is_ok());
    for temperature_k in [9.999, 300.001, -1.0] {
        let expected = CurveError::Outside {
            temperature_k,
            first_k: 10.0,
            last_k: 300.0,
        };
        assert_eq!(curve.free_energy(temperature_k), Err(expected.clone()));
        assert_eq!(curve.entropy(temperature_k), Err(expected));
    }
    assert!(curve.free_energy(f64::NAN).is_err());
}

#[test]
fn faults_of_a_grid_are_all_reported() {
    let errors = FreeEnergyCurve::new(vec![-5.0, 10.0, 10.0], vec![1.0, f64::NAN], vec![0.0; 3]);
    let expected = vec![
        CurveError::Count {
            temperatures: 3,
            free_energies: 2,
            entropies: 3,
        },
        CurveError::Grid {
            index: 0,
            temperature_k: -5.0,
        },
        CurveError::Grid {
            index: 2,
            temperature_k: 10.0,
        },
        CurveError::NotFinite { index: 1 },
    ];
    assert_eq!(errors, Err(expected));
    let short = FreeEnergyCurve::new(vec![0.0], vec![1.0], vec![0.0]);
    assert_eq!(short, Err(vec![CurveError::TooShort { points: 1 }]));
}
