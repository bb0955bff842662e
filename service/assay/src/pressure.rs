//! What pressure adds to the free energy of a crystal whose constants are known at one volume only.
//!
//! G(T, p) = E + F(T) + pV − ½ p² V/B: the crystal is pressed as an elastic body with the compressibility 1/B of its relaxed
//! long-wave elastic constants. It holds for a few per cent of volume; beyond that the answer is a refusal that asks for
//! a volume series. Thermal expansion is not in it, nor any change of the vibrations with volume.

use tarehouse_physics::units::AVOGADRO_PER_MOL;

/// One GPa Å³ in kJ/mol (exact): 1e9 Pa · 1e-30 m³ · N_A · 1e-3.
pub const GPA_ANG3_TO_KJ_PER_MOL: f64 = AVOGADRO_PER_MOL * 1e-24;

/// Pressure derivative B′ that the neglected third-order term is judged with. Molecular crystals: 6 to 10, common knowledge.
const BULK_MODULUS_DERIVATIVE: f64 = 10.0;

/// Volume and stiffness of one crystal.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Compression {
    /// Volume per formula unit, Å³.
    pub volume_ang3: f64,
    /// −(1/V) dV/dp, 1/GPa; `None` where the elastic constants are not positive definite or not known.
    pub compressibility_per_gpa: Option<f64>,
}

/// What pressure adds, kJ/mol per formula unit.
#[derive(Debug, Clone, Copy, PartialEq, Default)]
pub struct PressureTerm {
    /// pV.
    pub volume_work_kj_per_mol: f64,
    /// −½ p² V/B.
    pub elastic_kj_per_mol: f64,
    /// Size of the next term, ⅙ (B′ + 1) p³ V/B²: widens the bracket.
    pub uncertainty_kj_per_mol: f64,
}

impl PressureTerm {
    /// pV − ½ p² V/B.
    pub fn sum_kj_per_mol(&self) -> f64 {
        self.volume_work_kj_per_mol + self.elastic_kj_per_mol
    }
}

/// Why one volume does not tell the free energy under pressure.
#[derive(Debug, Clone, Copy, PartialEq, thiserror::Error)]
pub enum PressureError {
    /// Not a pressure.
    #[error("{pressure_gpa} GPa is not a finite pressure from 0 on")]
    NotAPressure {
        /// Pressure asked for, GPa.
        pressure_gpa: f64,
    },
    /// No compressibility.
    #[error("its compressibility is not known, or it is not stable under stress")]
    NotElastic,
    /// The crystal would shrink too far.
    #[error(
        "{pressure_gpa} GPa would press it by {:.1} % of its volume, more than the {:.1} % that one volume answers for",
        100.0 * compression, 100.0 * limit
    )]
    BeyondRange {
        /// Pressure asked for, GPa.
        pressure_gpa: f64,
        /// p/B.
        compression: f64,
        /// Largest p/B answered for.
        limit: f64,
    },
}

impl Compression {
    /// What the pressure adds, for p/B up to `compression_max`. Zero pressure adds nothing and needs no compressibility.
    ///
    /// # Errors
    /// [`PressureError`].
    pub fn term(
        &self,
        pressure_gpa: f64,
        compression_max: f64,
    ) -> Result<PressureTerm, PressureError> {
        if !(pressure_gpa.is_finite() && pressure_gpa >= 0.0) {
            return Err(PressureError::NotAPressure { pressure_gpa });
        }
        if pressure_gpa <= 0.0 {
            return Ok(PressureTerm::default());
        }
        let compressibility = self
            .compressibility_per_gpa
            .filter(|x| x.is_finite() && *x > 0.0)
            .ok_or(PressureError::NotElastic)?;
        let compression = pressure_gpa * compressibility;
        if compression > compression_max {
            return Err(PressureError::BeyondRange {
                pressure_gpa,
                compression,
                limit: compression_max,
            });
        }
        let work = pressure_gpa * self.volume_ang3 * GPA_ANG3_TO_KJ_PER_MOL;
        Ok(PressureTerm {
            volume_work_kj_per_mol: work,
            elastic_kj_per_mol: -0.5 * compression * work,
            uncertainty_kj_per_mol: (BULK_MODULUS_DERIVATIVE + 1.0) / 6.0
                * compression.powi(2)
                * work,
        })
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// 3 %, the built-in policy's limit.
    const COMPRESSION_MAX: f64 = 0.03;

    const SOFT: Compression = Compression {
        volume_ang3: 150.0,
        compressibility_per_gpa: Some(1.0 / 8.0),
    };

    #[test]
    fn the_elastic_term_of_a_soft_crystal_has_the_size_of_the_design() {
        // physics.md: 0.06 kJ/mol at 0.1 GPa and 5.6 at 1 GPa for 150 Å³ and 8 GPa. By hand: 150/16 · 0.602214 = 5.6458.
        let far = SOFT.term(1.0, 1.0).unwrap();
        assert!((far.elastic_kj_per_mol + 5.64576).abs() < 1e-4, "{far:?}");
        assert!(
            (far.volume_work_kj_per_mol - 90.3321).abs() < 1e-3,
            "{far:?}"
        );
        let near = SOFT.term(0.1, COMPRESSION_MAX).unwrap();
        assert!(
            (near.elastic_kj_per_mol + 0.056_457_6).abs() < 1e-6,
            "{near:?}"
        );
        assert!((near.sum_kj_per_mol() - (9.03321 - 0.05646)).abs() < 1e-4);
    }

    #[test]
    fn a_murnaghan_crystal_lies_within_the_bracket_of_the_elastic_term() {
        // Murnaghan 1944: G(p) = ∫V dp = V₀ B/(B′−1) [(1 + B′p/B)^(1−1/B′) − 1].
        for derivative in [4.0_f64, 7.0, 10.0] {
            for pressure in [0.02, 0.1, 0.24] {
                let (v, b) = (150.0, 8.0);
                let power = 1.0 - 1.0 / derivative;
                let exact = v * b / (derivative - 1.0)
                    * ((1.0 + derivative * pressure / b).powf(power) - 1.0)
                    * GPA_ANG3_TO_KJ_PER_MOL;
                let term = SOFT.term(pressure, COMPRESSION_MAX).unwrap();
                let error = (term.sum_kj_per_mol() - exact).abs();
                assert!(
                    error <= term.uncertainty_kj_per_mol * 1.001,
                    "{error} {term:?}"
                );
                assert!(error > 0.1 * term.uncertainty_kj_per_mol);
            }
        }
    }

    #[test]
    fn beyond_its_range_and_without_stiffness_it_refuses() {
        assert!(SOFT.term(0.24, 0.03).is_ok());
        let refused = SOFT.term(0.2401, 0.03).unwrap_err();
        assert!(
            matches!(refused, PressureError::BeyondRange { compression, .. } if compression > 0.03)
        );
        assert!(refused.to_string().contains("3.0 %"), "{refused}");
        for compressibility_per_gpa in [None, Some(0.0), Some(f64::NAN)] {
            let unknown = Compression {
                volume_ang3: 150.0,
                compressibility_per_gpa,
            };
            assert_eq!(unknown.term(0.1, 0.03), Err(PressureError::NotElastic));
            assert_eq!(unknown.term(0.0, 0.03), Ok(PressureTerm::default()));
        }
        for pressure in [-0.1, f64::NAN, f64::INFINITY] {
            assert!(matches!(
                SOFT.term(pressure, 0.03),
                Err(PressureError::NotAPressure { .. })
            ));
        }
    }
}
