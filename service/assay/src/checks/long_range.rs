//! The dipole–dipole part: what was declared, what was done with it, and what is missing; and whether the effective
//! charges sum to zero.

use super::Limit;
use crate::polar::Polar;
use crate::report::{Finding, LikelyCause, Rule, Severity};
use crate::submission::LongRange;
use crate::workup::Workup;

pub(crate) fn check(workup: &Workup<'_>) -> Vec<Finding> {
    let mut findings = vec![long_range(workup).at("dielectric")];
    findings.extend(workup.polar.as_ref().map(|polar| neutrality(workup, polar)));
    findings
}

fn long_range(workup: &Workup<'_>) -> Finding {
    let removed = workup.submission.declaration.long_range == LongRange::Removed;
    match workup.polar.as_ref().map(|polar| &polar.part) {
        Some(Ok(_)) => Finding::new(Rule::LongRange, Severity::Pass, separated(removed)),
        Some(Err(reason)) => unusable(reason, removed),
        None => without_charges(workup, removed),
    }
}

fn separated(removed: bool) -> &'static str {
    if removed {
        "the dipole–dipole part that was removed is put back at every wave vector, with the term of the direction at Γ"
    } else {
        "the dipole–dipole part is set apart, interpolated by itself, and has the term of the direction at Γ"
    }
}

/// The permittivity is of no use. Constants that hold the dipole–dipole part can do without; others cannot.
fn unusable(reason: &str, removed: bool) -> Finding {
    let severity = if removed {
        Severity::Fail
    } else {
        Severity::Caution
    };
    let message = format!("the dipole–dipole part cannot be computed: {reason}");
    Finding::new(Rule::LongRange, severity, message).because(
        LikelyCause::Unknown,
        "give the relative electronic permittivity, with clamped ions, in the axes of the cell vectors",
    )
}

fn without_charges(workup: &Workup<'_>, removed: bool) -> Finding {
    let submission = workup.submission;
    let ionic = submission
        .components
        .iter()
        .any(|component| component.charge != 0);
    let (severity, message) = if removed {
        (
            Severity::Caution,
            "the dipole–dipole part was removed from the constants, and without charges and permittivity it cannot be put back",
        )
    } else if ionic {
        (
            Severity::Caution,
            "the components carry charges, but no effective charges and permittivity are given: the interpolation between \
             sampled wave vectors misses the slow decay of the dipole–dipole part",
        )
    } else {
        (
            Severity::Pass,
            "no effective charges given; for polar molecules the interpolation misses the slow decay of the dipole–dipole part",
        )
    };
    Finding::new(Rule::LongRange, severity, message).because(
        LikelyCause::MissingSetting,
        "give [dielectric] with effective charges and permittivity",
    )
}

/// Σ Z = 0 (Pick, Cohen & Martin 1970), judged on the charges as given.
fn neutrality(workup: &Workup<'_>, polar: &Polar) -> Finding {
    let limits = &workup.limits.charges;
    let limits = Limit {
        caution: limits.neutrality_caution,
        fail: limits.neutrality_fail,
    };
    Finding::graded(Rule::ChargeNeutrality, polar.neutrality_residual, "", limits)
        .at("effective_charges.npy")
        .saying(format!(
            "effective charges should sum to zero; symmetry and neutrality moved them by at most {:.1e} e before use",
            polar.charge_shift
        ))
        .because(
            LikelyCause::LooseSetting,
            "check order, sign and unit of the charges; converge the response calculation in electronic sampling and cut-off",
        )
}
