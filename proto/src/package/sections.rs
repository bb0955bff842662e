//! The tables of a manifest, one function each. A function returns what could be read and notes what is wrong.

mod constants;
mod crystal;
mod identity;
mod settings;

pub(super) use constants::{constants, dielectric};
pub(super) use crystal::crystal;
pub(super) use identity::{components, identity};
pub(super) use settings::{claims, energy, settings};

use super::reader::{Node, Reader};
use crate::limits;

/// An array's file name: plain, in this folder, ending in `.npy`.
fn array_file(reader: &mut Reader, node: &Node<'_, '_>) -> Option<String> {
    let name = reader.name(node)?;
    let plain = |c: char| c.is_ascii_alphanumeric() || "._-".contains(c);
    if !name.chars().all(plain)
        || name.starts_with(['.', '-'])
        || name.strip_suffix(".npy").is_none()
    {
        reader.fault(
            node,
            "a plain file name ending in .npy is wanted: letters, digits, dot, underscore, hyphen",
        );
        return None;
    }
    Some(name)
}

/// A line of text; `None` where it is empty.
fn filled_line(reader: &mut Reader, node: &Node<'_, '_>) -> Option<String> {
    reader
        .line(node, limits::LINE_BYTES)
        .filter(|text| !text.is_empty())
}

/// The words of the format for the choices of the domain.
pub(super) mod names {
    pub(in crate::package) use super::constants::{DISPLACED, ENFORCED, FIRST_INDICES, LONG_RANGE};
    pub(in crate::package) use super::crystal::CELL_PROTOCOLS;
    pub(in crate::package) use super::settings::{DIFFERENCES, KINDS, SCHEMES};

    /// The word for a value; the lists hold every value.
    pub(in crate::package) fn name_of<T: Copy + PartialEq>(
        names: &[(&'static str, T)],
        value: T,
    ) -> &'static str {
        names
            .iter()
            .find(|(_, named)| *named == value)
            .map_or("", |(name, _)| name)
    }
}
