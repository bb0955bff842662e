//! The policy: the file with every threshold. Its text is `deploy/policy.toml`, also built into the binary.

use serde::Deserialize;

use crate::submission::{Digest, MethodKind};

/// Text of the built-in policy.
pub const BUILT_IN_TEXT: &str = include_str!("../../../deploy/policy.toml");

/// Every threshold of the judgement, with the digest of the text it was read from.
#[derive(Debug, Clone, PartialEq)]
pub struct Policy {
    /// BLAKE3 of the text.
    pub digest: Digest,
    /// The text.
    pub text: String,
    /// The values.
    pub limits: Limits,
}

/// Values of the policy file; each is explained beside its value in `deploy/policy.toml`.
#[derive(Debug, Clone, PartialEq, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Limits {
    /// Temperatures of stored curves, K, ascending from 0.
    pub temperature_grid_k: Vec<f64>,
    /// Structure and symmetry.
    pub structure: StructureLimits,
    /// Blunders.
    pub blunders: BlunderLimits,
    /// Pair symmetry and sum rules.
    pub sums: SumLimits,
    /// Acoustic modes and sound.
    pub acoustic: AcousticLimits,
    /// Decay and truncation.
    pub reach: ReachLimits,
    /// Effective charges.
    pub charges: ChargeLimits,
    /// The q-mesh.
    pub mesh: MeshLimits,
    /// Soft modes.
    pub soft_modes: SoftModeLimits,
    /// The free-energy bracket.
    pub bracket: BracketLimits,
    /// Contributor's own values.
    pub claims: ClaimLimits,
    /// Curves for drawing.
    pub curves: CurveLimits,
    /// Settings, by kind of method.
    pub settings: SettingsLimits,
    /// Comparison of examinations; policies written before it existed get the values of [`ComparisonLimits::default`].
    #[serde(default)]
    pub comparison: ComparisonLimits,
}

/// `[comparison]`
#[derive(Debug, Clone, PartialEq, Deserialize)]
#[serde(deny_unknown_fields, default)]
pub struct ComparisonLimits {
    /// Largest p/B that the elastic term answers for, a share of the volume.
    pub compression_max: f64,
    /// Combined brackets wider than this to either side hide a change of F along a series, kJ/mol per formula unit.
    pub series_resolution_kj_per_mol: f64,
    /// The same for a lowest branch, cm⁻¹.
    pub series_resolution_per_cm: f64,
    /// Changes of a lowest branch below this are equal, cm⁻¹.
    pub series_floor_per_cm: f64,
}

impl Default for ComparisonLimits {
    fn default() -> Self {
        Self {
            compression_max: 0.03,
            series_resolution_kj_per_mol: 2.0,
            series_resolution_per_cm: 5.0,
            series_floor_per_cm: 0.1,
        }
    }
}

macro_rules! limits {
    ($(#[$meta:meta])* $name:ident { $($(#[$fmeta:meta])* $field:ident: $type:ty,)+ }) => {
        $(#[$meta])*
        #[derive(Debug, Clone, PartialEq, Deserialize)]
        #[serde(deny_unknown_fields)]
        pub struct $name { $($(#[$fmeta])* pub $field: $type,)+ }
    };
}

limits! {
    /// `[structure]`
    StructureLimits {
        /// Å.
        symmetry_tolerance_angstrom: f64,
        /// Å.
        tie_tolerance_angstrom: f64,
        /// Å.
        bond_tolerance_angstrom: f64,
        /// Of the sum of the covalent radii.
        overlap_caution_fraction: f64,
        /// Of the sum of the covalent radii.
        overlap_fail_fraction: f64,
        /// g/cm³, least and largest.
        density_caution_g_per_cm3: [f64; 2],
        /// g/cm³, least and largest.
        density_fail_g_per_cm3: [f64; 2],
        /// Declared against standard mass.
        mass_caution_relative: f64,
        /// Declared against standard mass.
        mass_fail_relative: f64,
    }
}

limits! {
    /// `[blunders]`
    BlunderLimits {
        /// eV/Å², least and largest.
        bond_constant_ev_per_ang2: [f64; 2],
        /// eV/Å², least and largest.
        bond_to_hydrogen_ev_per_ang2: [f64; 2],
        /// Cosine.
        bond_direction_cosine: f64,
        /// Share of bonds.
        bond_share_min: f64,
        /// Å.
        strong_block_distance_angstrom: f64,
        /// Share of atoms.
        strong_share_min: f64,
        /// Share.
        alternative_gain: f64,
        /// From −1 to 1.
        lean_max: f64,
        /// Å.
        moved_angstrom: f64,
    }
}

limits! {
    /// `[sums]`
    SumLimits {
        /// Relative to the largest self constant.
        pair_symmetry_caution: f64,
        /// Relative to the largest self constant.
        pair_symmetry_fail: f64,
        /// Relative to the largest self constant.
        translation_caution: f64,
        /// Relative to the largest self constant.
        translation_fail: f64,
        /// Relative to Σ|Φ||x|.
        rotation_caution: f64,
        /// Relative to the largest self constant.
        space_group_caution: f64,
        /// Relative to the largest self constant.
        space_group_fail: f64,
        /// Relative to the rms constant.
        erased_relative: f64,
    }
}

limits! {
    /// `[acoustic]`
    AcousticLimits {
        /// cm⁻¹.
        raw_caution_per_cm: f64,
        /// cm⁻¹.
        raw_fail_per_cm: f64,
        /// cm⁻¹.
        projected_caution_per_cm: f64,
        /// cm⁻¹.
        projected_fail_per_cm: f64,
        /// kJ/mol per formula unit.
        projection_caution_kj_per_mol: f64,
        /// m/s, least and largest.
        sound_velocity_m_per_s: [f64; 2],
        /// Of the mean of the three stiffnesses.
        stiffness_floor: f64,
    }
}

limits! {
    /// `[reach]`
    ReachLimits {
        /// Of the largest distance.
        outer_share: f64,
        /// Relative to the largest constant.
        decay_caution: f64,
        /// Relative to the largest constant.
        truncation_fractions: Vec<f64>,
        /// cm⁻¹.
        truncation_caution_per_cm: f64,
        /// Which of the fractions is judged.
        truncation_judged_fraction: f64,
    }
}

limits! {
    /// `[charges]`
    ChargeLimits {
        /// |Σ Z| over Σ |Z|.
        neutrality_caution: f64,
        /// |Σ Z| over Σ |Z|.
        neutrality_fail: f64,
    }
}

limits! {
    /// `[mesh]`
    MeshLimits {
        /// Å⁻¹, 2π included.
        spacing_per_angstrom: f64,
    }
}

limits! {
    /// `[soft_modes]`
    SoftModeLimits {
        /// cm⁻¹, negative.
        wavenumber_per_cm: f64,
        /// Standard deviations.
        significant_z: f64,
        /// Standard deviations.
        significant_z_rounded: f64,
        /// Number of noise draws.
        noise_draws: usize,
    }
}

limits! {
    /// `[bracket]`
    BracketLimits {
        /// Standard deviations.
        draw_multiple: f64,
        /// Of the alias difference.
        alias_multiple: f64,
        /// kJ/mol per eV/Å.
        residual_force_k0: f64,
        /// kJ/mol per eV/Å and K.
        residual_force_k1_per_k: f64,
        /// eV/Å.
        residual_force_undeclared_ev_per_angstrom: f64,
        /// kJ/mol per molecule.
        floor_kj_per_mol: f64,
        /// Of the half width.
        remedy_share: f64,
        /// Number of joint draws stored.
        joint_draws: usize,
        /// kJ/mol per formula unit.
        half_width_hold_kj_per_mol: f64,
        /// K.
        judged_temperature_k: f64,
    }
}

limits! {
    /// `[claims]`
    ClaimLimits {
        /// kJ/mol per formula unit.
        zero_point_caution_kj_per_mol: f64,
        /// kJ/mol per formula unit.
        free_energy_caution_kj_per_mol: f64,
    }
}

limits! {
    /// `[curves]`
    CurveLimits {
        /// cm⁻¹.
        dos_bin_per_cm: f64,
        /// Å.
        reach_bin_angstrom: f64,
    }
}

/// `[settings.*]`
#[derive(Debug, Clone, PartialEq, Deserialize)]
#[serde(deny_unknown_fields, rename_all = "kebab-case")]
pub struct SettingsLimits {
    /// Density-functional theory.
    pub dft: KindLimits,
    /// Wave-function theory.
    pub wavefunction: KindLimits,
    /// Tight binding.
    pub tight_binding: KindLimits,
    /// Machine-learned potentials.
    pub ml_potential: KindLimits,
    /// Force fields.
    pub force_field: KindLimits,
}

impl SettingsLimits {
    /// What is asked of one kind of method.
    pub fn of(&self, kind: MethodKind) -> &KindLimits {
        match kind {
            MethodKind::Dft => &self.dft,
            MethodKind::Wavefunction => &self.wavefunction,
            MethodKind::TightBinding => &self.tight_binding,
            MethodKind::MlPotential => &self.ml_potential,
            MethodKind::ForceField => &self.force_field,
        }
    }
}

/// What is asked of the settings of one kind of method; an absent limit is not asked.
#[derive(Debug, Clone, PartialEq, Default, Deserialize)]
#[serde(deny_unknown_fields, default)]
pub struct KindLimits {
    /// Keys of `[settings]` whose absence holds a submission.
    pub required: Vec<String>,
    /// eV per atom.
    pub scf_tolerance_caution_ev_per_atom: Option<f64>,
    /// Ratio.
    pub density_to_orbital_cutoff_min: Option<f64>,
    /// Å⁻¹, 2π included.
    pub k_spacing_caution_per_angstrom: Option<f64>,
    /// eV/Å, root mean square.
    pub force_residual_caution_ev_per_angstrom: Option<f64>,
    /// Å, least and largest.
    pub displacement_angstrom: Option<[f64; 2]>,
    /// GPa, largest element.
    pub stress_caution_gpa: Option<f64>,
    /// Bits.
    pub float_bits_min: Option<u32>,
    /// Whether the digest of a potential is asked for.
    pub model_digest_wanted: bool,
}

/// Why a policy could not be read.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
#[error("the policy could not be read: {detail}")]
pub struct PolicyError {
    /// What is wrong, with line and column.
    pub detail: String,
}

impl Policy {
    /// Reads a policy from its text.
    ///
    /// # Errors
    /// [`PolicyError`] with the place.
    pub fn parse(text: &str) -> Result<Self, PolicyError> {
        let limits: Limits = toml::from_str(text).map_err(|error| PolicyError {
            detail: error.to_string(),
        })?;
        limits.check()?;
        Ok(Self {
            digest: *blake3::hash(text.as_bytes()).as_bytes(),
            text: text.to_owned(),
            limits,
        })
    }

    /// The policy that is built into the binary.
    ///
    /// # Errors
    /// Never in a released binary: a test reads it.
    pub fn built_in() -> Result<Self, PolicyError> {
        Self::parse(BUILT_IN_TEXT)
    }
}

impl Limits {
    /// Conditions between values that a type cannot hold.
    fn check(&self) -> Result<(), PolicyError> {
        let grid = &self.temperature_grid_k;
        let rises = grid.windows(2).all(|pair| pair[0] < pair[1]);
        let judged = self.bracket.judged_temperature_k;
        let fault = if grid.first().is_none_or(|t| *t != 0.0) || !rises {
            "temperature_grid_k must rise from 0"
        } else if !grid.contains(&judged) {
            "bracket.judged_temperature_k must be on the temperature grid"
        } else if self.mesh.spacing_per_angstrom.is_nan() || self.mesh.spacing_per_angstrom <= 0.0 {
            "mesh.spacing_per_angstrom must be positive"
        } else if self.soft_modes.noise_draws < 2 {
            "soft_modes.noise_draws must be at least 2"
        } else if !(self.comparison.compression_max > 0.0 && self.comparison.compression_max < 1.0)
        {
            "comparison.compression_max must be between 0 and 1"
        } else {
            return Ok(());
        };
        Err(PolicyError {
            detail: fault.to_owned(),
        })
    }
}
