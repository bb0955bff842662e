//! Vibrations of small molecules against `reference/molecules_gas.toml` (wavenumbers: Shimanouchi,
//! NSRDS-NBS 39 (1972) and NIST; entropies: NASA Glenn polynomials), with rotation and translation
//! of a rigid rotor beside them.

use std::collections::BTreeMap;
use std::f64::consts::PI;

use serde::Deserialize;
use tarehouse_physics::Element;
use tarehouse_physics::thermodynamics::{Harmonic, zero_point_energy_ev};
use tarehouse_physics::units::{
    ATOMIC_MASS_KG, AVOGADRO_PER_MOL, BOLTZMANN_EV_PER_K, BOLTZMANN_J_PER_K, EV_TO_KJ_PER_MOL,
    EV_TO_PER_CM, PLANCK_J_S,
};

use crate::reference::assert_near;

const TEMPERATURE_K: f64 = 298.15;
/// Standard pressure, Pa (IUPAC, since 1982).
const PRESSURE_PA: f64 = 1e5;

#[derive(Deserialize)]
struct GasMolecule {
    modes: Vec<(f64, usize)>,
    #[serde(rename = "B_cm1")]
    rotational_per_cm: Vec<f64>,
    sigma: f64,
    zpe: f64,
    #[serde(rename = "F_thermal")]
    free_energy_thermal: f64,
    #[serde(rename = "U_thermal")]
    internal_energy_thermal: f64,
    #[serde(rename = "S_vib")]
    entropy_vib: f64,
    #[serde(rename = "Cv_vib")]
    heat_capacity_vib: f64,
    #[serde(rename = "S_total_rrho")]
    entropy_total: f64,
    #[serde(rename = "S_ref")]
    entropy_measured: f64,
}

fn molecules() -> BTreeMap<String, GasMolecule> {
    toml::from_str(include_str!("../../reference/molecules_gas.toml")).unwrap()
}

impl GasMolecule {
    fn energies_ev(&self) -> Vec<f64> {
        self.modes
            .iter()
            .flat_map(|&(wavenumber, count)| vec![wavenumber / EV_TO_PER_CM; count])
            .collect()
    }

    /// Classical rigid rotor, J/mol/K (Herzberg, Infrared and Raman Spectra, 1945, ch. V).
    fn rotational_entropy(&self) -> f64 {
        let thermal_per_cm = BOLTZMANN_EV_PER_K * TEMPERATURE_K * EV_TO_PER_CM;
        let reduced = match self.rotational_per_cm[..] {
            [b] => (thermal_per_cm / (self.sigma * b)).ln() + 1.0,
            [a, b, c] => {
                let states = (PI * thermal_per_cm.powi(3) / (a * b * c)).sqrt();
                (states / self.sigma).ln() + 1.5
            }
            _ => panic!("one rotational constant or three"),
        };
        gas_constant() * reduced
    }
}

fn gas_constant() -> f64 {
    BOLTZMANN_J_PER_K * AVOGADRO_PER_MOL
}

/// Sackur (1911) and Tetrode (1912), J/mol/K.
fn translational_entropy(mass_u: f64) -> f64 {
    let thermal = BOLTZMANN_J_PER_K * TEMPERATURE_K;
    let wave = 2.0 * PI * mass_u * ATOMIC_MASS_KG * thermal / (PLANCK_J_S * PLANCK_J_S);
    gas_constant() * ((wave.powf(1.5) * thermal / PRESSURE_PA).ln() + 2.5)
}

fn mass_u(formula: &[(&str, f64)]) -> f64 {
    formula
        .iter()
        .map(|(symbol, count)| {
            let element = Element::from_symbol(symbol).unwrap();
            count * element.standard_weight_u().unwrap()
        })
        .sum()
}

#[test]
fn vibrational_functions_agree_with_the_table() {
    let molecules = molecules();
    assert_eq!(molecules.len(), 5);
    for (name, molecule) in molecules {
        let energies = molecule.energies_ev();
        let thermal: Harmonic = energies
            .iter()
            .map(|&energy| Harmonic::thermal_of_mode(energy, TEMPERATURE_K))
            .sum();
        let full = Harmonic::of_modes(&energies, TEMPERATURE_K);
        let zero_point: f64 = energies.iter().copied().map(zero_point_energy_ev).sum();
        let columns = [
            (zero_point, molecule.zpe),
            (thermal.free_energy, molecule.free_energy_thermal),
            (thermal.internal_energy, molecule.internal_energy_thermal),
            (
                full.free_energy,
                molecule.zpe + molecule.free_energy_thermal,
            ),
            (1e3 * full.entropy, molecule.entropy_vib),
            (1e3 * full.heat_capacity, molecule.heat_capacity_vib),
        ];
        for (found, expected) in columns {
            assert_near(&name, found * EV_TO_KJ_PER_MOL, expected, 5e-12, 0.0);
        }
    }
}

#[test]
fn total_entropies_agree_with_thermochemistry() {
    let formulas: [(&str, &[(&str, f64)]); 5] = [
        ("N2", &[("N", 2.0)]),
        ("CO2", &[("C", 1.0), ("O", 2.0)]),
        ("H2O", &[("H", 2.0), ("O", 1.0)]),
        ("NH3", &[("N", 1.0), ("H", 3.0)]),
        ("C6H6", &[("C", 6.0), ("H", 6.0)]),
    ];
    let molecules = molecules();
    for (name, formula) in formulas {
        let molecule = &molecules[name];
        let vibrations = Harmonic::of_modes(&molecule.energies_ev(), TEMPERATURE_K);
        let total = translational_entropy(mass_u(formula))
            + molecule.rotational_entropy()
            + 1e3 * vibrations.entropy * EV_TO_KJ_PER_MOL;
        assert_near(name, total, molecule.entropy_total, 0.0, 1e-3);
        // Quantum rotation and centrifugal stretching are left out: at most 0.11 J/mol/K.
        assert_near(name, total, molecule.entropy_measured, 0.0, 0.15);
    }
}
