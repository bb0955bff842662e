//! Blunders that a naive check passes: wrong unit, permuted axes or atoms, sign, index order, supercell, zeroed or
//! duplicated blocks. Each finding names the likely one.
//!
//! What gives them away: along a bond the longitudinal constant is 8 to 120 eV/Å² and is the stiffest direction of its
//! block; the strongest block of a bonded atom belongs to a near neighbour; self blocks are positive; constants die out with
//! distance, faster than in any mirrored or permuted reading of the same array.

mod arrangement;

use tarehouse_physics::force_constants::ForceConstantUnit;

use crate::report::{Finding, LikelyCause, Rule, Severity};
use crate::workup::Workup;
use arrangement::{Arrangement, Bonds};

pub(crate) fn check(workup: &Workup<'_>) -> Vec<Finding> {
    let bonds = Bonds::find(workup);
    vec![
        self_constants(workup),
        bond_stiffness(workup, &bonds),
        locality(workup, &bonds),
        block_pattern(workup, &bonds),
    ]
}

fn self_constants(workup: &Workup<'_>) -> Finding {
    let raw = &workup.submission.constants;
    let home = raw.home_cell();
    let trace = |i: usize| raw.block(home, i, i).trace() / 3.0;
    let n = raw.atom_count();
    let worst = (0..n)
        .min_by(|a, b| trace(*a).total_cmp(&trace(*b)))
        .unwrap_or(0);
    let negative = (0..n).filter(|i| trace(*i) <= 0.0).count();
    let severity = if negative > 0 {
        Severity::Fail
    } else {
        Severity::Pass
    };
    let (cause, remedy) = if negative == n {
        (
            LikelyCause::SignError,
            "turn the sign: a constant is plus the second derivative of the energy, minus that of the force",
        )
    } else {
        (
            LikelyCause::ZeroedBlock,
            "compute the missing displacements",
        )
    };
    Finding::new(
        Rule::SelfConstants,
        severity,
        format!("{negative} of {n} atoms are not held by their own constants; the smallest is {:.3} eV/Å²", trace(worst)),
    )
    .measured(trace(worst), Some(0.0), "eV/Å²")
    .at(format!("atom {worst} ({})", workup.crystal.elements()[worst]))
    .because(cause, remedy)
}

fn bond_stiffness(workup: &Workup<'_>, bonds: &Bonds) -> Finding {
    let rule = Rule::BondStiffness;
    if bonds.is_empty() {
        return Finding::new(
            rule,
            Severity::Pass,
            "no molecular bonds whose stiffness could be judged",
        );
    }
    let limits = &workup.limits.blunders;
    let given = Arrangement::as_given(&workup.submission.constants);
    let share = bonds.share_stiff(&given, limits, 1.0);
    let median = bonds.median_constant(&given);
    let hydrogen = bonds.median_constant_to_hydrogen(&given);
    let [least, largest] = limits.bond_to_hydrogen_ev_per_ang2;
    let hydrogen_off = hydrogen.is_some_and(|k| k < least || k > largest);
    let bad = share < limits.bond_share_min || hydrogen_off;
    let severity = if bad { Severity::Fail } else { Severity::Pass };
    let (cause, remedy) = if bad {
        bond_blunder(workup, bonds, &given)
    } else {
        Default::default()
    };
    Finding::new(
        rule,
        severity,
        format!(
            "{:.0} % of {} bonds have a longitudinal constant of the usual size along the bond; the median is {median:.1} \
             eV/Å²",
            100.0 * share,
            bonds.len()
        ),
    )
    .measured(share, Some(limits.bond_share_min), "")
    .because(cause.unwrap_or(LikelyCause::Unknown), remedy)
}

/// The reading of the array under which bonds look as they should.
fn bond_blunder(
    workup: &Workup<'_>,
    bonds: &Bonds,
    given: &Arrangement<'_>,
) -> (Option<LikelyCause>, String) {
    let limits = &workup.limits.blunders;
    let median = bonds.median_constant(given);
    if median < 0.0 && bonds.share_stiff(&given.negated(), limits, 1.0) >= limits.bond_share_min {
        return (
            Some(LikelyCause::SignError),
            "turn the sign of all constants".to_owned(),
        );
    }
    let along = bonds.share_along(given, limits);
    let permuted = given
        .axis_permutations()
        .map(|a| bonds.share_along(&a, limits));
    let best = permuted.into_iter().fold(0.0, f64::max);
    if best > along + limits.alternative_gain {
        let remedy =
            "use the Cartesian axes of cell_vectors in the constants, in the order x, y, z";
        return (Some(LikelyCause::PermutedAxes), remedy.to_owned());
    }
    if along >= limits.bond_share_min {
        let declared = workup.submission.declaration.unit;
        let fits = |unit: &ForceConstantUnit| {
            let factor = unit.in_ev_per_ang2() / declared.in_ev_per_ang2();
            *unit != declared && bonds.share_stiff(given, limits, factor) >= limits.bond_share_min
        };
        let units: Vec<&str> = ForceConstantUnit::ALL
            .iter()
            .filter(|u| fits(u))
            .map(|u| u.name())
            .collect();
        let remedy = match units.as_slice() {
            [] => format!("check constants.unit: {} was declared", declared.name()),
            names => format!(
                "check constants.unit: the values look like {}",
                names.join(" or ")
            ),
        };
        return (Some(LikelyCause::WrongUnit), remedy);
    }
    let remedy = "give constants and positions in the same order of atoms";
    (Some(LikelyCause::PermutedAtoms), remedy.to_owned())
}

fn locality(workup: &Workup<'_>, bonds: &Bonds) -> Finding {
    let limits = &workup.limits.blunders;
    let raw = &workup.submission.constants;
    let given = Arrangement::as_given(raw);
    let share = bonds.share_near(&given, workup, limits.strong_block_distance_angstrom);
    let spread = given.mean_distance(workup);
    let alternatives = [
        (
            LikelyCause::SwappedIndexOrder,
            given.mirrored().mean_distance(workup),
        ),
        (
            LikelyCause::WrongSupercell,
            arrangement::best_supercell_reading(workup),
        ),
    ];
    let better = alternatives
        .into_iter()
        .filter(|(_, other)| *other < (1.0 - limits.locality_gain) * spread)
        .min_by(|a, b| a.1.total_cmp(&b.1));
    let far = share.is_some_and(|s| s < limits.strong_share_min);
    let severity = if far || better.is_some() {
        Severity::Fail
    } else {
        Severity::Pass
    };
    let (cause, remedy) = match better {
        Some((cause @ LikelyCause::SwappedIndexOrder, _)) => (
            cause,
            "read the other way round the constants die out sooner: check constants.first_index and the sign of the \
             translations",
        ),
        Some((cause, _)) => (
            cause,
            "with the axes of the supercell exchanged the constants die out sooner: check constants.supercell and the order \
             of translations",
        ),
        None => (
            LikelyCause::PermutedAtoms,
            "the strongest constants belong to distant atoms: give constants and positions in the same order of atoms",
        ),
    };
    let shown = share.map_or_else(
        || "no bonded atoms to judge".to_owned(),
        |s| {
            format!(
                "the strongest constant of {:.0} % of the bonded atoms belongs to a near neighbour",
                100.0 * s
            )
        },
    );
    Finding::new(
        Rule::Locality,
        severity,
        format!("{shown}; constants sit at {spread:.2} Å on average"),
    )
    .measured(share.unwrap_or(1.0), Some(limits.strong_share_min), "")
    .because(cause, remedy)
}

fn block_pattern(workup: &Workup<'_>, bonds: &Bonds) -> Finding {
    let raw = &workup.submission.constants;
    let found = arrangement::zeroed(workup, bonds)
        .map(|place| (LikelyCause::ZeroedBlock, place))
        .or_else(|| {
            arrangement::duplicated(workup).map(|place| (LikelyCause::DuplicatedBlock, place))
        });
    match found {
        None => Finding::new(
            Rule::BlockPattern,
            Severity::Pass,
            format!(
                "none of {} blocks is missing or stands twice",
                raw.blocks().len()
            ),
        ),
        Some((cause, place)) => {
            let words = match cause {
                LikelyCause::ZeroedBlock => "a block is zero where its partner is not",
                _ => "a block repeats another one exactly and breaks pair symmetry",
            };
            Finding::new(Rule::BlockPattern, Severity::Fail, words)
                .at(place)
                .because(
                    cause,
                    "check how the array was put together from the single displacements",
                )
        }
    }
}
