//! Pair symmetry, translation sums, rotation sum and space-group residual of the raw constants: absolute, relative to the
//! largest self constant, and where they are worst.
//!
//! Common practice sets the scale: an O–H stretch near 3600 cm⁻¹ beside a lattice mode of 10 cm⁻¹ is 360:1 in frequency
//! and about 130 000:1 in force constant, so that one part in ten on the soft one needs about one part in a million on
//! the stiff one. Sums over the displaced and over the response atom are kept apart: codes that remove the net force make
//! the one over the response atom vanish by construction.

use nalgebra::Matrix3;
use tarehouse_physics::ForceConstants;
use tarehouse_physics::projection::{RotationSum, pair_symmetric, space_group_symmetric};

use super::Limit;
use crate::noise::{PAIR_SYMMETRY, SPACE_GROUP, TRANSLATION_SUM, rms};
use crate::report::{Finding, LikelyCause, Rule, Severity};
use crate::submission::Differences;
use crate::workup::Workup;

pub(crate) fn check(workup: &Workup<'_>) -> Vec<Finding> {
    let mut findings = vec![
        pair_symmetry(workup),
        translation_sum(workup, Side::Displaced),
        translation_sum(workup, Side::Response),
        rotation_sum(workup),
        space_group(workup),
    ];
    findings.extend(enforced(workup));
    findings
}

/// A block as people read it.
pub(crate) fn show_block(
    workup: &Workup<'_>,
    cell: usize,
    displaced: usize,
    response: usize,
) -> String {
    let elements = workup.crystal.elements();
    let [x, y, z] = workup.projected.supercell().translations()[cell];
    format!(
        "atom {displaced} ({}) displaced, atom {response} ({}) in cell [{x}, {y}, {z}]",
        elements[displaced], elements[response]
    )
}

fn pair_symmetry(workup: &Workup<'_>) -> Finding {
    let raw = &workup.submission.constants;
    let (worst, flat) = largest_difference(raw, &pair_symmetric(raw));
    let sums = &workup.limits.sums;
    // The symmetric mean lies halfway: the asymmetry between the two is twice the distance to it.
    let asymmetry = 2.0 * worst;
    let limits = Limit {
        caution: sums.pair_symmetry_caution,
        fail: sums.pair_symmetry_fail,
    };
    relative_finding(workup, Rule::PairSymmetry, asymmetry, limits)
        .at(place(workup, flat))
        .saying(format!(
            "constants of a pair differ by up to {asymmetry:.1e} eV/Å² when the two atoms are exchanged"
        ))
        .because(
            likely_cause(workup),
            "tighten the SCF and density grid; with central differences try half the displacement: an asymmetry that \
             falls fourfold is truncation, one that does not is noise",
        )
}

#[derive(Clone, Copy, PartialEq)]
enum Side {
    Displaced,
    Response,
}

fn translation_sum(workup: &Workup<'_>, side: Side) -> Finding {
    let raw = &workup.submission.constants;
    let n = raw.atom_count();
    let mut sums = vec![Matrix3::zeros(); n];
    for (flat, block) in raw.blocks().iter().enumerate() {
        let (i, j) = (flat / n % n, flat % n);
        // The sum over one side is labelled by the atom on the other.
        sums[if side == Side::Displaced { j } else { i }] += block;
    }
    let (atom, worst) = sums
        .iter()
        .map(Matrix3::amax)
        .enumerate()
        .fold(
            (0, 0.0),
            |best, next| if next.1 > best.1 { next } else { best },
        );
    let limits = &workup.limits.sums;
    let limits = Limit {
        caution: limits.translation_caution,
        fail: limits.translation_fail,
    };
    let (rule, over, on) = match side {
        Side::Displaced => (Rule::TranslationSumDisplaced, "displaced", "force on"),
        Side::Response => (Rule::TranslationSumResponse, "response", "displacing"),
    };
    relative_finding(workup, rule, worst, limits)
        .at(format!("{on} atom {atom} ({})", workup.crystal.elements()[atom]))
        .saying(format!(
            "the sum over all {over} atoms should vanish and leaves up to {worst:.1e} eV/Å²"
        ))
        .because(
            likely_cause(workup),
            "write forces with all their digits, tighten the SCF, and use a finer density grid: a grid that does not \
             move with the atoms leaves a net force",
        )
}

fn rotation_sum(workup: &Workup<'_>) -> Finding {
    let raw = &workup.submission.constants;
    let sums = RotationSum::new(raw, &workup.crystal, &workup.images).apply(raw);
    let n = raw.atom_count();
    let mut scale = vec![0.0; n];
    for (flat, block) in raw.blocks().iter().enumerate() {
        let (l, i, j) = (flat / (n * n), flat / n % n, flat % n);
        scale[i] += block.amax() * workup.images.distance(&workup.crystal, l, i, j);
    }
    let relative = |k: usize| sums[k].amax() / f64::max(scale[k / 3], f64::MIN_POSITIVE);
    let worst = (0..sums.len())
        .max_by(|a, b| relative(*a).total_cmp(&relative(*b)))
        .unwrap_or(0);
    let limits = Limit::caution_only(workup.limits.sums.rotation_caution);
    Finding::graded(Rule::RotationSum, relative(worst), "", limits)
        .at(format!("displacing atom {} ({})", worst / 3, workup.crystal.elements()[worst / 3]))
        .saying(format!(
            "turning the crystal should cost nothing; the sum leaves {:.1e} eV/Å, compared with Σ|Φ||x|. Aliasing in the \
             supercell dominates it, so that it never fails",
            sums[worst].amax()
        ))
        .because(LikelyCause::SmallSupercell, "compare with a larger supercell")
}

fn space_group(workup: &Workup<'_>) -> Finding {
    let raw = &workup.submission.constants;
    let (worst, flat) = largest_difference(raw, &space_group_symmetric(raw, &workup.group));
    let kept = workup.group.keeping(raw.supercell()).operations.len();
    let sums = &workup.limits.sums;
    let limits = Limit {
        caution: sums.space_group_caution,
        fail: sums.space_group_fail,
    };
    relative_finding(workup, Rule::SpaceGroupResidual, worst, limits)
        .at(place(workup, flat))
        .saying(format!(
            "the {kept} operations of {} that keep the supercell move constants by up to {worst:.1e} eV/Å²",
            workup.group.symbol
        ))
        .because(
            likely_cause(workup),
            "check that structure and constants belong to the same cell, axes and atom order; then as for pair symmetry",
        )
}

/// An absolute residual held against the largest self constant.
fn relative_finding(workup: &Workup<'_>, rule: Rule, absolute: f64, limits: Limit) -> Finding {
    let scale = workup.submission.constants.largest_self_constant();
    let relative = if scale > 0.0 {
        absolute / scale
    } else {
        f64::INFINITY
    };
    Finding::graded(rule, relative, "", limits)
}

fn largest_difference(a: &ForceConstants, b: &ForceConstants) -> (f64, usize) {
    a.blocks()
        .iter()
        .zip(b.blocks())
        .map(|(x, y)| (x - y).amax())
        .enumerate()
        .fold(
            (0.0, 0),
            |best, (flat, d)| if d > best.0 { (d, flat) } else { best },
        )
}

fn place(workup: &Workup<'_>, flat: usize) -> String {
    let n = workup.crystal.atom_count();
    show_block(workup, flat / (n * n), flat / n % n, flat % n)
}

/// What usually leaves such residuals, given the settings and the pattern of the values.
fn likely_cause(workup: &Workup<'_>) -> LikelyCause {
    let settings = &workup.submission.settings;
    let policy = settings.kind.map(|kind| workup.limits.settings.of(kind));
    let scf_limit = policy.and_then(|p| p.scf_tolerance_caution_ev_per_atom);
    let loose_scf = matches!(
        (settings.scf_tolerance_ev_per_atom, scf_limit),
        (Some(used), Some(limit)) if used > limit
    );
    if workup.noise.summary.rounded {
        LikelyCause::RoundedForces
    } else if settings.differences == Some(Differences::Forward) {
        LikelyCause::DifferenceTruncation
    } else if loose_scf || settings.scf_tolerance_ev_per_atom.is_none() {
        LikelyCause::ScfNoise
    } else {
        LikelyCause::DifferenceTruncation
    }
}

/// One caution per family whose evidence was removed before submission.
fn enforced(workup: &Workup<'_>) -> Vec<Finding> {
    let noise = &workup.noise.summary;
    let limit = workup.limits.sums.erased_relative;
    let scale = rms(&workup.submission.constants);
    let words = |family: &str| match family {
        PAIR_SYMMETRY => "pair symmetry was enforced before submission",
        TRANSLATION_SUM => "the sum rule was enforced before submission",
        SPACE_GROUP if noise.symmetry_expanded => {
            "the constants were generated by the space group from inequivalent displacements"
        }
        _ => "the space group was enforced before submission",
    };
    if workup.noise.erased.is_empty() {
        let message = "no condition was enforced before submission: the constants are raw";
        return vec![Finding::new(Rule::Enforced, Severity::Pass, message)];
    }
    let finding = |(family, sigma): &(&'static str, f64)| {
        let expected = *family == SPACE_GROUP && noise.symmetry_expanded;
        let severity = if expected {
            Severity::Pass
        } else {
            Severity::Caution
        };
        let message = format!("{}: the evidence of its noise is gone", words(family));
        Finding::new(Rule::Enforced, severity, message)
            .measured(sigma / scale, Some(limit), "of the rms constant")
            .at(format!("{family}, rms constant {scale:.2e} eV/Å²"))
            .because(LikelyCause::EvidenceErased, "submit raw constants")
    };
    workup.noise.erased.iter().map(finding).collect()
}
