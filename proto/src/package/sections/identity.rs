//! `[identity]` and `[[component]]`.

use tarehouse_assay::submission::{Component, Formula, Identity};

use super::filled_line;
use crate::limits;
use crate::package::reader::{Node, Reader, Section};

const IDENTITY: [&str; 6] = [
    "compound",
    "formula",
    "form",
    "formula_units",
    "contributor_key",
    "note",
];
const COMPONENT: [&str; 5] = ["name", "formula", "count", "charge", "inchi"];

/// Largest charge of a component, e.
const CHARGE_MAX: i64 = 100;

pub(in crate::package) fn identity(
    reader: &mut Reader,
    root: &Section<'_, '_>,
) -> Option<Identity> {
    let node = root.required(reader, "identity")?;
    let table = reader.table(&node, &IDENTITY)?;
    let compound = table.required(reader, "compound");
    let compound = compound.and_then(|node| reader.name(&node));
    let formula = table.required(reader, "formula");
    let formula = formula.and_then(|node| read_formula(reader, &node));
    let form = table.required(reader, "form");
    let form = form.and_then(|node| reader.name(&node));
    let formula_units = table.required(reader, "formula_units");
    let formula_units = formula_units.and_then(|node| count(reader, &node));
    let contributor_key = table
        .optional("contributor_key")
        .and_then(|node| reader.line(&node, limits::NAME_BYTES))
        .filter(|key| !key.is_empty());
    let note = table
        .optional("note")
        .and_then(|node| reader.lines(&node, limits::NOTE_BYTES))
        .unwrap_or_default();
    Some(Identity {
        compound: compound?,
        formula: formula?,
        form: form?,
        formula_units: formula_units?,
        contributor_key,
        note,
    })
}

pub(in crate::package) fn components(
    reader: &mut Reader,
    root: &Section<'_, '_>,
) -> Option<Vec<Component>> {
    match root.optional("component") {
        Some(node) => reader.list_of(&node, limits::COMPONENTS, component),
        None => Some(Vec::new()),
    }
}

fn component(reader: &mut Reader, node: &Node<'_, '_>) -> Option<Component> {
    let table = reader.table(node, &COMPONENT)?;
    let name = table.required(reader, "name");
    let name = name.and_then(|node| reader.name(&node));
    let formula = table.required(reader, "formula");
    let formula = formula.and_then(|node| read_formula(reader, &node));
    let units = table.required(reader, "count");
    let units = units.and_then(|node| count(reader, &node));
    let charge = match table.optional("charge") {
        Some(node) => reader.integer(&node, -CHARGE_MAX, CHARGE_MAX),
        None => Some(0),
    };
    let inchi = table
        .optional("inchi")
        .and_then(|node| filled_line(reader, &node));
    Some(Component {
        name: name?,
        formula: formula?,
        count: units?,
        charge: i32::try_from(charge?).ok()?,
        inchi,
    })
}

fn count(reader: &mut Reader, node: &Node<'_, '_>) -> Option<u32> {
    let max = i64::try_from(limits::FORMULA_UNITS.max).unwrap_or(i64::MAX);
    let count = reader.integer(node, 1, max)?;
    u32::try_from(count).ok()
}

fn read_formula(reader: &mut Reader, node: &Node<'_, '_>) -> Option<Formula> {
    let text = reader.line(node, limits::LINE_BYTES)?;
    match Formula::parse(&text) {
        Ok(formula) => Some(formula),
        Err(error) => {
            reader.fault(node, error.to_string());
            None
        }
    }
}
