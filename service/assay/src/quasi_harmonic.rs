//! Quasi-harmonic free energy of one form from examinations at several volumes.
//!
//! A(V, T) = E(V) + F(V, T) at the volumes examined is fitted by the third-order finite-strain equation of Birch (1947),
//! a cubic polynomial in V^(−2/3), at each temperature by the same linear least squares, so that the fits of A, of −S and of
//! C_V are derivatives of each other. G(T, p) = min over V of A + pV, inside the volumes examined and nowhere else; there
//! p = −A_V, B = V A_VV, α = S_V/(V A_VV) and C_p = C_V + α² B V T.
//!
//! A bracket adds up the brackets of all members, each widened by the scatter of the fit and carried to the result by
//! shifting that member alone, and the distance to a second fit, a cubic polynomial in V. It does not hold the level of
//! theory, nor anharmonicity at constant volume.

mod fit;

use fit::{Basis, Fit, Minimum};
use tarehouse_physics::thermodynamics::FreeEnergyCurve;

use crate::pressure::GPA_ANG3_TO_KJ_PER_MOL;
use crate::report::FreeEnergy;

/// Volumes that a fit needs: it has four coefficients.
pub const VOLUMES_MIN: usize = 4;

/// Volumes closer than this share of themselves are the same.
const SAME_VOLUME: f64 = 1e-5;

/// Temperatures closer than this are the same, K.
const SAME_TEMPERATURE_K: f64 = 1e-6;

/// What was examined at one volume, per formula unit.
#[derive(Debug, Clone, PartialEq)]
pub struct VolumePoint {
    /// Volume, Å³.
    pub volume_ang3: f64,
    /// Static lattice energy, kJ/mol.
    pub static_kj_per_mol: f64,
    /// Free energies of its report.
    pub free_energy: Vec<FreeEnergy>,
}

/// Why there is no quasi-harmonic free energy.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum VolumeSeriesError {
    /// Too few volumes.
    #[error("{VOLUMES_MIN} volumes are needed; there are {found}")]
    TooFew {
        /// Distinct volumes.
        found: usize,
    },
    /// Two members at one volume.
    #[error("members {first} and {second} have the same volume, {volume_ang3:.3} Å³")]
    SameVolume {
        /// Index of one.
        first: usize,
        /// Index of the other.
        second: usize,
        /// Their volume, Å³.
        volume_ang3: f64,
    },
    /// A member without a usable curve.
    #[error("member {member} {detail}")]
    Member {
        /// Its index.
        member: usize,
        /// What is wrong, in words.
        detail: String,
    },
    /// A temperature that the grid does not reach.
    #[error(
        "{temperature_k} K is outside the temperatures that all members share, {first_k} K to {last_k} K"
    )]
    TemperatureOutside {
        /// Temperature asked for, K.
        temperature_k: f64,
        /// Lowest, K.
        first_k: f64,
        /// Highest, K.
        last_k: f64,
    },
    /// The crystal would leave the volumes examined.
    #[error(
        "at {temperature_k} K and {pressure_gpa} GPa the lowest free energy is {where_} the volumes examined, \
         {first_ang3:.2} Å³ to {last_ang3:.2} Å³: add volumes there"
    )]
    VolumeOutside {
        /// Temperature, K.
        temperature_k: f64,
        /// Pressure, GPa.
        pressure_gpa: f64,
        /// Smallest volume, Å³.
        first_ang3: f64,
        /// Largest volume, Å³.
        last_ang3: f64,
        /// `below`, `above`, or at the edge of, within the brackets.
        where_: &'static str,
    },
    /// Not a pressure.
    #[error("{pressure_gpa} GPa is not a finite pressure")]
    NotAPressure {
        /// Pressure asked for, GPa.
        pressure_gpa: f64,
    },
}

/// A number with half the width of its bracket.
#[derive(Debug, Clone, Copy, PartialEq, Default)]
pub struct Bracketed {
    /// The number.
    pub central: f64,
    /// Half the width.
    pub half_width: f64,
}

/// A crystal at one temperature and pressure, per formula unit.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Equilibrium {
    /// Temperature, K.
    pub temperature_k: f64,
    /// Pressure, GPa.
    pub pressure_gpa: f64,
    /// Free enthalpy G, static energy included, kJ/mol.
    pub gibbs_kj_per_mol: Bracketed,
    /// Volume, Å³.
    pub volume_ang3: Bracketed,
    /// Isothermal bulk modulus, GPa.
    pub bulk_modulus_gpa: Bracketed,
    /// Volume expansion (1/V) dV/dT, 1/K.
    pub expansion_per_k: Bracketed,
    /// Entropy, J/mol/K.
    pub entropy_j_per_mol_k: f64,
    /// Heat capacity at constant volume, J/mol/K.
    pub heat_capacity_v_j_per_mol_k: f64,
    /// Heat capacity at constant pressure, J/mol/K.
    pub heat_capacity_p_j_per_mol_k: f64,
    /// Root mean square of what the fit leaves, kJ/mol; zero where it leaves nothing to judge by.
    pub fit_residual_kj_per_mol: f64,
}

/// One member with its curve.
#[derive(Debug, Clone, PartialEq)]
struct Member {
    static_kj_per_mol: f64,
    curve: FreeEnergyCurve,
    heat_capacity: Vec<f64>,
    half_width: Vec<f64>,
}

/// Examinations of one form at several volumes.
#[derive(Debug, Clone, PartialEq)]
pub struct VolumeSeries {
    volumes_ang3: Vec<f64>,
    members: Vec<Member>,
    birch: Fit,
    polynomial: Fit,
}

/// All members at one temperature, in kJ/mol and kJ/mol/K.
struct Slice {
    energy: Vec<f64>,
    entropy: Vec<f64>,
    heat_capacity: Vec<f64>,
    half_width: Vec<f64>,
    half_width_slope: Vec<f64>,
}

impl VolumeSeries {
    /// A series from its members, in any order.
    ///
    /// # Errors
    /// Everything that is wrong, at once.
    pub fn new(points: &[VolumePoint]) -> Result<Self, Vec<VolumeSeriesError>> {
        let mut errors = Vec::new();
        let mut order: Vec<usize> = (0..points.len()).collect();
        order.sort_by(|a, b| points[*a].volume_ang3.total_cmp(&points[*b].volume_ang3));
        let mut same = 0;
        for pair in order.windows(2) {
            let &[first, second] = pair else { continue };
            let volume_ang3 = points[first].volume_ang3;
            if (points[second].volume_ang3 - volume_ang3).abs() <= SAME_VOLUME * volume_ang3.abs() {
                same += 1;
                errors.push(VolumeSeriesError::SameVolume {
                    first,
                    second,
                    volume_ang3,
                });
            }
        }
        if points.len() - same < VOLUMES_MIN {
            let found = points.len() - same;
            errors.push(VolumeSeriesError::TooFew { found });
        }
        let mut members = Vec::new();
        for &k in &order {
            match Member::new(&points[k]) {
                Ok(member) => members.push(member),
                Err(detail) => errors.push(VolumeSeriesError::Member { member: k, detail }),
            }
        }
        let volumes_ang3: Vec<f64> = order.iter().map(|k| points[*k].volume_ang3).collect();
        let fits = errors.is_empty().then(|| {
            (
                Fit::new(Basis::Birch, &volumes_ang3),
                Fit::new(Basis::Volume, &volumes_ang3),
            )
        });
        match fits {
            Some((Some(birch), Some(polynomial))) => Ok(Self {
                volumes_ang3,
                members,
                birch,
                polynomial,
            }),
            Some(_) => Err(vec![VolumeSeriesError::TooFew {
                found: points.len(),
            }]),
            None => Err(errors),
        }
    }

    /// The crystal at a temperature and a pressure.
    ///
    /// # Errors
    /// Where this lies outside the temperatures or volumes examined, the bracket included.
    pub fn at(
        &self,
        temperature_k: f64,
        pressure_gpa: f64,
    ) -> Result<Equilibrium, VolumeSeriesError> {
        if !pressure_gpa.is_finite() {
            return Err(VolumeSeriesError::NotAPressure { pressure_gpa });
        }
        let slice = self.slice(temperature_k)?;
        let outside = |where_: &'static str| VolumeSeriesError::VolumeOutside {
            temperature_k,
            pressure_gpa,
            first_ang3: self.volumes_ang3.first().copied().unwrap_or_default(),
            last_ang3: self.volumes_ang3.last().copied().unwrap_or_default(),
            where_,
        };
        let pressure = pressure_gpa * GPA_ANG3_TO_KJ_PER_MOL;
        let central =
            Response::of(&self.birch, &slice.energy, &slice.entropy, pressure).map_err(outside)?;
        let at_edge = |_| outside("within its bracket of the edge of");
        let other = Response::of(&self.polynomial, &slice.energy, &slice.entropy, pressure)
            .map_err(at_edge)?;
        let residual = self.birch.residual(&slice.energy);
        let mut width = central.distance(&other);
        for k in 0..self.members.len() {
            let (mut energy, mut entropy) = (slice.energy.clone(), slice.entropy.clone());
            energy[k] += slice.half_width[k] + residual;
            entropy[k] -= slice.half_width_slope[k];
            let shifted =
                Response::of(&self.birch, &energy, &entropy, pressure).map_err(at_edge)?;
            width = width.plus(&central.distance(&shifted));
        }
        let volume = central.volume;
        let heat_capacity_v = self.birch.value(&slice.heat_capacity, volume);
        let gap = central.expansion.powi(2) * central.stiffness * volume * temperature_k;
        let bracketed = |of: fn(&Response) -> f64, unit: f64| Bracketed {
            central: of(&central) / unit,
            half_width: of(&width) / unit,
        };
        Ok(Equilibrium {
            temperature_k,
            pressure_gpa,
            gibbs_kj_per_mol: bracketed(|r| r.gibbs, 1.0),
            volume_ang3: bracketed(|r| r.volume, 1.0),
            bulk_modulus_gpa: bracketed(|r| r.stiffness, GPA_ANG3_TO_KJ_PER_MOL),
            expansion_per_k: bracketed(|r| r.expansion, 1.0),
            entropy_j_per_mol_k: 1e3 * self.birch.value(&slice.entropy, volume),
            heat_capacity_v_j_per_mol_k: 1e3 * heat_capacity_v,
            heat_capacity_p_j_per_mol_k: 1e3 * (heat_capacity_v + gap),
            fit_residual_kj_per_mol: residual,
        })
    }

    fn slice(&self, temperature_k: f64) -> Result<Slice, VolumeSeriesError> {
        let mut slice = Slice {
            energy: Vec::new(),
            entropy: Vec::new(),
            heat_capacity: Vec::new(),
            half_width: Vec::new(),
            half_width_slope: Vec::new(),
        };
        let grids = || {
            self.members
                .iter()
                .map(|member| member.curve.temperatures_k())
        };
        let first_k = grids()
            .filter_map(<[f64]>::first)
            .fold(0.0_f64, |m, x| m.max(*x));
        let last_k = grids()
            .filter_map(<[f64]>::last)
            .fold(f64::INFINITY, |m, x| m.min(*x));
        let outside = || VolumeSeriesError::TemperatureOutside {
            temperature_k,
            first_k,
            last_k,
        };
        for member in &self.members {
            let free_energy = member
                .curve
                .free_energy(temperature_k)
                .map_err(|_| outside())?;
            let entropy = member.curve.entropy(temperature_k).map_err(|_| outside())?;
            slice.energy.push(member.static_kj_per_mol + free_energy);
            slice.entropy.push(entropy);
            let (heat_capacity, _) = member.between(&member.heat_capacity, temperature_k);
            slice.heat_capacity.push(heat_capacity);
            let (half_width, slope) = member.between(&member.half_width, temperature_k);
            slice.half_width.push(half_width);
            slice.half_width_slope.push(slope);
        }
        Ok(slice)
    }
}

impl Member {
    fn new(point: &VolumePoint) -> Result<Self, String> {
        if !(point.volume_ang3.is_finite() && point.volume_ang3 > 0.0) {
            return Err(format!("has no volume ({} Å³)", point.volume_ang3));
        }
        if !point.static_kj_per_mol.is_finite() {
            return Err("has no static energy".to_owned());
        }
        if let Some(undefined) = point.free_energy.iter().find(|f| !f.defined) {
            return Err(format!(
                "has no harmonic free energy at {} K: soft modes that may be physical",
                undefined.temperature_k
            ));
        }
        let all =
            |of: fn(&FreeEnergy) -> f64| point.free_energy.iter().map(of).collect::<Vec<f64>>();
        let curve = FreeEnergyCurve::new(
            all(|f| f.temperature_k),
            all(|f| f.central_kj_per_mol),
            all(|f| 1e-3 * f.entropy_j_per_mol_k),
        )
        .map_err(|_| "has no free-energy curve".to_owned())?;
        let half = |f: &FreeEnergy| {
            (f.upper_kj_per_mol - f.central_kj_per_mol)
                .max(f.central_kj_per_mol - f.lower_kj_per_mol)
        };
        Ok(Self {
            static_kj_per_mol: point.static_kj_per_mol,
            curve,
            heat_capacity: all(|f| 1e-3 * f.heat_capacity_j_per_mol_k),
            half_width: all(half),
        })
    }

    /// Value and slope between the grid points, linear.
    fn between(&self, values: &[f64], temperature_k: f64) -> (f64, f64) {
        let grid = self.curve.temperatures_k();
        let above = grid
            .partition_point(|t| *t < temperature_k - SAME_TEMPERATURE_K)
            .clamp(1, grid.len().saturating_sub(1).max(1));
        let (Some(&t0), Some(&t1)) = (grid.get(above - 1), grid.get(above)) else {
            return (f64::NAN, f64::NAN);
        };
        let (Some(&v0), Some(&v1)) = (values.get(above - 1), values.get(above)) else {
            return (f64::NAN, f64::NAN);
        };
        let slope = (v1 - v0) / (t1 - t0);
        (v0 + slope * (temperature_k - t0), slope)
    }
}

/// What one fit answers, in kJ/mol, Å³ and K; also the widths of the answers.
#[derive(Debug, Clone, Copy)]
struct Response {
    gibbs: f64,
    volume: f64,
    stiffness: f64,
    expansion: f64,
}

impl Response {
    fn of(fit: &Fit, energy: &[f64], entropy: &[f64], pressure: f64) -> Result<Self, &'static str> {
        match fit.minimum(energy, pressure) {
            Minimum::Inside(volume) => {
                let curvature = fit.second(energy, volume);
                Ok(Self {
                    gibbs: fit.value(energy, volume) + pressure * volume,
                    volume,
                    stiffness: volume * curvature,
                    expansion: fit.first(entropy, volume) / (volume * curvature),
                })
            }
            Minimum::Below => Err("below"),
            Minimum::Above => Err("above"),
        }
    }

    fn distance(&self, other: &Self) -> Self {
        Self {
            gibbs: (self.gibbs - other.gibbs).abs(),
            volume: (self.volume - other.volume).abs(),
            stiffness: (self.stiffness - other.stiffness).abs(),
            expansion: (self.expansion - other.expansion).abs(),
        }
    }

    fn plus(&self, other: &Self) -> Self {
        Self {
            gibbs: self.gibbs + other.gibbs,
            volume: self.volume + other.volume,
            stiffness: self.stiffness + other.stiffness,
            expansion: self.expansion + other.expansion,
        }
    }
}

#[cfg(test)]
mod tests;
