//! The result of one examination: findings, soft-mode tags, curves and the verdict.
//!
//! A report is a pure function of package, policy and program version. It holds no times and no ids.
//! Energies per formula unit in kJ/mol, wavenumbers in cm⁻¹ (negative = imaginary), q in fractional reciprocal
//! coordinates.

use crate::submission::Digest;

/// Everything one examination found.
#[derive(Debug, Clone, PartialEq)]
pub struct Report {
    /// Version of the program that made it.
    pub program_version: String,
    /// BLAKE3 of the policy text.
    pub policy_digest: Digest,
    /// Digest of the package.
    pub package_digest: Digest,
    /// What follows for the submission.
    pub verdict: Verdict,
    /// Why, one sentence per reason, worst first; empty for a clean accept.
    pub verdict_reasons: Vec<String>,
    /// One entry per check and place, in the fixed order of the rules.
    pub findings: Vec<Finding>,
    /// What the upload says about its own noise.
    pub noise: Noise,
    /// Clusters of soft modes.
    pub soft_modes: Vec<SoftMode>,
    /// The q-mesh used.
    pub mesh: Mesh,
    /// Facts about the crystal, as found.
    pub crystal: CrystalFacts,
    /// Zero-point energy, kJ/mol per formula unit.
    pub zero_point_energy_kj_per_mol: f64,
    /// Free energy at each temperature of the policy's grid.
    pub free_energy: Vec<FreeEnergy>,
    /// What the bracket at the judged temperature is made of; absent where there is no free energy.
    pub bracket_parts: Option<BracketParts>,
    /// Joint draws of the free energy: each one F for every temperature of the grid, kJ/mol per formula unit. They keep the
    /// correlation in temperature; numerical noise only. Empty where there is no free energy.
    pub free_energy_draws: Vec<Vec<f64>>,
    /// What to do next, largest effect on the bracket first.
    pub remedies: Vec<Remedy>,
    /// Curves for drawing.
    pub curves: Curves,
    /// Lowest branch at each inequivalent commensurate point; empty in reports of older programs.
    pub lowest_branches: Vec<LowestBranch>,
}

/// The lowest branch at one commensurate wave vector, the rigid translations at Γ left out.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct LowestBranch {
    /// Wave vector.
    pub q: [f64; 3],
    /// Wavenumber with projected constants, cm⁻¹.
    pub wavenumber_per_cm: f64,
    /// Lower end of its bracket: the upload's noise, cm⁻¹.
    pub lower_per_cm: f64,
    /// Upper end.
    pub upper_per_cm: f64,
}

/// What an examination concludes.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord)]
pub enum Verdict {
    /// Stored and ranked.
    Accept,
    /// Waits for a curator.
    Hold,
    /// Turned down.
    Reject,
}

/// How serious a finding is.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord)]
pub enum Severity {
    /// Within the policy.
    Pass,
    /// Usable, with care.
    Caution,
    /// Not usable.
    Fail,
}

/// One check's result.
#[derive(Debug, Clone, PartialEq)]
pub struct Finding {
    /// Which check.
    pub rule: Rule,
    /// How serious.
    pub severity: Severity,
    /// What was measured, in `unit`; none where a check has no number.
    pub measured: Option<f64>,
    /// The policy's limit that `measured` was held against, in `unit`.
    pub limit: Option<f64>,
    /// Unit of both; empty for a pure number.
    pub unit: String,
    /// Where: atoms, wave vector, key of the package.
    pub location: String,
    /// The likeliest cause.
    pub likely_cause: LikelyCause,
    /// What was found, in words.
    pub message: String,
    /// What the contributor should do next; empty where nothing is to be done.
    pub remedy: String,
}

macro_rules! named_enum {
    ($(#[$meta:meta])* $name:ident { $($(#[$vmeta:meta])* $variant:ident = $text:literal,)+ }) => {
        $(#[$meta])*
        #[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Hash)]
        pub enum $name { $($(#[$vmeta])* $variant,)+ }

        impl $name {
            /// All of them, in the order of the contract; entries are only ever appended.
            pub const ALL: &'static [Self] = &[$(Self::$variant,)+];

            /// The name that scripts see.
            pub fn name(self) -> &'static str {
                match self { $(Self::$variant => $text,)+ }
            }
        }
    };
}

named_enum! {
    /// The checks.
    Rule {
        /// Atoms nearer than any bond.
        AtomOverlap = "atom-overlap",
        /// Molecules found from bonds are whole and finite.
        MoleculeIntegrity = "molecule-integrity",
        /// Formula and formula units against the cell.
        Formula = "formula",
        /// Declared components against the bond graph.
        Components = "components",
        /// Density within the plausible range.
        Density = "density",
        /// Masses against the elements.
        Masses = "masses",
        /// Space group found.
        SpaceGroup = "space-group",
        /// Size of bonded longitudinal constants.
        BondStiffness = "bond-stiffness",
        /// Sign and size of the self blocks.
        SelfConstants = "self-constants",
        /// Strong constants sit at short distances.
        Locality = "locality",
        /// Zeroed or duplicated blocks.
        BlockPattern = "block-pattern",
        /// Φ[l,i,j] against Φ[−l,j,i]ᵀ.
        PairSymmetry = "pair-symmetry",
        /// Sum over displaced atoms.
        TranslationSumDisplaced = "translation-sum-displaced",
        /// Sum over response atoms.
        TranslationSumResponse = "translation-sum-response",
        /// Born–Huang rotation sum.
        RotationSum = "rotation-sum",
        /// Space-group average.
        SpaceGroupResidual = "space-group-residual",
        /// Evidence removed before submission.
        Enforced = "enforced-before-submission",
        /// Rigid translations at Γ, raw constants.
        AcousticRaw = "acoustic-raw",
        /// Rigid translations at Γ, projected constants.
        AcousticProjected = "acoustic-projected",
        /// How far projection moved the constants.
        ProjectionShift = "projection-shift",
        /// Sound velocities.
        SoundVelocity = "sound-velocity",
        /// Positive long-wave stiffness in every direction.
        ElasticStability = "elastic-stability",
        /// Decay of the constants inside the supercell.
        Reach = "reach",
        /// Supercell against molecules and contacts.
        SupercellSize = "supercell-size",
        /// Lowest branches under truncation.
        Truncation = "truncation",
        /// Kind of method declared.
        SettingKind = "setting-kind",
        /// SCF tolerance.
        SettingScf = "setting-scf-tolerance",
        /// Density grid.
        SettingDensityGrid = "setting-density-grid",
        /// Residual force.
        SettingResidualForce = "setting-residual-force",
        /// Difference scheme.
        SettingDifferences = "setting-differences",
        /// Displacement length.
        SettingDisplacement = "setting-displacement",
        /// Floating-point width.
        SettingFloatBits = "setting-float-bits",
        /// Electronic sampling.
        SettingKSpacing = "setting-k-spacing",
        /// Level of theory declared.
        SettingLevel = "setting-level",
        /// Digest of a potential declared.
        SettingModelDigest = "setting-model-digest",
        /// Residual stress.
        SettingStress = "setting-residual-stress",
        /// Claimed zero-point energy.
        ClaimZeroPoint = "claim-zero-point",
        /// Claimed free energy.
        ClaimFreeEnergy = "claim-free-energy",
        /// Effective charges, permittivity, dipole–dipole part.
        LongRange = "long-range",
        /// Soft modes.
        SoftModes = "soft-modes",
        /// Width of the bracket.
        BracketWidth = "bracket-width",
        /// The examination did not finish.
        ExaminationFailed = "examination-failed",
        /// Effective charges sum to zero.
        ChargeNeutrality = "charge-neutrality",
    }
}

named_enum! {
    /// Likely causes; the contract's list, only ever appended to.
    LikelyCause {
        /// Nothing is wrong.
        None = "none",
        /// Unit declared other than the unit used.
        WrongUnit = "wrong-unit",
        /// Index order declared wrongly, or translations negated.
        SwappedIndexOrder = "swapped-index-order",
        /// Cartesian axes permuted between structure and constants.
        PermutedAxes = "permuted-axes",
        /// Atom order differs between structure and constants.
        PermutedAtoms = "permuted-atoms",
        /// Masses do not fit the elements.
        WrongMasses = "wrong-masses",
        /// Sign of the constants.
        SignError = "sign-error",
        /// A block of zeros.
        ZeroedBlock = "zeroed-block",
        /// A block that stands twice.
        DuplicatedBlock = "duplicated-block",
        /// Supercell matrix or translations.
        WrongSupercell = "wrong-supercell",
        /// Wrong structure file.
        WrongStructure = "wrong-structure",
        /// Noise of the self-consistent field.
        ScfNoise = "scf-noise",
        /// Forces written with few decimals.
        RoundedForces = "rounded-forces",
        /// Third- and higher-order terms in the difference quotient.
        DifferenceTruncation = "difference-truncation",
        /// The supercell is too small.
        SmallSupercell = "small-supercell",
        /// Geometry not relaxed.
        UnrelaxedGeometry = "unrelaxed-geometry",
        /// Conditions enforced before submission.
        EvidenceErased = "evidence-erased",
        /// A setting was not declared.
        MissingSetting = "missing-setting",
        /// A setting is outside the policy.
        LooseSetting = "loose-setting",
        /// A true instability of the harmonic crystal.
        Instability = "instability",
        /// Treatment differs from the contributor's.
        DifferentTreatment = "different-treatment",
        /// Not known.
        Unknown = "unknown",
    }
}

/// What the upload says about its own noise.
#[allow(
    clippy::struct_excessive_bools,
    reason = "independent signatures, each a field of the contract"
)]
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Noise {
    /// Standard deviation of one constant, eV/Å².
    pub sigma_ev_per_ang2: f64,
    /// `sigma` is an upper bound only.
    pub bound_only: bool,
    /// Families whose evidence is gone.
    pub erased: Vec<String>,
    /// The constants look cut off at a distance.
    pub truncated: bool,
    /// The self block was set to minus the row sum.
    pub self_fixed: bool,
    /// Only inequivalent atoms were displaced.
    pub symmetry_expanded: bool,
    /// Values are multiples of one quantum.
    pub rounded: bool,
}

/// Tag of a soft-mode cluster: evidence, not proof.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Tag {
    /// An artefact of the upload.
    Numerical,
    /// Possibly a property of the crystal.
    PossiblyPhysical,
}

/// Strength of a tag.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Strength {
    /// The evidence is direct.
    Strong,
    /// The evidence is indirect.
    Weak,
}

/// A cluster of soft modes on the mesh.
#[derive(Debug, Clone, PartialEq)]
pub struct SoftMode {
    /// Tag.
    pub tag: Tag,
    /// Strength of the tag.
    pub strength: Strength,
    /// Lowest wavenumber, projected constants, cm⁻¹.
    pub lowest_wavenumber_per_cm: f64,
    /// Lowest wavenumber at the same q, raw constants, cm⁻¹.
    pub raw_wavenumber_per_cm: f64,
    /// Wave vector of the lowest point.
    pub q: [f64; 3],
    /// Number of mesh points in the cluster.
    pub point_count: u32,
    /// Whether the cluster holds a commensurate point.
    pub commensurate: bool,
    /// (λ − μ)/s of the lowest point, where noise was measured.
    pub z: Option<f64>,
    /// Alias scale over |λ|, of the lowest point.
    pub alias_share: Option<f64>,
    /// Share of rigid-molecule motion, 0 to 1.
    pub external_fraction: f64,
    /// Overlap with the rigid translations of the crystal, 0 to 1.
    pub acoustic_overlap: f64,
    /// Participation number over the number of atoms, 0 to 1.
    pub participation: f64,
    /// Lowest wavenumber after dropping constants below each of the policy's fractions.
    pub truncation_changes: Vec<TruncationChange>,
    /// An instability weaker than this cannot be excluded, cm⁻¹.
    pub exclusion_limit_per_cm: Option<f64>,
    /// Why this tag, in words.
    pub reason: String,
}

/// The lowest wavenumber of a cluster with small constants dropped.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct TruncationChange {
    /// Constants below this fraction of the largest were dropped.
    pub fraction: f64,
    /// Wavenumber then, cm⁻¹.
    pub wavenumber_per_cm: f64,
}

/// The standard q-mesh.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Mesh {
    /// Divisions along each reciprocal axis.
    pub divisions: [u32; 3],
    /// Number of points.
    pub point_count: u32,
    /// Number of points after reduction.
    pub irreducible_count: u32,
}

/// Facts about the crystal, as found by the examination.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct CrystalFacts {
    /// Space-group number, International Tables A.
    pub space_group_number: u32,
    /// Hermann–Mauguin symbol.
    pub space_group_symbol: String,
    /// Volume per formula unit, Å³.
    pub volume_per_formula_unit_ang3: f64,
    /// Density, g/cm³.
    pub density_g_per_cm3: f64,
    /// Molecules in the cell.
    pub molecule_count: u32,
    /// Slowest and fastest sound velocity, m/s; absent where the long-wave limit is unstable.
    pub sound_velocity_min_m_per_s: Option<f64>,
    /// Fastest.
    pub sound_velocity_max_m_per_s: Option<f64>,
    /// Norm of the change made by projection over the norm of the constants.
    pub projection_relative_norm: f64,
    /// Largest element of that change, eV/Å².
    pub projection_largest_ev_per_ang2: f64,
    /// Change of F(300 K) by projection, kJ/mol per formula unit; absent where raw modes are soft.
    pub projection_free_energy_kj_per_mol: Option<f64>,
    /// Static lattice energy, kJ/mol per formula unit.
    pub lattice_energy_kj_per_mol: f64,
    /// Optical modes at Γ by direction, along a*, b* and c*; empty where no dipole–dipole part is set apart.
    pub polar_modes: Vec<PolarModes>,
    /// −(1/V) dV/dp from the relaxed long-wave elastic constants, 1/GPa; absent where these are not positive definite,
    /// and in reports of older programs.
    pub compressibility_per_gpa: Option<f64>,
}

/// Optical modes at Γ of a polar crystal, reached along one direction: longitudinal and transverse ones split.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct PolarModes {
    /// Direction, fractional reciprocal coordinates.
    pub direction: [f64; 3],
    /// The 3n − 3 wavenumbers, ascending, cm⁻¹.
    pub wavenumbers_per_cm: Vec<f64>,
}

/// Free energy at one temperature.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct FreeEnergy {
    /// Temperature, K.
    pub temperature_k: f64,
    /// False where a possibly physical cluster leaves no harmonic free energy; the numbers are then zero.
    pub defined: bool,
    /// Vibrational free energy, kJ/mol per formula unit.
    pub central_kj_per_mol: f64,
    /// Lower end of the bracket.
    pub lower_kj_per_mol: f64,
    /// Upper end of the bracket.
    pub upper_kj_per_mol: f64,
    /// Vibrational internal energy, kJ/mol per formula unit.
    pub internal_energy_kj_per_mol: f64,
    /// Entropy, J/mol/K per formula unit.
    pub entropy_j_per_mol_k: f64,
    /// Heat capacity at constant volume, J/mol/K per formula unit.
    pub heat_capacity_j_per_mol_k: f64,
}

/// What the half width of a bracket is made of, kJ/mol per formula unit.
#[derive(Debug, Clone, Copy, PartialEq, Default)]
pub struct BracketParts {
    /// Spread of the noise draws.
    pub noise_kj_per_mol: f64,
    /// Half the bias of the noise draws.
    pub bias_kj_per_mol: f64,
    /// Aliasing of the supercell.
    pub alias_kj_per_mol: f64,
    /// Residual force.
    pub residual_force_kj_per_mol: f64,
    /// The policy's floor.
    pub floor_kj_per_mol: f64,
}

impl BracketParts {
    /// The half width: the sum of the parts.
    pub fn half_width_kj_per_mol(&self) -> f64 {
        self.noise_kj_per_mol
            + self.bias_kj_per_mol
            + self.alias_kj_per_mol
            + self.residual_force_kj_per_mol
            + self.floor_kj_per_mol
    }
}

/// One thing to do next.
#[derive(Debug, Clone, PartialEq)]
pub struct Remedy {
    /// The setting that is the likely limit, as in the package format.
    pub setting: String,
    /// What to try.
    pub advice: String,
    /// How much of the bracket's half width it can take away, kJ/mol per formula unit; absent where it is not a matter
    /// of width.
    pub effect_kj_per_mol: Option<f64>,
}

/// Curves for drawing.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Curves {
    /// Wavenumbers of the density of states, cm⁻¹.
    pub dos_wavenumber_per_cm: Vec<f64>,
    /// Modes per cm⁻¹ and formula unit.
    pub dos_total: Vec<f64>,
    /// Rigid-molecule part of it.
    pub dos_external: Vec<f64>,
    /// Distances of the decay curve, Å.
    pub reach_distance_ang: Vec<f64>,
    /// Largest |Φ| of the pairs in each distance bin, eV/Å².
    pub reach_largest_ev_per_ang2: Vec<f64>,
}
