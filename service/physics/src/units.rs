//! Physical constants and conversions. Inside the house: eV, Å, u, K; wavenumbers in cm⁻¹.
//!
//! Exact values: SI Brochure, 9th ed. (2019). Measured ones: CODATA 2022 (Mohr, Newell, Taylor & Tiesinga, NIST
//! 2024). The choice of CODATA year moves a frequency by less than 1e-9 of itself.

/// Planck constant, J s (exact).
pub const PLANCK_J_S: f64 = 6.626_070_15e-34;
/// Boltzmann constant, J/K (exact).
pub const BOLTZMANN_J_PER_K: f64 = 1.380_649e-23;
/// Speed of light, m/s (exact).
pub const LIGHT_SPEED_M_PER_S: f64 = 299_792_458.0;
/// Avogadro constant, 1/mol (exact).
pub const AVOGADRO_PER_MOL: f64 = 6.022_140_76e23;
/// Elementary charge, C; also the number of joules in an electronvolt (exact).
pub const ELEMENTARY_CHARGE_C: f64 = 1.602_176_634e-19;
/// Unified atomic mass unit, kg (CODATA 2022).
pub const ATOMIC_MASS_KG: f64 = 1.660_539_068_92e-27;
/// Hartree energy, J (CODATA 2022).
pub const HARTREE_J: f64 = 4.359_744_722_206_0e-18;
/// Bohr radius, m (CODATA 2022).
pub const BOHR_M: f64 = 5.291_772_105_44e-11;

/// Boltzmann constant, eV/K (exact).
pub const BOLTZMANN_EV_PER_K: f64 = BOLTZMANN_J_PER_K / ELEMENTARY_CHARGE_C;
/// Bohr radius, Å.
pub const BOHR_ANGSTROM: f64 = BOHR_M * 1e10;
/// Hartree energy, eV.
pub const HARTREE_EV: f64 = HARTREE_J / ELEMENTARY_CHARGE_C;
/// e²/4πε₀ = E_h a₀, eV·Å.
pub const COULOMB_EV_ANGSTROM: f64 = HARTREE_EV * BOHR_ANGSTROM;
/// One eV per particle in kJ/mol (exact).
pub const EV_TO_KJ_PER_MOL: f64 = ELEMENTARY_CHARGE_C * AVOGADRO_PER_MOL * 1e-3;
/// One eV as a wavenumber, cm⁻¹ (exact).
pub const EV_TO_PER_CM: f64 = ELEMENTARY_CHARGE_C / (PLANCK_J_S * LIGHT_SPEED_M_PER_S * 100.0);
/// One eV/Å² in N/m (exact).
pub const EV_PER_ANG2_TO_N_PER_M: f64 = ELEMENTARY_CHARGE_C * 1e20;
/// One eV/Å³ in GPa (exact).
pub const EV_PER_ANG3_TO_GPA: f64 = ELEMENTARY_CHARGE_C * 1e21;
/// One u/Å³ in g/cm³.
pub const U_PER_ANG3_TO_G_PER_CM3: f64 = ATOMIC_MASS_KG * 1e27;

/// sqrt(eV/Å²/u) as an angular frequency, rad/s.
pub fn angular_frequency_unit_per_s() -> f64 {
    (ELEMENTARY_CHARGE_C * 1e20 / ATOMIC_MASS_KG).sqrt()
}

/// sqrt(eV/Å²/u) as a wavenumber: 521.4708980 cm⁻¹.
pub fn wavenumber_unit_per_cm() -> f64 {
    angular_frequency_unit_per_s() / (2.0 * std::f64::consts::PI * LIGHT_SPEED_M_PER_S * 100.0)
}

/// sqrt(eV/Å²/u) as an energy ħω, eV.
pub fn phonon_energy_unit_ev() -> f64 {
    wavenumber_unit_per_cm() / EV_TO_PER_CM
}

/// sqrt(eV/u) as a velocity, m/s: an acoustic slope ω/|q| in Å·sqrt(eV/Å²/u).
pub fn velocity_unit_m_per_s() -> f64 {
    angular_frequency_unit_per_s() * 1e-10
}

/// Signed wavenumber of an eigenvalue of the dynamical matrix: sign(λ)·sqrt|λ|, negative for an imaginary mode.
///
/// `eigenvalue` in eV/Å²/u, result in cm⁻¹.
pub fn wavenumber_per_cm(eigenvalue: f64) -> f64 {
    wavenumber_unit_per_cm() * eigenvalue.abs().sqrt().copysign(eigenvalue)
}

/// Inverse of [`wavenumber_per_cm`].
pub fn eigenvalue_of_wavenumber(wavenumber_per_cm: f64) -> f64 {
    let omega = wavenumber_per_cm / wavenumber_unit_per_cm();
    omega * omega.abs()
}
