//! From constants to a submission: what a contributor would say about them.
//!
//! [`Contribution::new`] describes a careful contributor; change its fields for a careless or a dishonest one.

use nalgebra::Vector3;
use tarehouse_assay::Submission;
use tarehouse_assay::submission::{
    CellProtocol, Claims, Component, Declaration, Differences, Displaced, Energy, Enforced,
    Identity, LevelParts, LongRange, MethodKind, Scheme, Settings,
};
use tarehouse_physics::ForceConstants;
use tarehouse_physics::force_constants::{FirstIndex, ForceConstantUnit};
use tarehouse_physics::units::EV_PER_ANG3_TO_GPA;

use crate::ModelError;
use crate::harmonic::Spectrum;
use crate::molecular_crystal::MolecularCrystal;
use crate::package::Package;

/// Claims are rounded to this many decimals of an eV: far below what matters, far above what differs between machines.
const CLAIM_DECIMALS: usize = 9;

/// Constants with everything that is said about them.
#[derive(Debug, Clone, PartialEq)]
pub struct Contribution {
    /// Name of the package folder; also the contributor's own id.
    pub name: String,
    /// Label of the polymorph.
    pub form: String,
    /// The crystal.
    pub model: MolecularCrystal,
    /// The numbers as written, as if they were in eV/Å², displaced atom first.
    pub constants: ForceConstants,
    /// Unit declared for those numbers.
    pub declared_unit: ForceConstantUnit,
    /// Index order of the array; the constants are written in it.
    pub first_index: FirstIndex,
    /// Which atoms are said to have been displaced.
    pub displaced: Displaced,
    /// Whether nothing is said to have been enforced.
    pub raw: bool,
    /// What is said to have been enforced.
    pub enforced: Vec<Enforced>,
    /// Floating-point width declared.
    pub float_bits: u32,
    /// Displacement declared, Å.
    pub displacement_angstrom: f64,
    /// Difference quotient declared.
    pub differences: Differences,
    /// Claims.
    pub claims: Claims,
}

impl Contribution {
    /// An honest contribution: raw constants in eV/Å² from central differences in double precision, no claims.
    pub fn new(name: &str, form: &str, model: MolecularCrystal, constants: ForceConstants) -> Self {
        Self {
            name: name.to_owned(),
            form: form.to_owned(),
            model,
            constants,
            declared_unit: ForceConstantUnit::EvPerAngstrom2,
            first_index: FirstIndex::Displaced,
            displaced: Displaced::All,
            raw: true,
            enforced: Vec::new(),
            float_bits: 64,
            displacement_angstrom: 0.01,
            differences: Differences::Central,
            claims: Claims::default(),
        }
    }

    /// The submission that the package decodes to, and the package.
    ///
    /// # Errors
    /// [`ModelError::Crystal`] or [`ModelError::Constants`].
    pub fn seal(&self) -> Result<(Submission, Package), ModelError> {
        let scale = self.declared_unit.in_ev_per_ang2();
        let blocks = self.constants.blocks().iter().map(|block| block * scale);
        let supercell = self.constants.supercell().clone();
        let n = self.model.atom_count();
        let constants = ForceConstants::from_blocks(supercell, n, blocks.collect())
            .map_err(|error| ModelError::Constants(error.to_string()))?;
        let mut submission = Submission {
            package_digest: [0; 32],
            identity: self.identity(),
            components: vec![self.component()],
            crystal: self.model.to_crystal()?,
            masses_declared: false,
            cell_protocol: CellProtocol::Relaxed,
            cell_temperature_k: None,
            constants,
            declaration: Declaration {
                unit: self.declared_unit,
                first_index: self.first_index,
                displaced: self.displaced,
                raw: self.raw,
                enforced: self.enforced.clone(),
                long_range: LongRange::Included,
            },
            energy: Energy {
                lattice_energy_ev: self.model.energy_ev(),
                level: None,
                conformational_correction_ev: 0.0,
            },
            dielectric: None,
            claims: self.claims.clone(),
            settings: self.settings(),
        };
        let package = Package::seal(&self.name, &mut submission);
        Ok((submission, package))
    }

    fn identity(&self) -> Identity {
        let compound = self.model.compound();
        Identity {
            compound: compound.name().to_owned(),
            formula: compound.formula(),
            form: self.form.clone(),
            formula_units: u32::try_from(self.model.molecule_count()).unwrap_or(u32::MAX),
            contributor_key: Some(format!("demo/{}", self.name)),
            note: "Demonstration data: the compound and its potential are invented.".to_owned(),
        }
    }

    fn component(&self) -> Component {
        let compound = self.model.compound();
        Component {
            name: compound.name().to_owned(),
            formula: compound.formula(),
            count: 1,
            charge: 0,
            inchi: None,
        }
    }

    fn settings(&self) -> Settings {
        let compound = self.model.compound();
        let forces = self.model.forces();
        let square: f64 = forces.iter().map(Vector3::norm_squared).sum();
        let largest = forces.iter().map(Vector3::norm).fold(0.0, f64::max);
        let part = |text: &str| Some(text.to_owned());
        Settings {
            kind: Some(MethodKind::ForceField),
            program: part("make-demo 0.1"),
            level: LevelParts {
                functional: part(compound.potential_name()),
                dispersion: part("in the potential"),
                basis: part("none"),
                pseudopotentials: part("none"),
            },
            model_digest: Some(compound.model_digest()),
            float_bits: Some(self.float_bits),
            force_residual_rms_ev_per_angstrom: Some((square / forces.len() as f64).sqrt()),
            force_residual_max_ev_per_angstrom: Some(largest),
            stress_gpa: Some(self.model.stress_ev_per_ang3() * EV_PER_ANG3_TO_GPA),
            scheme: Some(Scheme::FiniteDisplacement),
            differences: Some(self.differences),
            displacement_angstrom: Some(self.displacement_angstrom),
            ..Settings::default()
        }
    }
}

/// Claims that a spectrum supports: the zero-point energy, and free energies at the given temperatures (K), eV per cell.
pub fn claims(spectrum: &Spectrum, temperatures: &[f64]) -> Claims {
    let tidy = |t: f64| {
        let energy = spectrum.free_energy_ev(t);
        format!("{energy:.CLAIM_DECIMALS$}")
            .parse()
            .unwrap_or(energy)
    };
    Claims {
        zero_point_energy_ev: Some(tidy(0.0)),
        free_energy_ev: temperatures.iter().map(|&t| (t, tidy(t))).collect(),
    }
}
