//! `[crystal]`.

use nalgebra::{Matrix3, Vector3};
use tarehouse_assay::submission::CellProtocol;
use tarehouse_physics::crystal::CrystalError;
use tarehouse_physics::units::BOHR_ANGSTROM;
use tarehouse_physics::{Crystal, Element};

use crate::limits;
use crate::package::reader::{Node, Reader, Section, shortened};

const KEYS: [&str; 7] = [
    "cell_vectors",
    "length_unit",
    "elements",
    "positions",
    "masses",
    "cell_protocol",
    "temperature_k",
];

/// Length units and their size, Å.
const LENGTH_UNITS: [(&str, f64); 2] = [("angstrom", 1.0), ("bohr", BOHR_ANGSTROM)];

/// Names of the cell protocols.
pub(in crate::package) const CELL_PROTOCOLS: [(&str, CellProtocol); 4] = [
    ("relaxed", CellProtocol::Relaxed),
    ("experimental", CellProtocol::Experimental),
    ("expanded", CellProtocol::Expanded),
    ("other", CellProtocol::Other),
];

/// What could be read of `[crystal]`.
#[derive(Default)]
pub(in crate::package) struct CrystalSection {
    pub(in crate::package) elements: Option<Vec<Element>>,
    pub(in crate::package) crystal: Option<Crystal>,
    pub(in crate::package) masses_declared: bool,
    pub(in crate::package) cell_protocol: Option<CellProtocol>,
    pub(in crate::package) cell_temperature_k: Option<f64>,
}

pub(in crate::package) fn crystal(reader: &mut Reader, root: &Section<'_, '_>) -> CrystalSection {
    let table = root
        .required(reader, "crystal")
        .and_then(|node| reader.table(&node, &KEYS));
    let Some(table) = table else {
        return CrystalSection::default();
    };
    let cell = cell(reader, &table);
    let elements = table.required(reader, "elements");
    let elements = elements.and_then(|node| reader.list_of(&node, limits::ATOMS, element));
    let positions = table.required(reader, "positions");
    let positions = positions.and_then(|node| {
        reader.list_of(&node, limits::ATOMS, |reader, entry| {
            reader.vector(entry, limits::POSITION_MAX)
        })
    });
    let masses_node = table.optional("masses");
    let masses_declared = masses_node.is_some();
    let masses = masses_node.and_then(|node| {
        reader.list_of(&node, limits::ATOMS, |reader, entry| {
            reader.number(entry, f64::MIN_POSITIVE, limits::MASS_MAX_U)
        })
    });
    let cell_protocol = match table.optional("cell_protocol") {
        Some(node) => reader.choice(&node, &CELL_PROTOCOLS),
        None => Some(CellProtocol::Relaxed),
    };
    let cell_temperature_k = table
        .optional("temperature_k")
        .and_then(|node| reader.number(&node, 0.0, limits::TEMPERATURE_MAX_K));
    let parts = Parts {
        cell,
        elements: elements.as_deref(),
        positions,
        masses_readable: masses.is_some() || !masses_declared,
        masses,
    };
    CrystalSection {
        crystal: assemble(reader, parts),
        elements,
        masses_declared,
        cell_protocol,
        cell_temperature_k,
    }
}

/// Cell vectors as rows, Å.
fn cell(reader: &mut Reader, table: &Section<'_, '_>) -> Option<Matrix3<f64>> {
    let unit = table.required(reader, "length_unit");
    let unit_ang = unit.and_then(|node| reader.choice(&node, &LENGTH_UNITS));
    let vectors = table.required(reader, "cell_vectors");
    let vectors =
        vectors.and_then(|node| reader.matrix(&node, limits::CELL_VECTOR_MAX_ANG / BOHR_ANGSTROM));
    let cell = vectors? * unit_ang?;
    for (k, vector) in cell.row_iter().enumerate() {
        let (length, max) = (vector.norm(), limits::CELL_VECTOR_MAX_ANG);
        if length > max {
            let message = format!("{length:.3} Å long; at most {max} are taken");
            reader.note(&format!("crystal.cell_vectors[{k}]"), None, message);
            return None;
        }
    }
    Some(cell)
}

fn element(reader: &mut Reader, node: &Node<'_, '_>) -> Option<Element> {
    let symbol = reader.line(node, limits::LINE_BYTES)?;
    let element = Element::from_symbol(&symbol);
    if element.is_none() {
        let symbol = shortened(&symbol);
        reader.fault(node, format!("\"{symbol}\" is not an element symbol"));
    }
    element
}

/// What was read.
struct Parts<'a> {
    cell: Option<Matrix3<f64>>,
    elements: Option<&'a [Element]>,
    positions: Option<Vec<Vector3<f64>>>,
    masses: Option<Vec<f64>>,
    masses_readable: bool,
}

/// The crystal of all parts; what disagrees is noted as far as parts are there.
fn assemble(reader: &mut Reader, parts: Parts<'_>) -> Option<Crystal> {
    let complete = parts.cell.is_some()
        && parts.elements.is_some()
        && parts.positions.is_some()
        && parts.masses_readable;
    // A part that could not be read is replaced by one that disagrees with nothing, so that the others are still held
    // against each other.
    let elements: Vec<Element> = parts.elements.map(<[_]>::to_vec)?;
    let n = elements.len();
    let positions = parts.positions.unwrap_or_else(|| vec![Vector3::zeros(); n]);
    let masses = if parts.masses_readable {
        parts.masses
    } else {
        Some(vec![1.0; n])
    };
    let cell = parts.cell.unwrap_or_else(Matrix3::identity);
    match Crystal::new(cell, elements, positions, masses) {
        Ok(crystal) => complete.then_some(crystal),
        Err(errors) => {
            for error in errors {
                reader.note(&place(&error), None, error.to_string());
            }
            None
        }
    }
}

/// Key that a crystal's fault belongs to.
fn place(error: &CrystalError) -> String {
    match error {
        CrystalError::SingularCell { .. } => "crystal.cell_vectors".to_owned(),
        CrystalError::Empty => "crystal.elements".to_owned(),
        CrystalError::PositionCount { .. } => "crystal.positions".to_owned(),
        CrystalError::MassCount { .. } => "crystal.masses".to_owned(),
        CrystalError::PositionNotFinite { atom } => format!("crystal.positions[{atom}]"),
        CrystalError::MassNotPositive { atom, .. } => format!("crystal.masses[{atom}]"),
        CrystalError::NoStandardWeight { atom, .. } => format!("crystal.elements[{atom}]"),
    }
}
