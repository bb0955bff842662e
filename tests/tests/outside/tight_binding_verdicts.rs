//! Verdicts and tags of real packages under the built-in policy, against what is known of them (`fixtures/README.md`):
//! energies along the displaced pattern in the same or a larger supercell say which soft modes are real.

use rayon::prelude::*;
use tarehouse_assay::report::{SoftMode, Strength, Tag, Verdict};
use tarehouse_assay::{Policy, Report, Unwatched, examine, projected_constants};

use crate::service::dynamics_of;
use crate::tight_binding::{at_gamma, submission};

use Verdict::{Accept, Hold, Reject};

/// Verdicts that are right for a package.
type Allowed = &'static [Verdict];

/// By width: accepted or held by the width of the bracket, never rejected.
const BY_WIDTH: Allowed = &[Accept, Hold];

fn report(name: &str) -> Report {
    let policy = Policy::built_in().unwrap();
    examine(&submission(name), &policy, &Unwatched).unwrap()
}

/// Examines the packages and compares their verdicts.
fn reports(packages: &[(&'static str, Allowed)]) -> Vec<(&'static str, Report)> {
    let reports: Vec<_> = packages
        .par_iter()
        .map(|(name, allowed)| (*name, *allowed, report(name)))
        .collect();
    reports
        .into_iter()
        .map(|(name, allowed, report)| {
            let (verdict, reasons) = (report.verdict, &report.verdict_reasons);
            assert!(
                allowed.contains(&verdict),
                "{name}: {verdict:?}, {reasons:?}"
            );
            (name, report)
        })
        .collect()
}

fn is_strongly_physical(mode: &SoftMode) -> bool {
    mode.tag == Tag::PossiblyPhysical && mode.strength == Strength::Strong
}

#[test]
fn interpolated_soft_modes_are_weakly_numerical() {
    // co2 and nh3: the pattern becomes stable in a larger supercell. The small ones sample Γ only.
    let reports = reports(&[
        ("co2-clean", BY_WIDTH),
        ("co2-222", BY_WIDTH),
        ("co2-small", BY_WIDTH),
        ("hcn-i4mm-small", BY_WIDTH),
        ("nh3-clean", BY_WIDTH),
    ]);
    for (name, report) in reports {
        assert!(!report.soft_modes.is_empty(), "{name}");
        for mode in &report.soft_modes {
            let tag = (mode.tag, mode.strength);
            assert_eq!(
                tag,
                (Tag::Numerical, Strength::Weak),
                "{name} at {:?}",
                mode.q
            );
        }
        assert!(report.free_energy.iter().all(|f| f.defined), "{name}");
    }
}

#[test]
fn rounded_forces_leave_no_strong_claim_of_an_instability() {
    let reports = reports(&[
        ("co2-rounded", &[Reject]),
        ("co2-rounded-enforced", &[Reject]),
        ("nh3-rounded", BY_WIDTH),
        ("nh3-rounded-enforced", BY_WIDTH),
    ]);
    for (name, report) in reports {
        assert!(!report.soft_modes.is_empty(), "{name}");
        for mode in &report.soft_modes {
            assert_eq!(mode.tag, Tag::Numerical, "{name} at {:?}", mode.q);
        }
    }
}

#[test]
fn true_instability_of_an_expanded_cell_is_possibly_physical_at_gamma() {
    let [(name, report)] = reports(&[("nh3-expanded", &[Hold])]).try_into().unwrap();
    assert!(!report.soft_modes.is_empty());
    // Every soft point belongs to a cluster, and so does Γ, which is soft: see below.
    for mode in &report.soft_modes {
        assert_eq!(mode.tag, Tag::PossiblyPhysical, "{name} at {:?}", mode.q);
        assert!(mode.commensurate && mode.lowest_wavenumber_per_cm < -38.0);
    }
    assert!(report.free_energy.iter().all(|f| !f.defined));
    // Known are −40 and, in 2×2×2, −38 cm⁻¹.
    let submission = submission(name);
    let constants = projected_constants(&submission, &Policy::built_in().unwrap());
    let dynamics = dynamics_of(&submission.crystal, &constants);
    let (_, optical) = at_gamma(&dynamics);
    let lowest = optical.into_iter().fold(f64::INFINITY, f64::min);
    assert!((-46.0..-36.0).contains(&lowest), "{lowest}");
}

#[test]
fn soft_libration_is_possibly_physical_and_held() {
    // A double well of 0.003 to 0.05 meV: far below kT, but there. The smaller supercells make it deeper.
    let reports = reports(&[
        ("hcn-i4mm-clean", &[Hold]),
        ("hcn-i4mm-tinyrestart", &[Hold]),
        ("hcn-i4mm-unrelaxed", &[Hold]),
        ("hcn-i4mm-222", &[Hold]),
        ("hcn-i4mm-conv222", &[Hold]),
    ]);
    for (name, report) in reports {
        let physical = report
            .soft_modes
            .iter()
            .filter(|m| m.tag == Tag::PossiblyPhysical);
        assert!(physical.count() > 0, "{name}");
        assert!(report.soft_modes.iter().any(|m| m.commensurate), "{name}");
    }
}

#[test]
fn soft_libration_near_its_noise_is_not_accepted() {
    // Undecidable: either tag, rejected or held, but no strong claim.
    let [(name, report)] = reports(&[("hcn-i4mm-loose", &[Reject, Hold])])
        .try_into()
        .unwrap();
    assert!(!report.soft_modes.is_empty(), "{name}");
    assert!(
        !report.soft_modes.iter().any(is_strongly_physical),
        "{name}"
    );
}

#[test]
fn noise_behind_perfect_sums_is_numerical_and_rejected() {
    // The only trace is a pair asymmetry of 0.4 eV/Å².
    let reports = reports(&[
        ("hcn-i4mm-tiny", &[Reject]),
        ("hcn-i4mm-tiny-swapped", &[Reject]),
        ("hcn-i4mm-tiny-enforced", &[Reject]),
    ]);
    for (name, report) in reports {
        let deepest = report
            .soft_modes
            .iter()
            .min_by(|a, b| {
                a.lowest_wavenumber_per_cm
                    .total_cmp(&b.lowest_wavenumber_per_cm)
            })
            .unwrap();
        let wavenumber = deepest.lowest_wavenumber_per_cm;
        assert!((wavenumber + 152.0).abs() < 2.0, "{name} {wavenumber}");
        assert!(
            deepest.q.iter().all(|q| (q.abs() - 0.5).abs() < 1e-9),
            "{name}"
        );
        assert_eq!(deepest.tag, Tag::Numerical, "{name}");
        let why = report.verdict_reasons.join(" ");
        assert!(why.contains("pair-symmetry"), "{name}: {why}");
    }
}
