//! The structure: overlapping atoms, molecules, formula and components against the bond graph, density, masses, group.

use std::collections::BTreeMap;

use tarehouse_physics::Element;

use super::Limit;
use crate::report::{Finding, LikelyCause, Rule, Severity};
use crate::submission::Formula;
use crate::workup::Workup;

pub(crate) fn check(workup: &Workup<'_>) -> Vec<Finding> {
    vec![
        overlap(workup),
        molecules(workup),
        formula(workup),
        components(workup),
        density(workup),
        masses(workup),
        space_group(workup),
    ]
}

fn overlap(workup: &Workup<'_>) -> Finding {
    let limits = &workup.limits.structure;
    let elements = workup.crystal.elements();
    let n = elements.len();
    let home = workup.projected.home_cell();
    let mut worst = (f64::INFINITY, 0, 0, 0.0);
    for l in 0..workup.projected.supercell().cell_count() {
        for i in 0..n {
            for j in 0..n {
                if l == home && i == j {
                    continue;
                }
                let distance = workup.images.distance(&workup.crystal, l, i, j);
                let radii = [i, j].map(|k| elements[k].covalent_radius_angstrom());
                let ratio = distance / (radii[0] + radii[1]);
                if ratio < worst.0 {
                    worst = (ratio, i, j, distance);
                }
            }
        }
    }
    let (ratio, i, j, distance) = worst;
    if ratio.is_infinite() {
        return Finding::new(
            Rule::AtomOverlap,
            Severity::Pass,
            "one atom only: no pair to judge",
        );
    }
    let severity = if ratio < limits.overlap_fail_fraction {
        Severity::Fail
    } else if ratio < limits.overlap_caution_fraction {
        Severity::Caution
    } else {
        Severity::Pass
    };
    Finding::new(
        Rule::AtomOverlap,
        severity,
        format!(
            "the closest pair is {distance:.3} Å apart, as a share of the sum of the covalent radii"
        ),
    )
    .measured(ratio, Some(limits.overlap_caution_fraction), "")
    .at(format!(
        "atoms {i} ({}) and {j} ({})",
        elements[i], elements[j]
    ))
    .because(
        LikelyCause::WrongStructure,
        "check cell vectors, length unit and positions",
    )
}

fn counts(formula: &Formula) -> BTreeMap<Element, usize> {
    formula
        .0
        .iter()
        .map(|(element, count)| (*element, *count as usize))
        .collect()
}

/// Distinct molecular formulas found, with how many of each.
fn found_kinds(workup: &Workup<'_>) -> BTreeMap<BTreeMap<Element, usize>, usize> {
    let mut kinds = BTreeMap::new();
    for molecule in workup.molecules.molecules() {
        *kinds.entry(molecule.formula().clone()).or_insert(0) += 1;
    }
    kinds
}

fn show_kinds(workup: &Workup<'_>) -> String {
    let mut names: BTreeMap<String, usize> = BTreeMap::new();
    for molecule in workup.molecules.molecules() {
        *names.entry(molecule.hill_formula()).or_insert(0) += 1;
    }
    names
        .iter()
        .map(|(name, count)| format!("{count} × {name}"))
        .collect::<Vec<_>>()
        .join(", ")
}

fn molecules(workup: &Workup<'_>) -> Finding {
    let shown = show_kinds(workup);
    if workup.molecules.has_networks() {
        return Finding::new(
            Rule::MoleculeIntegrity,
            Severity::Caution,
            format!("bonds run on without end, so that molecules are not told apart: {shown}"),
        )
        .because(
            LikelyCause::WrongStructure,
            "if the crystal is molecular, check positions and length unit; a true network has no rigid-molecule part",
        );
    }
    let units = workup.submission.identity.formula_units as usize;
    let uneven = found_kinds(workup).values().any(|count| count % units != 0);
    let severity = if uneven {
        Severity::Fail
    } else {
        Severity::Pass
    };
    let message = if uneven {
        format!(
            "molecules do not come in whole numbers per formula unit: {shown} in {units} formula units"
        )
    } else {
        format!("molecules found from bonds, whole across cell faces: {shown}")
    };
    Finding::new(Rule::MoleculeIntegrity, severity, message).because(
        LikelyCause::WrongStructure,
        "a bond is broken or one too many: check positions, cell vectors and length unit",
    )
}

fn formula(workup: &Workup<'_>) -> Finding {
    let identity = &workup.submission.identity;
    let mut cell: BTreeMap<Element, usize> = BTreeMap::new();
    for element in workup.crystal.elements() {
        *cell.entry(*element).or_insert(0) += 1;
    }
    let units = identity.formula_units as usize;
    let wanted: BTreeMap<Element, usize> = counts(&identity.formula)
        .into_iter()
        .map(|(e, c)| (e, c * units))
        .collect();
    let severity = if cell == wanted {
        Severity::Pass
    } else {
        Severity::Fail
    };
    let words = if cell == wanted {
        "the cell holds"
    } else {
        "the cell does not hold"
    };
    Finding::new(
        Rule::Formula,
        severity,
        format!("{words} {units} × {}", identity.formula),
    )
    .at("identity.formula")
    .because(
        LikelyCause::WrongStructure,
        "check identity.formula and identity.formula_units",
    )
}

fn components(workup: &Workup<'_>) -> Finding {
    let submission = workup.submission;
    if submission.components.is_empty() {
        let message = "no components declared: molecules are taken as found from bonds";
        return Finding::new(Rule::Components, Severity::Pass, message).at("component");
    }
    let units = submission.identity.formula_units as usize;
    let mut wanted: BTreeMap<BTreeMap<Element, usize>, usize> = BTreeMap::new();
    for component in &submission.components {
        *wanted.entry(counts(&component.formula)).or_insert(0) += component.count as usize * units;
    }
    if workup.molecules.has_networks() {
        let message = "components cannot be compared: bonds run on without end";
        return Finding::new(Rule::Components, Severity::Caution, message)
            .at("component")
            .because(LikelyCause::WrongStructure, "see molecule-integrity");
    }
    let same = found_kinds(workup) == wanted;
    let severity = if same { Severity::Pass } else { Severity::Fail };
    let declared: Vec<String> = submission
        .components
        .iter()
        .map(|c| format!("{} × {}", c.count as usize * units, c.formula))
        .collect();
    let words = if same {
        "as declared"
    } else {
        "not as declared"
    };
    Finding::new(
        Rule::Components,
        severity,
        format!(
            "molecules are {words}: found {}, declared {}",
            show_kinds(workup),
            declared.join(", ")
        ),
    )
    .at("component")
    .because(
        LikelyCause::WrongStructure,
        "check the components, or the positions of the atoms",
    )
}

fn density(workup: &Workup<'_>) -> Finding {
    let limits = &workup.limits.structure;
    let density = workup.crystal.density_g_per_cm3();
    let outside = |range: [f64; 2]| density < range[0] || density > range[1];
    let severity = if outside(limits.density_fail_g_per_cm3) {
        Severity::Fail
    } else if outside(limits.density_caution_g_per_cm3) {
        Severity::Caution
    } else {
        Severity::Pass
    };
    let [least, largest] = limits.density_caution_g_per_cm3;
    let limit = if density < least { least } else { largest };
    Finding::new(
        Rule::Density,
        severity,
        format!("density {density:.3} g/cm³"),
    )
    .measured(density, Some(limit), "g/cm³")
    .because(
        LikelyCause::WrongStructure,
        "check crystal.length_unit and the cell vectors",
    )
}

fn masses(workup: &Workup<'_>) -> Finding {
    if !workup.submission.masses_declared {
        let message = "standard atomic weights are used";
        return Finding::new(Rule::Masses, Severity::Pass, message);
    }
    let limits = &workup.limits.structure;
    let (mut worst, mut atom) = (0.0, 0);
    for (i, (element, mass)) in workup
        .crystal
        .elements()
        .iter()
        .zip(workup.crystal.masses_u())
        .enumerate()
    {
        let standard = element.standard_weight_u().unwrap_or(*mass);
        let deviation = nearest_mass_deviation(*element, *mass, standard);
        if deviation > worst {
            (worst, atom) = (deviation, i);
        }
    }
    let element = workup.crystal.elements()[atom];
    let mass = workup.crystal.masses_u()[atom];
    let limit = Limit {
        caution: limits.mass_caution_relative,
        fail: limits.mass_fail_relative,
    };
    Finding::graded(Rule::Masses, worst, "", limit)
        .at(format!("atom {atom} ({element}), {mass} u"))
        .saying("largest deviation of a declared mass from the standard weight (of hydrogen, from its nearest isotope)")
        .because(
            LikelyCause::WrongMasses,
            "check that masses are in unified atomic mass units and in the order of the atoms; write D for deuterium",
        )
}

/// Relative deviation of a mass from the standard weight; for hydrogen from the nearest of its three isotopes.
fn nearest_mass_deviation(element: Element, mass_u: f64, standard_u: f64) -> f64 {
    /// Nuclide masses of deuterium and tritium, u (AME 2020).
    const HEAVY_HYDROGEN_U: [f64; 2] = [2.014_101_778, 3.016_049_281];
    let deviation = |reference: f64| (mass_u / reference - 1.0).abs();
    let heavy = HEAVY_HYDROGEN_U.iter().map(|m| deviation(*m));
    match element.atomic_number() {
        1 => heavy.fold(deviation(standard_u), f64::min),
        _ => deviation(standard_u),
    }
}

fn space_group(workup: &Workup<'_>) -> Finding {
    let tolerance = workup.limits.structure.symmetry_tolerance_angstrom;
    match &workup.group_error {
        Some(error) => Finding::new(
            Rule::SpaceGroup,
            Severity::Caution,
            format!("{error}; the crystal is examined without symmetry"),
        )
        .because(
            LikelyCause::WrongStructure,
            "check the cell and the positions",
        ),
        None => Finding::new(
            Rule::SpaceGroup,
            Severity::Pass,
            format!(
                "space group {} (no. {}) at a tolerance of {tolerance} Å, {} operations in the cell",
                workup.group.symbol,
                workup.group.number,
                workup.group.operations.len()
            ),
        ),
    }
}
