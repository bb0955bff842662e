//! `[energy]`, `[claims]` and `[settings]`.

use tarehouse_assay::submission::{
    Claims, Differences, Energy, LevelParts, MethodKind, Scheme, Settings,
};
use tarehouse_physics::units::{EV_TO_KJ_PER_MOL, HARTREE_EV};

use super::filled_line;
use crate::limits::{self, NUMBER_MAX};
use crate::package::reader::{Reader, Section};

const ENERGY: [&str; 4] = [
    "lattice_energy",
    "unit",
    "level",
    "conformational_correction",
];
const LEVEL: [&str; 4] = ["functional", "dispersion", "basis", "pseudopotentials"];
const CLAIMS: [&str; 2] = ["zero_point_energy", "free_energy"];
const SETTINGS: [&str; 18] = [
    "kind",
    "program",
    "functional",
    "dispersion",
    "basis",
    "pseudopotentials",
    "model_digest",
    "float_bits",
    "orbital_cutoff_ev",
    "density_to_orbital_cutoff",
    "k_spacing_per_angstrom",
    "scf_tolerance_ev_per_atom",
    "force_residual_rms_ev_per_angstrom",
    "force_residual_max_ev_per_angstrom",
    "stress_gpa",
    "scheme",
    "differences",
    "displacement_angstrom",
];

/// Energy units and their size, eV per cell; kJ/mol is per mole of cells.
const ENERGY_UNITS: [(&str, f64); 4] = [
    ("eV", 1.0),
    ("hartree", HARTREE_EV),
    ("rydberg", 0.5 * HARTREE_EV),
    ("kJ/mol", 1.0 / EV_TO_KJ_PER_MOL),
];

/// Names of the kinds of method.
pub(in crate::package) const KINDS: [(&str, MethodKind); 5] = [
    ("dft", MethodKind::Dft),
    ("wavefunction", MethodKind::Wavefunction),
    ("tight-binding", MethodKind::TightBinding),
    ("ml-potential", MethodKind::MlPotential),
    ("force-field", MethodKind::ForceField),
];
/// Names of the schemes.
pub(in crate::package) const SCHEMES: [(&str, Scheme); 2] = [
    ("finite-displacement", Scheme::FiniteDisplacement),
    ("linear-response", Scheme::LinearResponse),
];
/// Names of the difference quotients.
pub(in crate::package) const DIFFERENCES: [(&str, Differences); 2] = [
    ("central", Differences::Central),
    ("forward", Differences::Forward),
];

/// Widest floating-point number, bits.
const FLOAT_BITS_MAX: i64 = 256;

pub(in crate::package) fn energy(reader: &mut Reader, root: &Section<'_, '_>) -> Option<Energy> {
    let node = root.required(reader, "energy")?;
    let table = reader.table(&node, &ENERGY)?;
    let unit = table.required(reader, "unit");
    let unit_ev = unit.and_then(|node| reader.choice(&node, &ENERGY_UNITS));
    let lattice = table.required(reader, "lattice_energy");
    let lattice = lattice.and_then(|node| reader.number(&node, -NUMBER_MAX, NUMBER_MAX));
    let correction = match table.optional("conformational_correction") {
        Some(node) => reader.number(&node, -NUMBER_MAX, NUMBER_MAX),
        None => Some(0.0),
    };
    let level = table
        .optional("level")
        .and_then(|node| reader.table(&node, &LEVEL))
        .map(|level| level_parts(reader, &level));
    let unit_ev = unit_ev?;
    Some(Energy {
        lattice_energy_ev: lattice? * unit_ev,
        level,
        conformational_correction_ev: correction? * unit_ev,
    })
}

/// The four strings of a level of theory; an empty one counts as absent.
fn level_parts(reader: &mut Reader, table: &Section<'_, '_>) -> LevelParts {
    let [functional, dispersion, basis, pseudopotentials] = LEVEL.map(|key| {
        table
            .optional(key)
            .and_then(|node| filled_line(reader, &node))
    });
    LevelParts {
        functional,
        dispersion,
        basis,
        pseudopotentials,
    }
}

pub(in crate::package) fn claims(reader: &mut Reader, root: &Section<'_, '_>) -> Option<Claims> {
    let Some(node) = root.optional("claims") else {
        return Some(Claims::default());
    };
    let table = reader.table(&node, &CLAIMS)?;
    let zero_point_energy_ev = table
        .optional("zero_point_energy")
        .and_then(|node| reader.number(&node, -NUMBER_MAX, NUMBER_MAX));
    let free_energy_ev = match table.optional("free_energy") {
        Some(node) => reader.list_of(&node, limits::TEMPERATURES, |reader, pair| {
            let mut first = true;
            let [temperature_k, energy_ev] = reader.exactly(pair, |reader, entry| {
                let (min, max) = if std::mem::take(&mut first) {
                    (0.0, limits::TEMPERATURE_MAX_K)
                } else {
                    (-NUMBER_MAX, NUMBER_MAX)
                };
                reader.number(entry, min, max)
            })?;
            Some((temperature_k, energy_ev))
        }),
        None => Some(Vec::new()),
    };
    Some(Claims {
        zero_point_energy_ev,
        free_energy_ev: free_energy_ev?,
    })
}

pub(in crate::package) fn settings(
    reader: &mut Reader,
    root: &Section<'_, '_>,
) -> Option<Settings> {
    let Some(node) = root.optional("settings") else {
        return Some(Settings::default());
    };
    let table = reader.table(&node, &SETTINGS)?;
    let level = level_parts(reader, &table);
    let [program, model_digest] = ["program", "model_digest"].map(|key| {
        table
            .optional(key)
            .and_then(|node| filled_line(reader, &node))
    });
    let float_bits = table
        .optional("float_bits")
        .and_then(|node| reader.integer(&node, 1, FLOAT_BITS_MAX))
        .and_then(|bits| u32::try_from(bits).ok());
    let mut size = |key: &str| {
        table
            .optional(key)
            .and_then(|node| reader.number(&node, 0.0, NUMBER_MAX))
    };
    Some(Settings {
        program,
        level,
        model_digest,
        float_bits,
        orbital_cutoff_ev: size("orbital_cutoff_ev"),
        density_to_orbital_cutoff: size("density_to_orbital_cutoff"),
        k_spacing_per_angstrom: size("k_spacing_per_angstrom"),
        scf_tolerance_ev_per_atom: size("scf_tolerance_ev_per_atom"),
        force_residual_rms_ev_per_angstrom: size("force_residual_rms_ev_per_angstrom"),
        force_residual_max_ev_per_angstrom: size("force_residual_max_ev_per_angstrom"),
        displacement_angstrom: size("displacement_angstrom"),
        stress_gpa: table
            .optional("stress_gpa")
            .and_then(|node| reader.matrix(&node, NUMBER_MAX)),
        kind: table
            .optional("kind")
            .and_then(|node| reader.choice(&node, &KINDS)),
        scheme: table
            .optional("scheme")
            .and_then(|node| reader.choice(&node, &SCHEMES)),
        differences: table
            .optional("differences")
            .and_then(|node| reader.choice(&node, &DIFFERENCES)),
    })
}
