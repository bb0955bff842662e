//! `[constants]`, `[forces]` and `[dielectric]`.

use nalgebra::Matrix3;
use tarehouse_assay::submission::{Declaration, Displaced, Enforced, LongRange};
use tarehouse_physics::Supercell;
use tarehouse_physics::force_constants::{FirstIndex, ForceConstantUnit};
use tarehouse_physics::supercell::SupercellError;

use super::array_file;
use crate::limits;
use crate::package::reader::{Reader, Section};

const CONSTANTS: [&str; 9] = [
    "file",
    "unit",
    "supercell",
    "translations",
    "first_index",
    "displaced",
    "raw",
    "enforced",
    "long_range",
];
const DIELECTRIC: [&str; 2] = ["effective_charges", "permittivity"];

/// Names of the first index.
pub(in crate::package) const FIRST_INDICES: [(&str, FirstIndex); 2] = [
    ("displaced", FirstIndex::Displaced),
    ("response", FirstIndex::Response),
];
/// Names of the choice of displaced atoms.
pub(in crate::package) const DISPLACED: [(&str, Displaced); 2] = [
    ("all", Displaced::All),
    ("inequivalent", Displaced::Inequivalent),
];
/// Names of the conditions.
pub(in crate::package) const ENFORCED: [(&str, Enforced); 4] = [
    ("pair-symmetry", Enforced::PairSymmetry),
    ("translation-sum", Enforced::TranslationSum),
    ("rotation-sum", Enforced::RotationSum),
    ("space-group", Enforced::SpaceGroup),
];
/// Names of the treatment of the dipole–dipole part.
pub(in crate::package) const LONG_RANGE: [(&str, LongRange); 2] = [
    ("included", LongRange::Included),
    ("removed", LongRange::Removed),
];

/// What could be read of `[constants]`.
#[derive(Default)]
pub(in crate::package) struct ConstantsSection {
    pub(in crate::package) file: Option<String>,
    pub(in crate::package) supercell: Option<Supercell>,
    pub(in crate::package) declaration: Option<Declaration>,
}

pub(in crate::package) fn constants(
    reader: &mut Reader,
    root: &Section<'_, '_>,
) -> ConstantsSection {
    let has_forces = root.has("forces");
    if let Some(node) = root.optional("forces") {
        reader.fault(
            &node,
            "raw forces are not taken by this version; send force constants in [constants]",
        );
    }
    if has_forces && !root.has("constants") {
        return ConstantsSection::default();
    }
    let table = root
        .required(reader, "constants")
        .and_then(|node| reader.table(&node, &CONSTANTS));
    let Some(table) = table else {
        return ConstantsSection::default();
    };
    let file = if has_forces {
        table.optional("file")
    } else {
        table.required(reader, "file")
    };
    ConstantsSection {
        file: file.and_then(|node| array_file(reader, &node)),
        supercell: supercell(reader, &table),
        declaration: declaration(reader, &table),
    }
}

fn supercell(reader: &mut Reader, table: &Section<'_, '_>) -> Option<Supercell> {
    let max = limits::LATTICE_INTEGER_MAX;
    let matrix = table.required(reader, "supercell");
    let matrix =
        matrix.and_then(|node| reader.exactly(&node, |reader, row| reader.integers(row, max)));
    let translations = table.required(reader, "translations");
    let translations = translations.and_then(|node| {
        reader.list_of(&node, limits::CELLS, |reader, entry| {
            reader.integers(entry, max)
        })
    });
    match Supercell::new(matrix?, translations?) {
        Ok(supercell) => Some(supercell),
        Err(errors) => {
            for error in errors {
                let key = match error {
                    SupercellError::Singular | SupercellError::TooLarge { .. } => {
                        "constants.supercell".to_owned()
                    }
                    SupercellError::Count { .. } => "constants.translations".to_owned(),
                    SupercellError::Repeated { second, .. } => {
                        format!("constants.translations[{second}]")
                    }
                };
                reader.note(&key, None, error.to_string());
            }
            None
        }
    }
}

fn declaration(reader: &mut Reader, table: &Section<'_, '_>) -> Option<Declaration> {
    let units = ForceConstantUnit::ALL.map(|unit| (unit.name(), unit));
    let unit = table.required(reader, "unit");
    let unit = unit.and_then(|node| reader.choice(&node, &units));
    let first_index = table.required(reader, "first_index");
    let first_index = first_index.and_then(|node| reader.choice(&node, &FIRST_INDICES));
    let displaced = table.required(reader, "displaced");
    let displaced = displaced.and_then(|node| reader.choice(&node, &DISPLACED));
    let raw_node = table.required(reader, "raw");
    let raw = raw_node.as_ref().and_then(|node| reader.boolean(node));
    let enforced = match table.optional("enforced") {
        Some(node) => reader.list_of(&node, limits::COMPONENTS, |reader, entry| {
            reader.choice(entry, &ENFORCED)
        }),
        None => Some(Vec::new()),
    };
    if let (Some(node), Some(raw), Some(enforced)) = (&raw_node, raw, &enforced) {
        match (raw, enforced.is_empty()) {
            (true, false) => reader.fault(node, "true, although `enforced` names conditions"),
            (false, true) => reader.fault(node, "false: say in `enforced` what was enforced"),
            _ => {}
        }
    }
    let long_range = match table.optional("long_range") {
        Some(node) => reader.choice(&node, &LONG_RANGE),
        None => Some(LongRange::Included),
    };
    Some(Declaration {
        unit: unit?,
        first_index: first_index?,
        displaced: displaced?,
        raw: raw?,
        enforced: enforced?,
        long_range: long_range?,
    })
}

/// What could be read of `[dielectric]`.
#[derive(Default)]
pub(in crate::package) struct DielectricSection {
    pub(in crate::package) file: Option<String>,
    pub(in crate::package) permittivity: Option<Matrix3<f64>>,
}

pub(in crate::package) fn dielectric(
    reader: &mut Reader,
    root: &Section<'_, '_>,
) -> DielectricSection {
    let table = root
        .optional("dielectric")
        .and_then(|node| reader.table(&node, &DIELECTRIC));
    let Some(table) = table else {
        return DielectricSection::default();
    };
    for (key, other) in [(0, 1), (1, 0)].map(|(a, b)| (DIELECTRIC[a], DIELECTRIC[b])) {
        if !table.has(key) {
            let message = format!("missing beside {other}: give both or neither");
            reader.note(&format!("dielectric.{key}"), None, message);
        }
    }
    let file = table.optional("effective_charges");
    let permittivity = table.optional("permittivity");
    DielectricSection {
        file: file.and_then(|node| array_file(reader, &node)),
        permittivity: permittivity.and_then(|node| reader.matrix(&node, limits::NUMBER_MAX)),
    }
}
