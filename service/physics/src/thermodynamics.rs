//! Thermodynamics of harmonic modes, and the curve of a free energy over temperature.
//!
//! Every function here is exact for one oscillator: nothing is dropped, floored or guessed. Soft
//! and zero modes are the caller's business: a mode of zero energy has no finite free energy above
//! 0 K, and an imaginary one has none at all.

use std::iter::Sum;
use std::ops::{Add, AddAssign, Mul};

use crate::units::{BOLTZMANN_EV_PER_K, phonon_energy_unit_ev};

/// ħω/kT above which e^{−ħω/kT} is below the smallest double, so that thermal parts are exactly
/// zero.
const REDUCED_ENERGY_MAX: f64 = 746.0;

/// Thermodynamic functions of one mode, or sums of them.
#[derive(Debug, Clone, Copy, PartialEq, Default)]
pub struct Harmonic {
    /// Helmholtz free energy F = U − TS, eV; with the zero-point energy unless said otherwise.
    pub free_energy: f64,
    /// Internal energy U, eV; with the zero-point energy unless said otherwise.
    pub internal_energy: f64,
    /// Entropy S, eV/K.
    pub entropy: f64,
    /// Heat capacity at constant volume C_V, eV/K.
    pub heat_capacity: f64,
}

impl Harmonic {
    /// One oscillator with its zero-point energy: F = ħω/2 + kT ln(1 − e^{−x}), U = ħω/2 + ħω/(eˣ −
    /// 1), S = k[x/(eˣ − 1) − ln(1 − e^{−x})], C_V = k x² eˣ/(eˣ − 1)², with x = ħω/kT (Einstein,
    /// 1907).
    ///
    /// `energy_ev` is ħω in eV and must be positive, `temperature_k` must not be negative. At 0 K
    /// the limit is exact. At ħω = 0 above 0 K the limits are returned (F = −∞, S = ∞, U = kT, C_V
    /// = k); outside the domain, NaN.
    pub fn of_mode(energy_ev: f64, temperature_k: f64) -> Self {
        let thermal = Self::thermal_of_mode(energy_ev, temperature_k);
        let zero_point = zero_point_energy_ev(energy_ev);
        Self {
            free_energy: zero_point + thermal.free_energy,
            internal_energy: zero_point + thermal.internal_energy,
            ..thermal
        }
    }

    /// As [`Harmonic::of_mode`], but F and U without the zero-point energy: accurate relative to
    /// themselves however small they are.
    pub fn thermal_of_mode(energy_ev: f64, temperature_k: f64) -> Self {
        let in_domain = energy_ev >= 0.0 && temperature_k >= 0.0;
        if !in_domain {
            return Self::uniform(f64::NAN);
        }
        let thermal_energy = BOLTZMANN_EV_PER_K * temperature_k;
        if thermal_energy <= 0.0 || energy_ev > REDUCED_ENERGY_MAX * thermal_energy {
            return Self::default();
        }
        let x = energy_ev / thermal_energy;
        if x <= 0.0 {
            return Self {
                free_energy: f64::NEG_INFINITY,
                internal_energy: thermal_energy,
                entropy: f64::INFINITY,
                heat_capacity: BOLTZMANN_EV_PER_K,
            };
        }
        let log_of_empty = ln_one_minus_exp_minus(x);
        let one_minus_boltzmann = -(-x).exp_m1();
        let occupation_x = x * (-x).exp() / one_minus_boltzmann;
        Self {
            free_energy: thermal_energy * log_of_empty,
            internal_energy: thermal_energy * occupation_x,
            entropy: BOLTZMANN_EV_PER_K * (occupation_x - log_of_empty),
            heat_capacity: BOLTZMANN_EV_PER_K * occupation_x * x / one_minus_boltzmann,
        }
    }

    /// One oscillator from its eigenvalue λ = ω² of the dynamical matrix, eV/Å²/u, positive; see
    /// [`Harmonic::of_mode`].
    pub fn of_eigenvalue(eigenvalue: f64, temperature_k: f64) -> Self {
        Self::of_mode(mode_energy_ev(eigenvalue), temperature_k)
    }

    /// Sum over the oscillators with energies ħω in eV, in the order given.
    pub fn of_modes(energies_ev: &[f64], temperature_k: f64) -> Self {
        energies_ev
            .iter()
            .map(|&energy| Self::of_mode(energy, temperature_k))
            .sum()
    }

    /// Weighted sum Σ_q w_q Σ_ν over wave vectors, each with its weight and energies ħω in eV, in
    /// the order given. With weights that sum to one the result belongs to one primitive cell.
    pub fn of_mesh<'a>(
        points: impl IntoIterator<Item = (f64, &'a [f64])>,
        temperature_k: f64,
    ) -> Self {
        points
            .into_iter()
            .map(|(weight, energies)| Self::of_modes(energies, temperature_k) * weight)
            .sum()
    }

    fn uniform(value: f64) -> Self {
        Self {
            free_energy: value,
            internal_energy: value,
            entropy: value,
            heat_capacity: value,
        }
    }
}

impl Add for Harmonic {
    type Output = Self;

    fn add(self, other: Self) -> Self {
        Self {
            free_energy: self.free_energy + other.free_energy,
            internal_energy: self.internal_energy + other.internal_energy,
            entropy: self.entropy + other.entropy,
            heat_capacity: self.heat_capacity + other.heat_capacity,
        }
    }
}

impl AddAssign for Harmonic {
    fn add_assign(&mut self, other: Self) {
        *self = *self + other;
    }
}

impl Mul<f64> for Harmonic {
    type Output = Self;

    fn mul(self, factor: f64) -> Self {
        Self {
            free_energy: self.free_energy * factor,
            internal_energy: self.internal_energy * factor,
            entropy: self.entropy * factor,
            heat_capacity: self.heat_capacity * factor,
        }
    }
}

impl Sum for Harmonic {
    fn sum<I: Iterator<Item = Self>>(terms: I) -> Self {
        terms.fold(Self::default(), Add::add)
    }
}

/// Zero-point energy ħω/2 of one oscillator with energy ħω, same unit.
pub fn zero_point_energy_ev(energy_ev: f64) -> f64 {
    0.5 * energy_ev
}

/// Energy ħω in eV of a mode with eigenvalue λ = ω² of the dynamical matrix, eV/Å²/u; NaN for λ <
/// 0.
pub fn mode_energy_ev(eigenvalue: f64) -> f64 {
    phonon_energy_unit_ev() * eigenvalue.sqrt()
}

/// ln(1 − e^{−x}) for x > 0, accurate at both ends: below ln 2 the difference 1 − e^{−x} is the
/// delicate part, above it the logarithm near one.
fn ln_one_minus_exp_minus(x: f64) -> f64 {
    if x < std::f64::consts::LN_2 {
        (-(-x).exp_m1()).ln()
    } else {
        (-(-x).exp()).ln_1p()
    }
}

/// What is wrong with a curve, or with a question to it.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum CurveError {
    /// Fewer than two temperatures.
    #[error("{points} temperatures; a curve needs two or more")]
    TooShort {
        /// Number of temperatures.
        points: usize,
    },
    /// Lists of different lengths.
    #[error("{temperatures} temperatures, {free_energies} free energies and {entropies} entropies")]
    Count {
        /// Number of temperatures.
        temperatures: usize,
        /// Number of free energies.
        free_energies: usize,
        /// Number of entropies.
        entropies: usize,
    },
    /// A temperature is negative, not finite, or not above the one before it.
    #[error("temperature {index} is {temperature_k} K; they must rise from 0 K or above")]
    Grid {
        /// Index in the list.
        index: usize,
        /// Temperature found.
        temperature_k: f64,
    },
    /// A free energy or an entropy is not finite.
    #[error("the free energy or entropy at index {index} is not finite")]
    NotFinite {
        /// Index in the list.
        index: usize,
    },
    /// The temperature asked for lies outside the grid: nothing is extrapolated.
    #[error("{temperature_k} K is outside the curve, which runs from {first_k} K to {last_k} K")]
    Outside {
        /// Temperature asked for.
        temperature_k: f64,
        /// First temperature of the grid.
        first_k: f64,
        /// Last temperature of the grid.
        last_k: f64,
    },
}

/// A free energy F over temperature, known with its slope −S on a grid and interpolated between by
/// cubic Hermite polynomials. Unit of energy: the caller's (S in the same unit per K).
#[derive(Debug, Clone, PartialEq)]
pub struct FreeEnergyCurve {
    temperatures_k: Vec<f64>,
    free_energies: Vec<f64>,
    entropies: Vec<f64>,
}

impl FreeEnergyCurve {
    /// A curve from its grid, which must rise strictly.
    ///
    /// # Errors
    /// Everything that is wrong, at once.
    pub fn new(
        temperatures_k: Vec<f64>,
        free_energies: Vec<f64>,
        entropies: Vec<f64>,
    ) -> Result<Self, Vec<CurveError>> {
        let mut errors = Vec::new();
        let points = temperatures_k.len();
        if points < 2 {
            errors.push(CurveError::TooShort { points });
        }
        if free_energies.len() != points || entropies.len() != points {
            errors.push(CurveError::Count {
                temperatures: points,
                free_energies: free_energies.len(),
                entropies: entropies.len(),
            });
        }
        let mut before = -f64::MIN_POSITIVE;
        for (index, &temperature_k) in temperatures_k.iter().enumerate() {
            if !(temperature_k.is_finite() && temperature_k > before) {
                errors.push(CurveError::Grid {
                    index,
                    temperature_k,
                });
            }
            before = temperature_k;
        }
        let pairs = free_energies.iter().zip(&entropies).enumerate();
        for (index, (free_energy, entropy)) in pairs {
            if !(free_energy.is_finite() && entropy.is_finite()) {
                errors.push(CurveError::NotFinite { index });
            }
        }
        if errors.is_empty() {
            Ok(Self {
                temperatures_k,
                free_energies,
                entropies,
            })
        } else {
            Err(errors)
        }
    }

    /// Temperatures of the grid, K.
    pub fn temperatures_k(&self) -> &[f64] {
        &self.temperatures_k
    }

    /// Free energies on the grid.
    pub fn free_energies(&self) -> &[f64] {
        &self.free_energies
    }

    /// Entropies on the grid.
    pub fn entropies(&self) -> &[f64] {
        &self.entropies
    }

    /// F(T) between the grid points: the cubic with the right F and −S at both ends of the
    /// interval. Its error is h⁴/384 times the largest fourth derivative of F.
    ///
    /// # Errors
    /// [`CurveError::Outside`].
    pub fn free_energy(&self, temperature_k: f64) -> Result<f64, CurveError> {
        let part = self.interval(temperature_k)?;
        let (t, h) = (part.fraction, part.width_k);
        let u = 1.0 - t;
        Ok(u * u * (1.0 + 2.0 * t) * part.free_energies[0]
            + t * t * (1.0 + 2.0 * u) * part.free_energies[1]
            + h * t * u * (t * part.entropies[1] - u * part.entropies[0]))
    }

    /// S(T) = −dF/dT of the same cubic, so that F and S stay consistent with each other.
    ///
    /// # Errors
    /// [`CurveError::Outside`].
    pub fn entropy(&self, temperature_k: f64) -> Result<f64, CurveError> {
        let part = self.interval(temperature_k)?;
        let t = part.fraction;
        let u = 1.0 - t;
        let mean_slope = (part.free_energies[1] - part.free_energies[0]) / part.width_k;
        Ok(-6.0 * t * u * mean_slope
            + u * (1.0 - 3.0 * t) * part.entropies[0]
            + t * (1.0 - 3.0 * u) * part.entropies[1])
    }

    fn interval(&self, temperature_k: f64) -> Result<Interval, CurveError> {
        let outside = |first_k, last_k| CurveError::Outside {
            temperature_k,
            first_k,
            last_k,
        };
        let grid = &self.temperatures_k;
        let (Some(&first_k), Some(&last_k)) = (grid.first(), grid.last()) else {
            return Err(outside(f64::NAN, f64::NAN));
        };
        if !(first_k..=last_k).contains(&temperature_k) {
            return Err(outside(first_k, last_k));
        }
        let above = grid
            .partition_point(|&node| node <= temperature_k)
            .clamp(1, grid.len() - 1);
        let ends = [above - 1, above];
        let [low_k, high_k] = ends.map(|end| grid[end]);
        Ok(Interval {
            fraction: (temperature_k - low_k) / (high_k - low_k),
            width_k: high_k - low_k,
            free_energies: ends.map(|end| self.free_energies[end]),
            entropies: ends.map(|end| self.entropies[end]),
        })
    }
}

/// One interval of the grid and the place asked for in it.
struct Interval {
    fraction: f64,
    width_k: f64,
    free_energies: [f64; 2],
    entropies: [f64; 2],
}

#[cfg(test)]
mod tests;
