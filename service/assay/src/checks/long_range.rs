//! The dipole–dipole part: what was declared, and what is missing.

use crate::report::{Finding, LikelyCause, Rule, Severity};
use crate::submission::LongRange;
use crate::workup::Workup;

pub(crate) fn check(workup: &Workup<'_>) -> Finding {
    let submission = workup.submission;
    let ionic = submission
        .components
        .iter()
        .any(|component| component.charge != 0);
    let removed = submission.declaration.long_range == LongRange::Removed;
    let (severity, message) = match (&submission.dielectric, removed, ionic) {
        (Some(_), _, _) => (
            Severity::Caution,
            "effective charges and permittivity are stored; this version does not separate the dipole–dipole part, so that \
             branches near Γ lack the splitting of longitudinal and transverse modes",
        ),
        (None, true, _) => (
            Severity::Caution,
            "the dipole–dipole part was removed from the constants, and without charges and permittivity it cannot be put back",
        ),
        (None, false, true) => (
            Severity::Caution,
            "the components carry charges, but no effective charges and permittivity are given: the interpolation between \
             sampled wave vectors misses the slow decay of the dipole–dipole part",
        ),
        (None, false, false) => (
            Severity::Pass,
            "no effective charges given; for polar molecules the interpolation misses the slow decay of the dipole–dipole part",
        ),
    };
    Finding::new(Rule::LongRange, severity, message)
        .at("dielectric")
        .because(
            LikelyCause::MissingSetting,
            "give [dielectric] with effective charges and permittivity",
        )
}
