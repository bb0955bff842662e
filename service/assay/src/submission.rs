//! What a contributor submits, decoded: crystal, constants and the settings that made them.
//!
//! A `Submission` that exists is well formed: shapes agree, numbers are finite, units are known. Whether its physics is
//! good is for [`crate::examine`] to say.

use nalgebra::Matrix3;
use tarehouse_physics::force_constants::{FirstIndex, ForceConstantUnit};
use tarehouse_physics::{Crystal, ForceConstants};

/// BLAKE3 digest of a package; see the package format. It seeds every random draw.
pub type Digest = [u8; 32];

/// A decoded package.
#[derive(Debug, Clone, PartialEq)]
pub struct Submission {
    /// Digest of the package bytes.
    pub package_digest: Digest,
    /// Names and stoichiometry.
    pub identity: Identity,
    /// Declared molecules or ions of one formula unit; empty if none were declared.
    pub components: Vec<Component>,
    /// Cell and atoms.
    pub crystal: Crystal,
    /// Whether the masses were written in the package (else they are standard weights).
    pub masses_declared: bool,
    /// How the cell was chosen.
    pub cell_protocol: CellProtocol,
    /// Temperature of the cell where experimental or expanded, K.
    pub cell_temperature_k: Option<f64>,
    /// Force constants, converted to eV/Å² with the displaced atom first.
    pub constants: ForceConstants,
    /// What the package says about its constants.
    pub declaration: Declaration,
    /// Static energy.
    pub energy: Energy,
    /// Effective charges and permittivity, where given.
    pub dielectric: Option<Dielectric>,
    /// What the contributor computed.
    pub claims: Claims,
    /// How the constants were computed.
    pub settings: Settings,
}

impl Submission {
    /// Number of formula units in the cell.
    pub fn formula_units(&self) -> f64 {
        f64::from(self.identity.formula_units)
    }
}

/// `[identity]` of the package.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Identity {
    /// Name used in the shared list.
    pub compound: String,
    /// One formula unit.
    pub formula: Formula,
    /// Contributor's label of the polymorph.
    pub form: String,
    /// Formula units in the cell, at least one.
    pub formula_units: u32,
    /// Contributor's own id.
    pub contributor_key: Option<String>,
    /// Free text.
    pub note: String,
}

/// A sum formula: element symbols with counts, in Hill order.
#[derive(Debug, Clone, PartialEq, Eq, Default)]
pub struct Formula(pub Vec<(tarehouse_physics::Element, u32)>);

/// Why a formula could not be read.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
pub enum FormulaError {
    /// Nothing there.
    #[error("the formula is empty")]
    Empty,
    /// A term that is not an element symbol followed by an optional count.
    #[error("\"{0}\" is not an element symbol followed by a count")]
    Term(String),
    /// An element named twice.
    #[error("{0} appears twice")]
    Repeated(String),
}

impl Formula {
    /// Reads a formula of space-separated terms, as in `C4 H6 O2`. Any order is taken and brought into Hill order.
    ///
    /// # Errors
    /// [`FormulaError`].
    pub fn parse(text: &str) -> Result<Self, FormulaError> {
        let mut terms: Vec<(tarehouse_physics::Element, u32)> = Vec::new();
        for term in text.split_whitespace() {
            let digits = term
                .find(|c: char| c.is_ascii_digit())
                .unwrap_or(term.len());
            let (symbol, count) = term.split_at(digits);
            let bad = || FormulaError::Term(term.to_owned());
            let element = tarehouse_physics::Element::from_symbol(symbol).ok_or_else(bad)?;
            let count = if count.is_empty() {
                1
            } else {
                count.parse().map_err(|_| bad())?
            };
            if count == 0 {
                return Err(bad());
            }
            if terms.iter().any(|(known, _)| *known == element) {
                return Err(FormulaError::Repeated(symbol.to_owned()));
            }
            terms.push((element, count));
        }
        if terms.is_empty() {
            return Err(FormulaError::Empty);
        }
        Ok(Self::from_counts(terms))
    }

    /// A formula from elements and counts, brought into Hill order (Hill, J. Am. Chem. Soc. 22, 478 (1900)): carbon
    /// first, then hydrogen (and deuterium), then the rest by symbol; without carbon all by symbol.
    pub fn from_counts(mut terms: Vec<(tarehouse_physics::Element, u32)>) -> Self {
        let has_carbon = terms.iter().any(|(element, _)| element.symbol() == "C");
        terms.sort_by_key(|(element, _)| match element.symbol() {
            "C" => (0, element.symbol()),
            "H" | "D" if has_carbon => (1, element.symbol()),
            symbol => (2, symbol),
        });
        Self(terms)
    }

    /// Number of atoms in one formula unit.
    pub fn atom_count(&self) -> u64 {
        self.0.iter().map(|(_, count)| u64::from(*count)).sum()
    }
}

impl std::fmt::Display for Formula {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        for (k, (element, count)) in self.0.iter().enumerate() {
            let gap = if k == 0 { "" } else { " " };
            match count {
                1 => write!(f, "{gap}{element}")?,
                _ => write!(f, "{gap}{element}{count}")?,
            }
        }
        Ok(())
    }
}

/// One molecule or ion of the formula unit.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Component {
    /// Its name.
    pub name: String,
    /// Its sum formula.
    pub formula: Formula,
    /// How many per formula unit.
    pub count: u32,
    /// Its charge, e.
    pub charge: i32,
    /// IUPAC International Chemical Identifier, if given.
    pub inchi: Option<String>,
}

/// How the cell was chosen.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum CellProtocol {
    /// Relaxed at the level of the constants.
    Relaxed,
    /// Measured.
    Experimental,
    /// Expanded from the relaxed one.
    Expanded,
    /// Anything else.
    Other,
}

/// Which atoms were displaced.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Displaced {
    /// Every atom of the cell.
    All,
    /// Only symmetry-inequivalent atoms; the rest was generated by the space group.
    Inequivalent,
}

/// A condition that a contributor may have enforced before submission.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Enforced {
    /// Φ[l,i,j] = Φ[−l,j,i]ᵀ.
    PairSymmetry,
    /// Vanishing sums.
    TranslationSum,
    /// Born–Huang rotation sums.
    RotationSum,
    /// Space-group averages.
    SpaceGroup,
}

/// Whether the dipole–dipole part is inside the constants.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum LongRange {
    /// Inside.
    Included,
    /// Taken out.
    Removed,
}

/// `[constants]` of the package, less the array.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Declaration {
    /// Unit declared.
    pub unit: ForceConstantUnit,
    /// Index order declared.
    pub first_index: FirstIndex,
    /// Which atoms were displaced.
    pub displaced: Displaced,
    /// Nothing was enforced.
    pub raw: bool,
    /// What was enforced.
    pub enforced: Vec<Enforced>,
    /// Dipole–dipole part.
    pub long_range: LongRange,
}

/// `[energy]` of the package, converted to eV per cell.
#[derive(Debug, Clone, PartialEq)]
pub struct Energy {
    /// Static lattice energy, eV per cell.
    pub lattice_energy_ev: f64,
    /// Level of theory of the static energy, if other than that of the constants.
    pub level: Option<LevelParts>,
    /// Conformational correction already included, eV per cell.
    pub conformational_correction_ev: f64,
}

/// The four strings that make a level of theory; `None` where undeclared.
#[derive(Debug, Clone, PartialEq, Eq, Default)]
pub struct LevelParts {
    /// Exchange–correlation functional or Hamiltonian.
    pub functional: Option<String>,
    /// Dispersion treatment.
    pub dispersion: Option<String>,
    /// Basis set.
    pub basis: Option<String>,
    /// Pseudopotentials or core treatment.
    pub pseudopotentials: Option<String>,
}

impl LevelParts {
    /// The level as one string: lower case, single blanks, `undeclared` where missing, joined by ` / `.
    ///
    /// Energies are comparable only where these strings are equal.
    pub fn key(&self) -> String {
        [
            &self.functional,
            &self.dispersion,
            &self.basis,
            &self.pseudopotentials,
        ]
        .map(|part| {
            part.as_deref()
                .map_or_else(|| "undeclared".to_owned(), normalised)
        })
        .join(" / ")
    }
}

fn normalised(text: &str) -> String {
    let words: Vec<String> = text.split_whitespace().map(str::to_lowercase).collect();
    if words.is_empty() {
        "undeclared".to_owned()
    } else {
        words.join(" ")
    }
}

/// Effective charges and electronic permittivity.
#[derive(Debug, Clone, PartialEq)]
pub struct Dielectric {
    /// Z[i,a,b] = ∂P_a/∂u_ib in units of e, by atom.
    pub effective_charges: Vec<Matrix3<f64>>,
    /// Relative electronic permittivity.
    pub permittivity: Matrix3<f64>,
}

/// `[claims]` of the package.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Claims {
    /// Zero-point energy, eV per cell.
    pub zero_point_energy_ev: Option<f64>,
    /// (T/K, vibrational free energy in eV per cell).
    pub free_energy_ev: Vec<(f64, f64)>,
}

/// Kind of method that made the constants.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum MethodKind {
    /// Density-functional theory.
    Dft,
    /// Wave-function theory.
    Wavefunction,
    /// Tight binding.
    TightBinding,
    /// Machine-learned potential.
    MlPotential,
    /// Classical force field.
    ForceField,
}

/// How constants were obtained from the energy surface.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Scheme {
    /// Finite displacements.
    FiniteDisplacement,
    /// Linear response.
    LinearResponse,
}

/// Which difference quotient.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Differences {
    /// Central.
    Central,
    /// Forward.
    Forward,
}

/// `[settings]` of the package; every entry may be missing.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Settings {
    /// Kind of method.
    pub kind: Option<MethodKind>,
    /// Contributor's words.
    pub program: Option<String>,
    /// Level of theory of the constants.
    pub level: LevelParts,
    /// Digest of a potential's parameters.
    pub model_digest: Option<String>,
    /// Floating-point width.
    pub float_bits: Option<u32>,
    /// Orbital cutoff, eV.
    pub orbital_cutoff_ev: Option<f64>,
    /// Ratio of the density to the orbital cutoff wavevector.
    pub density_to_orbital_cutoff: Option<f64>,
    /// Spacing of the Brillouin-zone sampling of the electrons, Å⁻¹, 2π included.
    pub k_spacing_per_angstrom: Option<f64>,
    /// SCF tolerance, eV per atom.
    pub scf_tolerance_ev_per_atom: Option<f64>,
    /// Root mean square of |F_i| after geometry optimisation, eV/Å.
    pub force_residual_rms_ev_per_angstrom: Option<f64>,
    /// Largest |F_i|, eV/Å.
    pub force_residual_max_ev_per_angstrom: Option<f64>,
    /// Residual stress tensor, GPa.
    pub stress_gpa: Option<Matrix3<f64>>,
    /// Scheme.
    pub scheme: Option<Scheme>,
    /// Difference quotient.
    pub differences: Option<Differences>,
    /// Displacement, Å.
    pub displacement_angstrom: Option<f64>,
}
