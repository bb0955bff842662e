//! The packages of the scenario: which form, in which supercell, disturbed how, and declared as what.

use nalgebra::Vector3;
use tarehouse_assay::Submission;
use tarehouse_assay::submission::{
    CellProtocol, Claims, Component, Declaration, Differences, Displaced, Energy, Identity,
    LevelParts, LongRange, MethodKind, Scheme, Settings,
};
use tarehouse_physics::force_constants::{FirstIndex, ForceConstantUnit};
use tarehouse_physics::units::EV_PER_ANG3_TO_GPA;
use tarehouse_physics::{ForceConstants, Supercell};

use crate::ModelError;
use crate::constants::RealSpaceConstants;
use crate::forms::{self, Form};
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
/// Claims are rounded to this, eV: far below what matters, far above what differs between machines.
const CLAIM_ROUNDING: f64 = 1e-9;

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

    /// The exact crystal, its exact constants, and those constants folded and disturbed, as written, before any unit.
    ///
    /// # Errors
    /// [`ModelError`].
    pub fn parts(
        &self,
    ) -> Result<(MolecularCrystal, RealSpaceConstants, ForceConstants), ModelError> {
        let model = self.form.crystal()?;
        let exact = RealSpaceConstants::of(&model)?;
        let supercell = diagonal_supercell(self.supercell)?;
        let mut constants = exact.folded(&supercell)?;
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
        let (model, exact, written) = self.parts()?;
        let scale = self.declared_unit.in_ev_per_ang2();
        let blocks = written.blocks().iter().map(|block| block * scale).collect();
        let constants =
            ForceConstants::from_blocks(written.supercell().clone(), model.atom_count(), blocks)
                .map_err(|error| ModelError::Constants(error.to_string()))?;
        let mut submission = Submission {
            package_digest: [0; 32],
            identity: self.identity(&model),
            components: vec![component(&model)],
            crystal: exact.crystal().clone(),
            masses_declared: false,
            cell_protocol: CellProtocol::Relaxed,
            cell_temperature_k: None,
            constants,
            declaration: self.declaration(),
            energy: Energy {
                lattice_energy_ev: model.energy_ev(),
                level: None,
                conformational_correction_ev: 0.0,
            },
            dielectric: None,
            claims: if self.claims {
                claims(&exact)?
            } else {
                Claims::default()
            },
            settings: self.settings(&model),
        };
        let package = Package::seal(self.name, &mut submission);
        Ok((submission, package))
    }

    fn identity(&self, model: &MolecularCrystal) -> Identity {
        Identity {
            compound: model.compound().name().to_owned(),
            formula: model.compound().formula(),
            form: self.form.label.to_owned(),
            formula_units: u32::try_from(model.molecule_count()).unwrap_or(u32::MAX),
            contributor_key: Some(format!("demo/{}", self.name)),
            note: "Demonstration data: the compound and its potential are invented.".to_owned(),
        }
    }

    fn declaration(&self) -> Declaration {
        Declaration {
            unit: self.declared_unit,
            first_index: FirstIndex::Displaced,
            displaced: Displaced::All,
            raw: true,
            enforced: Vec::new(),
            long_range: LongRange::Included,
        }
    }

    fn settings(&self, model: &MolecularCrystal) -> Settings {
        let forces = model.forces();
        let square: f64 = forces.iter().map(Vector3::norm_squared).sum();
        let largest = forces.iter().map(Vector3::norm).fold(0.0, f64::max);
        let part = |text: &str| Some(text.to_owned());
        Settings {
            kind: Some(MethodKind::ForceField),
            program: part("make-demo 0.1"),
            level: LevelParts {
                functional: part(model.compound().potential_name()),
                dispersion: part("in the potential"),
                basis: part("none"),
                pseudopotentials: part("none"),
            },
            model_digest: Some(model.compound().model_digest()),
            float_bits: Some(self.precision.0),
            force_residual_rms_ev_per_angstrom: Some((square / forces.len() as f64).sqrt()),
            force_residual_max_ev_per_angstrom: Some(largest),
            stress_gpa: Some(model.stress_ev_per_ang3() * EV_PER_ANG3_TO_GPA),
            scheme: Some(Scheme::FiniteDisplacement),
            differences: Some(Differences::Central),
            displacement_angstrom: Some(self.precision.1),
            ..Settings::default()
        }
    }
}

/// All packages of the scenario.
pub fn entries() -> Vec<Entry> {
    use forms::{
        DROSMELIDE_I, DROSMELIDE_II, DROSMELIDE_III, DROSMELIDE_IV, DROSMELIDE_V, PELQUONOL_ALPHA,
        PELQUONOL_BETA,
    };
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

fn component(model: &MolecularCrystal) -> Component {
    Component {
        name: model.compound().name().to_owned(),
        formula: model.compound().formula(),
        count: 1,
        charge: 0,
        inchi: None,
    }
}

/// Zero-point and free energies from the exact dynamical matrix, eV per cell.
fn claims(exact: &RealSpaceConstants) -> Result<Claims, ModelError> {
    let reciprocal = exact.crystal().reciprocal();
    let mesh = Mesh::with_spacing(&reciprocal, CLAIM_SPACING, [1; 3], true);
    let spectrum = Spectrum::exact(exact, &mesh)?;
    let rounded = |energy: f64| (energy / CLAIM_ROUNDING).round() * CLAIM_ROUNDING;
    // Multiplying back leaves digits behind the ninth; a parsed decimal does not.
    let tidy = |energy: f64| format!("{:.9}", rounded(energy)).parse().unwrap_or(energy);
    Ok(Claims {
        zero_point_energy_ev: Some(tidy(spectrum.free_energy_ev(0.0))),
        free_energy_ev: CLAIM_TEMPERATURES
            .iter()
            .map(|&t| (t, tidy(spectrum.free_energy_ev(t))))
            .collect(),
    })
}
