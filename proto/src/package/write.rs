//! From a [`Submission`] to the bytes of a package: for tests and for whoever makes packages.
//!
//! Lengths are written in Å and energies in eV. Numbers are written with as many digits as reading them back exactly
//! needs, so that decoding gives the same submission, its digest apart.

use std::fmt::{Display, Write as _};

use nalgebra::Matrix3;
use tarehouse_assay::Submission;
use tarehouse_assay::submission::{Digest, LevelParts};
use tarehouse_physics::force_constants::FirstIndex;

use super::sections::names;
use super::{ArrayIdentity, FORMAT, npy, package_digest};

/// File of the force constants.
const CONSTANTS_FILE: &str = "constants.npy";
/// File of the effective charges.
const CHARGES_FILE: &str = "effective_charges.npy";

/// The files of a package.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Package {
    /// Text of `package.toml`.
    pub manifest: String,
    /// Array files with their names, in the order of names.
    pub arrays: Vec<(String, Vec<u8>)>,
}

impl Package {
    /// The package digest.
    pub fn digest(&self) -> Digest {
        let identities: Vec<ArrayIdentity<'_>> = self
            .arrays
            .iter()
            .map(|(name, bytes)| ArrayIdentity::of(name, bytes))
            .collect();
        package_digest(self.manifest.as_bytes(), &identities)
    }

    /// The array files as [`super::decode`] takes them.
    pub fn array_refs(&self) -> Vec<(&str, &[u8])> {
        self.arrays
            .iter()
            .map(|(name, bytes)| (name.as_str(), bytes.as_slice()))
            .collect()
    }
}

/// Writes a package. The constants are written in the declared unit and index order; see [`constants_as_declared`].
pub fn encode(submission: &Submission) -> Package {
    encode_with_constants(submission, &constants_as_declared(submission))
}

/// Writes a package with other constants than those of the submission: `values` in C order of shape (L, n, 3, n, 3), in
/// whatever unit and index order. What the manifest declares about them need not be true.
pub fn encode_with_constants(submission: &Submission, values: &[f64]) -> Package {
    let n = submission.crystal.atom_count() as u64;
    let cells = submission.constants.supercell().cell_count() as u64;
    let constants = npy::write(&[cells, n, 3, n, 3], values);
    let mut arrays = vec![(CONSTANTS_FILE.to_owned(), constants)];
    if let Some(dielectric) = &submission.dielectric {
        let values: Vec<f64> = dielectric
            .effective_charges
            .iter()
            .flat_map(row_major)
            .collect();
        arrays.push((CHARGES_FILE.to_owned(), npy::write(&[n, 3, 3], &values)));
    }
    Package {
        manifest: manifest(submission),
        arrays,
    }
}

/// The constants as an array of shape (L, n, 3, n, 3) in C order, in the declared unit and index order.
///
/// Reading them back gives the same constants exactly where the unit is eV/Å², else to one unit in the last place.
pub fn constants_as_declared(submission: &Submission) -> Vec<f64> {
    let constants = &submission.constants;
    let (supercell, n) = (constants.supercell(), constants.atom_count());
    let unit = submission.declaration.unit.in_ev_per_ang2();
    let mut values = Vec::with_capacity(9 * constants.blocks().len());
    for cell in 0..supercell.cell_count() {
        let negative = supercell.negative(cell);
        for i in 0..n {
            for a in 0..3 {
                for j in 0..n {
                    for b in 0..3 {
                        let value = match submission.declaration.first_index {
                            FirstIndex::Displaced => constants.block(cell, i, j)[(a, b)],
                            FirstIndex::Response => constants.block(negative, j, i)[(b, a)],
                        };
                        values.push(value / unit);
                    }
                }
            }
        }
    }
    values
}

/// Text of the manifest.
fn manifest(submission: &Submission) -> String {
    let mut text = Text::default();
    text.key("format", quoted(FORMAT));
    identity(&mut text, submission);
    crystal(&mut text, submission);
    constants(&mut text, submission);
    energy(&mut text, submission);
    settings(&mut text, submission);
    text.0
}

fn identity(text: &mut Text, submission: &Submission) {
    let identity = &submission.identity;
    text.table("[identity]");
    text.key("compound", quoted(&identity.compound));
    text.key("formula", quoted(&identity.formula.to_string()));
    text.key("form", quoted(&identity.form));
    text.key("formula_units", identity.formula_units);
    text.string("contributor_key", identity.contributor_key.as_deref());
    text.string(
        "note",
        Some(&identity.note)
            .filter(|note| !note.is_empty())
            .map(String::as_str),
    );
    for component in &submission.components {
        text.table("[[component]]");
        text.key("name", quoted(&component.name));
        text.key("formula", quoted(&component.formula.to_string()));
        text.key("count", component.count);
        text.key("charge", component.charge);
        text.string("inchi", component.inchi.as_deref());
    }
}

fn crystal(text: &mut Text, submission: &Submission) {
    let crystal = &submission.crystal;
    text.table("[crystal]");
    text.key("cell_vectors", matrix(crystal.cell()));
    text.key("length_unit", quoted("angstrom"));
    let symbols = crystal.elements().iter().map(|e| quoted(e.symbol()));
    text.key("elements", list(symbols));
    let positions = crystal
        .positions()
        .iter()
        .map(|p| numbers(p.iter().copied()));
    text.key("positions", list(positions));
    if submission.masses_declared {
        text.key("masses", numbers(crystal.masses_u().iter().copied()));
    }
    let protocol = names::name_of(&names::CELL_PROTOCOLS, submission.cell_protocol);
    text.key("cell_protocol", quoted(protocol));
    text.number("temperature_k", submission.cell_temperature_k);
}

fn constants(text: &mut Text, submission: &Submission) {
    let (declared, supercell) = (&submission.declaration, submission.constants.supercell());
    text.table("[constants]");
    text.key("file", quoted(CONSTANTS_FILE));
    text.key("unit", quoted(declared.unit.name()));
    let integers = |row: &[i64; 3]| list(row.iter());
    text.key("supercell", list(supercell.matrix().iter().map(integers)));
    text.key(
        "translations",
        list(supercell.translations().iter().map(integers)),
    );
    let first_index = names::name_of(&names::FIRST_INDICES, declared.first_index);
    text.key("first_index", quoted(first_index));
    let displaced = names::name_of(&names::DISPLACED, declared.displaced);
    text.key("displaced", quoted(displaced));
    text.key("raw", declared.raw);
    let enforced = declared
        .enforced
        .iter()
        .map(|condition| quoted(names::name_of(&names::ENFORCED, *condition)));
    text.key("enforced", list(enforced));
    let long_range = names::name_of(&names::LONG_RANGE, declared.long_range);
    text.key("long_range", quoted(long_range));
    if let Some(dielectric) = &submission.dielectric {
        text.table("[dielectric]");
        text.key("effective_charges", quoted(CHARGES_FILE));
        text.key("permittivity", matrix(&dielectric.permittivity));
    }
}

fn energy(text: &mut Text, submission: &Submission) {
    let (energy, claims) = (&submission.energy, &submission.claims);
    text.table("[energy]");
    text.number("lattice_energy", Some(energy.lattice_energy_ev));
    text.key("unit", quoted("eV"));
    text.number(
        "conformational_correction",
        Some(energy.conformational_correction_ev),
    );
    if let Some(parts) = &energy.level {
        text.table("[energy.level]");
        level(text, parts);
    }
    if claims.zero_point_energy_ev.is_some() || !claims.free_energy_ev.is_empty() {
        text.table("[claims]");
        text.number("zero_point_energy", claims.zero_point_energy_ev);
        let pairs = claims.free_energy_ev.iter().map(|(t, f)| numbers([*t, *f]));
        text.key("free_energy", list(pairs));
    }
}

fn settings(text: &mut Text, submission: &Submission) {
    let settings = &submission.settings;
    let kind = settings
        .kind
        .map(|kind| names::name_of(&names::KINDS, kind));
    let scheme = settings.scheme.map(|s| names::name_of(&names::SCHEMES, s));
    let differences = settings
        .differences
        .map(|d| names::name_of(&names::DIFFERENCES, d));
    text.table("[settings]");
    text.string("kind", kind);
    text.string("program", settings.program.as_deref());
    level(text, &settings.level);
    text.string("model_digest", settings.model_digest.as_deref());
    if let Some(bits) = settings.float_bits {
        text.key("float_bits", bits);
    }
    for (key, value) in [
        ("orbital_cutoff_ev", settings.orbital_cutoff_ev),
        (
            "density_to_orbital_cutoff",
            settings.density_to_orbital_cutoff,
        ),
        ("k_spacing_per_angstrom", settings.k_spacing_per_angstrom),
        (
            "scf_tolerance_ev_per_atom",
            settings.scf_tolerance_ev_per_atom,
        ),
        (
            "force_residual_rms_ev_per_angstrom",
            settings.force_residual_rms_ev_per_angstrom,
        ),
        (
            "force_residual_max_ev_per_angstrom",
            settings.force_residual_max_ev_per_angstrom,
        ),
        ("displacement_angstrom", settings.displacement_angstrom),
    ] {
        text.number(key, value);
    }
    if let Some(stress) = &settings.stress_gpa {
        text.key("stress_gpa", matrix(stress));
    }
    text.string("scheme", scheme);
    text.string("differences", differences);
}

fn level(text: &mut Text, level: &LevelParts) {
    text.string("functional", level.functional.as_deref());
    text.string("dispersion", level.dispersion.as_deref());
    text.string("basis", level.basis.as_deref());
    text.string("pseudopotentials", level.pseudopotentials.as_deref());
}

/// Text of a manifest, growing.
#[derive(Default)]
struct Text(String);

impl Text {
    fn table(&mut self, header: &str) {
        self.0.push('\n');
        self.0.push_str(header);
        self.0.push('\n');
    }

    fn key(&mut self, key: &str, value: impl Display) {
        // Writing to a string cannot fail.
        let _ = writeln!(self.0, "{key} = {value}");
    }

    fn number(&mut self, key: &str, value: Option<f64>) {
        if let Some(value) = value {
            self.key(key, number(value));
        }
    }

    fn string(&mut self, key: &str, value: Option<&str>) {
        if let Some(value) = value {
            self.key(key, quoted(value));
        }
    }
}

/// Shortest text that reads back as the same number.
fn number(value: f64) -> String {
    format!("{value:?}")
}

fn numbers(values: impl IntoIterator<Item = f64>) -> String {
    list(values.into_iter().map(number))
}

fn list(entries: impl IntoIterator<Item = impl Display>) -> String {
    let entries: Vec<String> = entries.into_iter().map(|e| e.to_string()).collect();
    format!("[{}]", entries.join(", "))
}

fn row_major(matrix: &Matrix3<f64>) -> Vec<f64> {
    matrix.transpose().iter().copied().collect()
}

fn matrix(matrix: &Matrix3<f64>) -> String {
    list(matrix.row_iter().map(|row| numbers(row.iter().copied())))
}

/// A basic string of TOML.
fn quoted(text: &str) -> String {
    let mut quoted = String::with_capacity(text.len() + 2);
    quoted.push('"');
    for c in text.chars() {
        match c {
            '"' | '\\' => quoted.extend(['\\', c]),
            '\n' => quoted.push_str("\\n"),
            '\t' => quoted.push_str("\\t"),
            c if c.is_control() => {
                let _ = write!(quoted, "\\u{:04X}", u32::from(c));
            }
            c => quoted.push(c),
        }
    }
    quoted.push('"');
    quoted
}
