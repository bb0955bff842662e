//! Checks of a manifest that need more than one key: stoichiometry and atoms in the same place.

use std::collections::BTreeMap;

use nalgebra::Vector3;
use tarehouse_assay::submission::{Component, Formula, Identity};
use tarehouse_physics::{Crystal, Element};

use super::reader::Reader;
use crate::limits;

/// The cell must hold exactly the declared number of formula units.
pub(super) fn check_formula(reader: &mut Reader, identity: &Identity, elements: &[Element]) {
    let mut counts: BTreeMap<&'static str, (Element, u32)> = BTreeMap::new();
    for element in elements {
        counts.entry(element.symbol()).or_insert((*element, 0)).1 += 1;
    }
    let cell = Formula::from_counts(counts.into_values().collect());
    let declared = identity.formula_units;
    let (formula, cell_text) = (&identity.formula, &cell);
    match units_in(&cell, formula) {
        Some(units) if units == u64::from(declared) => {}
        Some(units) => {
            let message = format!(
                "{declared} declared, but the cell {cell_text} holds {units} units of {formula}"
            );
            reader.note("identity.formula_units", None, message);
        }
        None => {
            let message = format!("{formula} does not divide the cell, which holds {cell_text}");
            reader.note("identity.formula", None, message);
        }
    }
}

/// How many times `cell` holds `formula`, if a whole number of times and nothing else.
fn units_in(cell: &Formula, formula: &Formula) -> Option<u64> {
    let of = |element: Element| formula.0.iter().find(|(other, _)| *other == element);
    let mut units = None;
    for (element, count) in &cell.0 {
        let per_unit = of(*element)?.1;
        if per_unit == 0 || count % per_unit != 0 {
            return None;
        }
        let here = u64::from(count / per_unit);
        if *units.get_or_insert(here) != here {
            return None;
        }
    }
    (cell.0.len() == formula.0.len()).then_some(units)?
}

/// Declared components must add up to the formula unit.
pub(super) fn check_components(reader: &mut Reader, identity: &Identity, parts: &[Component]) {
    if parts.is_empty() {
        return;
    }
    let mut sum: BTreeMap<&'static str, (Element, u64)> = BTreeMap::new();
    for part in parts {
        for (element, count) in &part.formula.0 {
            let entry = sum.entry(element.symbol()).or_insert((*element, 0));
            entry.1 += u64::from(*count) * u64::from(part.count);
        }
    }
    let formula = &identity.formula;
    let same = sum.len() == formula.0.len()
        && formula.0.iter().all(|(element, count)| {
            sum.get(element.symbol())
                .is_some_and(|(_, found)| *found == u64::from(*count))
        });
    if !same {
        let counts = sum
            .into_values()
            .map(|(element, count)| (element, u32::try_from(count).unwrap_or(u32::MAX)));
        let total = Formula::from_counts(counts.collect());
        let message = format!("the components add up to {total}, not to {formula}");
        reader.note("component", None, message);
    }
}

/// No two atoms may be nearer than [`limits::OVERLAP_ANG`], periodic images included.
///
/// For each pair, along each cell vector with plane spacing d, only images within r/d of the fractional difference can
/// be nearer than r: usually none, so that the cost is that of n²/2 comparisons. Ends early where the list of faults is
/// full.
pub(super) fn check_overlaps(reader: &mut Reader, crystal: &Crystal) {
    let reciprocal = crystal.reciprocal();
    let spacing: [f64; 3] =
        std::array::from_fn(|k| 2.0 * std::f64::consts::PI / reciprocal.row(k).norm());
    let narrow = |d: &f64| d.is_nan() || *d < limits::PLANE_SPACING_MIN_ANG;
    if let Some(k) = spacing.iter().position(narrow) {
        let (d, min) = (spacing[k], limits::PLANE_SPACING_MIN_ANG);
        let message = format!(
            "the lattice planes of this vector are {d:.3} Å apart, at least {min} are wanted: \
             write a less skewed cell"
        );
        reader.note(&format!("crystal.cell_vectors[{k}]"), None, message);
        return;
    }
    let reach = spacing.map(|d| limits::OVERLAP_ANG / d);
    for (second, b) in crystal.positions().iter().enumerate() {
        if reader.violations.is_full() {
            return;
        }
        for (first, a) in crystal.positions().iter().take(second).enumerate() {
            let Some(distance_ang) = nearest_image(crystal, &(b - a), &reach) else {
                continue;
            };
            let message = if distance_ang < SAME_PLACE_ANG {
                format!("the same place as atom {first}")
            } else {
                let min = limits::OVERLAP_ANG;
                format!("{distance_ang:.3} Å from atom {first}; at least {min} are wanted")
            };
            reader.note(&format!("crystal.positions[{second}]"), None, message);
        }
    }
}

/// Distance below which two atoms are called the same, Å.
const SAME_PLACE_ANG: f64 = 1e-3;

/// Length of the shortest image of a fractional difference, Å, if below the overlap distance.
fn nearest_image(crystal: &Crystal, delta: &Vector3<f64>, reach: &[f64; 3]) -> Option<f64> {
    let mut ranges = [(0_i32, 0_i32); 3];
    for ((range, x), r) in ranges.iter_mut().zip(delta.iter()).zip(reach) {
        // Coordinates are limited, so that the casts are exact.
        #[expect(clippy::cast_possible_truncation, reason = "below 2^31 by the limits")]
        let (low, high) = ((-r - x).ceil() as i32, (r - x).floor() as i32);
        if low > high {
            return None;
        }
        *range = (low, high);
    }
    let [xs, ys, zs] = ranges.map(|(low, high)| low..=high);
    let mut shortest = f64::INFINITY;
    for x in xs {
        for y in ys.clone() {
            for z in zs.clone() {
                let image = delta + Vector3::new(x, y, z).map(f64::from);
                shortest = shortest.min(crystal.cartesian(&image).norm());
            }
        }
    }
    (shortest < limits::OVERLAP_ANG).then_some(shortest)
}
