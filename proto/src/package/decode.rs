//! From the bytes of a package to a [`Submission`].

use std::collections::BTreeSet;

use nalgebra::Matrix3;
use tarehouse_assay::Submission;
use tarehouse_assay::submission::Dielectric;
use tarehouse_physics::ForceConstants;
use tarehouse_physics::force_constants::ForceConstantsError;

use super::manifest::{self, ArrayRole, Manifest, NamedArray, Parsed};
use super::reader::shortened;
use super::violation::Violations;
use super::{ArrayIdentity, MANIFEST_FILE, npy, package_digest};
use crate::limits;

/// Decodes a package from the bytes of its manifest and of its array files, named, in any order.
///
/// Lengths are converted to Å, energies to eV, constants to eV/Å² with the displaced atom first.
///
/// # Errors
/// Everything that is wrong with manifest and arrays, at once.
pub fn decode(manifest: &[u8], arrays: &[(&str, &[u8])]) -> Result<Submission, Violations> {
    let mut parsed = manifest::parse(manifest);
    check_names(&mut parsed, arrays);
    let (mut constants, mut charges) = (None, None);
    for expected in &parsed.arrays {
        let Some((_, bytes)) = arrays.iter().find(|(name, _)| *name == expected.name) else {
            continue;
        };
        let values = read_array(expected, bytes, &mut parsed.violations);
        match expected.role {
            ArrayRole::Constants => constants = values,
            ArrayRole::EffectiveCharges => charges = values,
        }
    }
    let violations = parsed.violations;
    let (Some(parts), Some(constants)) = (parsed.manifest, constants) else {
        return Err(violations);
    };
    if !violations.is_empty() {
        return Err(violations);
    }
    let identities: Vec<ArrayIdentity<'_>> = arrays
        .iter()
        .map(|(name, bytes)| ArrayIdentity::of(name, bytes))
        .collect();
    let digest = package_digest(manifest, &identities);
    assemble(parts, digest, &constants, charges.as_deref())
}

/// The files that are there must be those that the manifest names, as far as its names could be read.
fn check_names(parsed: &mut Parsed, arrays: &[(&str, &[u8])]) {
    let (named, violations) = (&parsed.arrays, &mut parsed.violations);
    let mut seen = BTreeSet::new();
    for (name, _) in arrays {
        let known = named.iter().any(|expected| expected.name == *name);
        if !seen.insert(*name) {
            violations.add(&shortened(name), "", "the file stands twice");
        } else if parsed.names_complete && !known {
            violations.add(&shortened(name), "", "the manifest names no such array");
        }
    }
    for expected in named {
        if !seen.contains(expected.name.as_str()) {
            violations.add(&expected.name, "", "the file is missing");
        }
    }
}

/// Values of an array file in which nothing is wrong.
fn read_array(
    expected: &NamedArray,
    bytes: &[u8],
    violations: &mut Violations,
) -> Option<Vec<f64>> {
    let file = &expected.name;
    if let Err(exceeded) = limits::ARRAY_BYTES.check_len(bytes.len()) {
        violations.add(file, "", exceeded.to_string());
        return None;
    }
    let array = npy::read(bytes, expected.shape.as_deref())
        .map_err(|error| violations.add(file, "", error.to_string()))
        .ok()?;
    let bad = |x: &f64| !x.is_finite();
    if let Some(first) = array.values.iter().position(bad) {
        let count = array.values.iter().filter(|x| bad(x)).count();
        let index = index_text(first, &array.shape);
        violations.add(file, index, not_finite(count));
        return None;
    }
    Some(array.values)
}

fn not_finite(count: usize) -> String {
    match count {
        1 => "the value is not finite; it is the only one".to_owned(),
        _ => format!("{count} values are not finite, this is the first"),
    }
}

/// Index, as in `[0, 1, 2]`, of a flat position in C order.
fn index_text(flat: usize, shape: &[u64]) -> String {
    let mut rest = flat as u64;
    let mut index: Vec<String> = shape
        .iter()
        .rev()
        .map(|length| {
            let length = (*length).max(1);
            let here = rest % length;
            rest /= length;
            here.to_string()
        })
        .collect();
    index.reverse();
    format!("[{}]", index.join(", "))
}

/// Puts the parts together. Shapes were checked, so that errors are not expected; they are reported all the same.
fn assemble(
    parts: Manifest,
    package_digest: [u8; 32],
    constants: &[f64],
    charges: Option<&[f64]>,
) -> Result<Submission, Violations> {
    let constants = ForceConstants::from_array(
        parts.supercell,
        parts.crystal.atom_count(),
        constants,
        parts.declaration.unit,
        parts.declaration.first_index,
    )
    .map_err(|error| constants_violation(&error))?;
    let dielectric = parts
        .permittivity
        .zip(charges)
        .map(|(permittivity, charges)| {
            let (tensors, _) = charges.as_chunks::<9>();
            Dielectric {
                effective_charges: tensors
                    .iter()
                    .map(|tensor| Matrix3::from_row_slice(tensor))
                    .collect(),
                permittivity,
            }
        });
    Ok(Submission {
        package_digest,
        identity: parts.identity,
        components: parts.components,
        crystal: parts.crystal,
        masses_declared: parts.masses_declared,
        cell_protocol: parts.cell_protocol,
        cell_temperature_k: parts.cell_temperature_k,
        constants,
        declaration: parts.declaration,
        energy: parts.energy,
        dielectric,
        claims: parts.claims,
        settings: parts.settings,
    })
}

fn constants_violation(error: &ForceConstantsError) -> Violations {
    let mut violations = Violations::default();
    violations.add(MANIFEST_FILE, "constants", error.to_string());
    violations
}
