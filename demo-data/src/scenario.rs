//! The packages of the scenario: which form, in which supercell, disturbed how, and declared as what.

use tarehouse_assay::Submission;
use tarehouse_physics::force_constants::ForceConstantUnit;
use tarehouse_physics::{ForceConstants, Supercell};

use crate::ModelError;
use crate::constants::RealSpaceConstants;
use crate::contribution::{Contribution, claims};
use crate::forms::{
    DROSMELIDE_I, DROSMELIDE_II, DROSMELIDE_III, DROSMELIDE_IV, DROSMELIDE_V, Form,
    PELQUONOL_ALPHA, PELQUONOL_BETA,
};
use crate::harmonic::{Mesh, Spectrum};
use crate::molecular_crystal::MolecularCrystal;
use crate::noise::Disturbance;
use crate::package::Package;

/// Standard deviation of the errors of a careful contributor, eV/Å².
pub const CAREFUL_SIGMA: f64 = 2e-5;
/// Spacing of the half-shifted mesh behind the claims, Å⁻¹: finer than any the service uses.
const CLAIM_SPACING: f64 = 0.1;
/// Temperatures of the claims, K.
const CLAIM_TEMPERATURES: [f64; 2] = [300.0, 500.0];

/// One package of the scenario.
#[derive(Debug, Clone, PartialEq)]
pub struct Entry {
    /// Name of its folder.
    pub name: &'static str,
    /// The form.
    pub form: Form,
    /// Diagonal of the supercell matrix.
    pub supercell: [i64; 3],
    /// What happened to the constants, in this order.
    pub disturbances: Vec<Disturbance>,
    /// Seed of every draw.
    pub seed: u64,
    /// Unit declared.
    pub declared_unit: ForceConstantUnit,
    /// Floating-point width and displacement (Å) declared.
    pub precision: (u32, f64),
    /// Whether it claims free energies.
    pub claims: bool,
}

impl Entry {
    fn careful(name: &'static str, form: Form, supercell: [i64; 3], seed: u64) -> Self {
        let sigma = CAREFUL_SIGMA;
        Self {
            name,
            form,
            supercell,
            disturbances: vec![Disturbance::White { sigma }],
            seed,
            declared_unit: ForceConstantUnit::EvPerAngstrom2,
            precision: (64, 0.01),
            claims: false,
        }
    }

    fn with_claims(self) -> Self {
        Self {
            claims: true,
            ..self
        }
    }

    /// The crystal, its exact constants, and those constants folded and disturbed, in eV/Å².
    ///
    /// # Errors
    /// [`ModelError`].
    pub fn parts(
        &self,
    ) -> Result<(MolecularCrystal, RealSpaceConstants, ForceConstants), ModelError> {
        let model = self.form.crystal()?;
        let exact = RealSpaceConstants::of(&model)?;
        let mut constants = exact.folded(&diagonal_supercell(self.supercell)?)?;
        for disturbance in &self.disturbances {
            constants = disturbance.apply(exact.crystal(), &constants, self.seed)?;
        }
        Ok((model, exact, constants))
    }

    /// The submission that the package decodes to, and the package.
    ///
    /// # Errors
    /// [`ModelError`].
    pub fn build(&self) -> Result<(Submission, Package), ModelError> {
        let (model, exact, constants) = self.parts()?;
        let mut contribution = Contribution::new(self.name, self.form.label, model, constants);
        contribution.declared_unit = self.declared_unit;
        (contribution.float_bits, contribution.displacement_angstrom) = self.precision;
        if self.claims {
            let reciprocal = exact.crystal().reciprocal();
            let mesh = Mesh::with_spacing(&reciprocal, CLAIM_SPACING, [1; 3], true);
            let spectrum = Spectrum::exact(&exact, &mesh)?;
            contribution.claims = claims(&spectrum, &CLAIM_TEMPERATURES);
        }
        contribution.seal()
    }
}

/// All packages of the scenario.
pub fn entries() -> Vec<Entry> {
    let alpha = Entry::careful("pelquonol-alpha", PELQUONOL_ALPHA, [2, 2, 2], 106);
    let beta = Entry::careful("pelquonol-beta", PELQUONOL_BETA, [2, 3, 3], 107);
    vec![
        Entry::careful("drosmelide-i", DROSMELIDE_I, [2, 2, 2], 101).with_claims(),
        Entry::careful("drosmelide-ii", DROSMELIDE_II, [3, 2, 2], 102).with_claims(),
        Entry::careful("drosmelide-iii", DROSMELIDE_III, [2, 2, 2], 103),
        Entry {
            disturbances: vec![Disturbance::White { sigma: 2e-3 }],
            precision: (32, 0.001),
            ..Entry::careful("drosmelide-ii-noisy", DROSMELIDE_II, [2, 2, 2], 104)
        },
        Entry::careful("drosmelide-iv-thin", DROSMELIDE_IV, [1, 1, 1], 105).with_claims(),
        Entry::careful("drosmelide-v-unstable", DROSMELIDE_V, [2, 2, 2], 108),
        alpha.clone().with_claims(),
        Entry {
            name: "pelquonol-alpha-unit",
            declared_unit: ForceConstantUnit::HartreePerBohr2,
            seed: 109,
            ..alpha
        },
        Entry {
            disturbances: vec![Disturbance::White { sigma: 3e-4 }],
            precision: (64, 0.002),
            ..beta.clone()
        },
        Entry {
            name: "pelquonol-beta-erased",
            disturbances: vec![
                Disturbance::White { sigma: 1e-3 },
                Disturbance::PairSymmetryEnforced,
                Disturbance::TranslationSumEnforced,
            ],
            seed: 110,
            ..beta
        },
    ]
}

/// A supercell from the diagonal of its matrix.
///
/// # Errors
/// [`ModelError::Constants`].
pub fn diagonal_supercell(diagonal: [i64; 3]) -> Result<Supercell, ModelError> {
    let [x, y, z] = diagonal;
    Supercell::with_default_translations([[x, 0, 0], [0, y, 0], [0, 0, z]])
        .map_err(|errors| ModelError::Constants(format!("{errors:?}")))
}
