//! The manifest: everything of a package but its arrays, read from `package.toml`.

use nalgebra::Matrix3;
use tarehouse_assay::submission::{
    CellProtocol, Claims, Component, Declaration, Energy, Identity, Settings,
};
use tarehouse_physics::{Crystal, Supercell};
use toml::de::DeTable;

use super::reader::{Reader, Section};
use super::violation::Violations;
use super::{FORMAT, MANIFEST_FILE, geometry, npy, sections};
use crate::limits;

/// A manifest in which nothing is wrong. Lengths in Å, energies in eV.
#[derive(Debug, Clone, PartialEq)]
pub struct Manifest {
    /// Names and stoichiometry.
    pub identity: Identity,
    /// Declared components.
    pub components: Vec<Component>,
    /// Cell and atoms.
    pub crystal: Crystal,
    /// Whether the masses were written.
    pub masses_declared: bool,
    /// How the cell was chosen.
    pub cell_protocol: CellProtocol,
    /// Temperature of the cell, K.
    pub cell_temperature_k: Option<f64>,
    /// Supercell of the constants.
    pub supercell: Supercell,
    /// What is said about the constants.
    pub declaration: Declaration,
    /// Static energy.
    pub energy: Energy,
    /// Relative electronic permittivity, where a dielectric table is given.
    pub permittivity: Option<Matrix3<f64>>,
    /// What the contributor computed.
    pub claims: Claims,
    /// How the constants were computed.
    pub settings: Settings,
}

/// What an array file holds.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum ArrayRole {
    /// Force constants, shape (L, n, 3, n, 3).
    Constants,
    /// Effective charges, shape (n, 3, 3).
    EffectiveCharges,
}

/// An array file that a manifest names.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct ExpectedArray {
    /// File name.
    pub name: String,
    /// What it holds.
    pub role: ArrayRole,
    /// Its shape.
    pub shape: Vec<u64>,
    /// Size of its data, bytes: eight times the product of the shape, not above [`limits::ARRAY_BYTES`].
    pub data_bytes: u64,
}

impl ExpectedArray {
    /// Whether a file of this size can be the array: the data are exactly as large as they must be, the header before
    /// them may be of any honest length.
    pub fn accepts_size(&self, size_bytes: u64) -> bool {
        limits::ARRAY_BYTES.allows(size_bytes)
            && size_bytes
                .checked_sub(self.data_bytes)
                .is_some_and(|rest| (1..=npy::PREAMBLE_BYTES_MAX).contains(&rest))
    }
}

/// What an intake must know before the arrays arrive.
#[derive(Debug, Clone, PartialEq)]
pub struct ManifestSummary {
    /// Everything of the package but its arrays.
    pub manifest: Manifest,
    /// The array files, in the order of their names.
    pub arrays: Vec<ExpectedArray>,
}

/// Reads a manifest.
///
/// # Errors
/// Everything that is wrong, at once.
pub fn check_manifest(manifest: &[u8]) -> Result<ManifestSummary, Violations> {
    let parsed = parse(manifest);
    match parsed.manifest {
        Some(manifest) if parsed.violations.is_empty() => Ok(ManifestSummary {
            manifest,
            arrays: parsed
                .arrays
                .into_iter()
                .filter_map(NamedArray::expected)
                .collect(),
        }),
        _ => Err(parsed.violations),
    }
}

/// An array file that a manifest names; its shape may be unknown where the manifest is wrong.
#[derive(Debug, Clone, PartialEq, Eq)]
pub(super) struct NamedArray {
    pub(super) name: String,
    pub(super) role: ArrayRole,
    pub(super) shape: Option<Vec<u64>>,
}

impl NamedArray {
    fn expected(self) -> Option<ExpectedArray> {
        let shape = self.shape?;
        Some(ExpectedArray {
            data_bytes: npy::data_bytes(&shape)?,
            name: self.name,
            role: self.role,
            shape,
        })
    }
}

/// What could be read, and what is wrong.
pub(super) struct Parsed {
    /// There if and only if there are no violations.
    pub(super) manifest: Option<Manifest>,
    /// In the order of names.
    pub(super) arrays: Vec<NamedArray>,
    /// Whether every file name that the manifest should hold could be read.
    pub(super) names_complete: bool,
    pub(super) violations: Violations,
}

impl Parsed {
    fn failed(key: &str, message: impl Into<String>) -> Self {
        let mut violations = Violations::default();
        violations.add(MANIFEST_FILE, key, message);
        Self {
            manifest: None,
            arrays: Vec::new(),
            names_complete: false,
            violations,
        }
    }
}

pub(super) fn parse(bytes: &[u8]) -> Parsed {
    if let Err(exceeded) = limits::MANIFEST_BYTES.check_len(bytes.len()) {
        return Parsed::failed("", exceeded.to_string());
    }
    let text = match std::str::from_utf8(bytes) {
        Ok(text) => text,
        Err(error) => {
            let at = error.valid_up_to();
            return Parsed::failed("", format!("not UTF-8 at byte {at}"));
        }
    };
    let mut reader = Reader::new(MANIFEST_FILE, text);
    let (document, errors) = DeTable::parse_recoverable(text);
    if errors.is_empty() {
        return read(reader, document.get_ref());
    }
    // What a broken text seems to say is not worth more words.
    for error in errors {
        let line = error.span().map(|span| reader.line_of(span.start));
        reader.note("", line, format!("not TOML: {}", error.message()));
    }
    Parsed {
        manifest: None,
        arrays: Vec::new(),
        names_complete: false,
        violations: reader.violations,
    }
}

const TABLES: [&str; 10] = [
    "format",
    "identity",
    "component",
    "crystal",
    "constants",
    "forces",
    "energy",
    "dielectric",
    "claims",
    "settings",
];

fn read(mut reader: Reader, document: &DeTable<'_>) -> Parsed {
    let reader = &mut reader;
    let root = Section::open(reader, "", document, &TABLES);
    read_format(reader, &root);
    let identity = sections::identity(reader, &root);
    let components = sections::components(reader, &root);
    let crystal = sections::crystal(reader, &root);
    let constants = sections::constants(reader, &root);
    let energy = sections::energy(reader, &root);
    let dielectric = sections::dielectric(reader, &root);
    let claims = sections::claims(reader, &root);
    let settings = sections::settings(reader, &root);

    if let (Some(identity), Some(components)) = (&identity, &components) {
        geometry::check_components(reader, identity, components);
    }
    if let (Some(identity), Some(elements)) = (&identity, &crystal.elements) {
        geometry::check_formula(reader, identity, elements);
    }
    if let Some(crystal) = &crystal.crystal {
        geometry::check_overlaps(reader, crystal);
    }
    let atom_count = crystal.elements.as_ref().map(|e| e.len() as u64);
    let cell_count = constants.supercell.as_ref().map(|s| s.cell_count() as u64);
    let names_complete =
        constants.file.is_some() && (dielectric.file.is_some() || !root.has("dielectric"));
    let mut arrays = Vec::new();
    if let Some(name) = constants.file {
        let shape = atom_count
            .zip(cell_count)
            .map(|(n, cells)| vec![cells, n, 3, n, 3]);
        let role = ArrayRole::Constants;
        arrays.push(NamedArray { name, role, shape });
    }
    if let Some(name) = dielectric.file {
        let shape = atom_count.map(|n| vec![n, 3, 3]);
        let role = ArrayRole::EffectiveCharges;
        arrays.push(NamedArray { name, role, shape });
    }
    check_arrays(reader, &mut arrays);

    let manifest = (|| {
        Some(Manifest {
            identity: identity?,
            components: components?,
            crystal: crystal.crystal?,
            masses_declared: crystal.masses_declared,
            cell_protocol: crystal.cell_protocol?,
            cell_temperature_k: crystal.cell_temperature_k,
            supercell: constants.supercell?,
            declaration: constants.declaration?,
            energy: energy?,
            permittivity: dielectric.permittivity,
            claims: claims?,
            settings: settings?,
        })
    })();
    let violations = std::mem::take(&mut reader.violations);
    Parsed {
        manifest: manifest.filter(|_| violations.is_empty()),
        arrays,
        names_complete,
        violations,
    }
}

fn read_format(reader: &mut Reader, root: &Section<'_, '_>) {
    if let Some(node) = root.required(reader, "format") {
        reader.choice(&node, &[(FORMAT, ())]);
    }
}

/// Two arrays never share a file; none is larger than the limit. Afterwards they stand in the order of their names.
fn check_arrays(reader: &mut Reader, arrays: &mut [NamedArray]) {
    arrays.sort_by(|a, b| a.name.cmp(&b.name));
    for pair in arrays.windows(2) {
        if let [first, second] = pair
            && first.name == second.name
        {
            let name = &first.name;
            let message = format!("{name} is named for two arrays");
            reader.note("dielectric.effective_charges", None, message);
        }
    }
    for array in arrays.iter_mut() {
        let Some(shape) = &array.shape else { continue };
        let bytes = npy::data_bytes(shape).map_or(u64::MAX, |b| b.saturating_add(1));
        if let Err(exceeded) = limits::ARRAY_BYTES.check(bytes) {
            let key = match array.role {
                ArrayRole::Constants => "constants.file",
                ArrayRole::EffectiveCharges => "dielectric.effective_charges",
            };
            reader.note(key, None, exceeded.to_string());
            array.shape = None;
        }
    }
}
