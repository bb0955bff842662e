//! Polar uploads through the whole examination.

use nalgebra::Matrix3;
use tarehouse_assay::report::{Report, Rule, Severity};
use tarehouse_assay::submission::{Dielectric, Submission};
use tarehouse_assay::{Policy, Unwatched, examine};
use tarehouse_demo_data::scenario;

fn submission() -> Submission {
    let entries = scenario::entries();
    let entry = entries
        .iter()
        .find(|e| e.name == "pelquonol-alpha")
        .unwrap();
    entry.build().unwrap().0
}

/// A coarse mesh: what is asked here does not need a fine one.
fn examined(submission: &Submission) -> Report {
    let text = Policy::built_in().unwrap().text;
    let coarse = text.replace("spacing_per_angstrom = 0.20", "spacing_per_angstrom = 0.60");
    assert_ne!(text, coarse);
    examine(submission, &Policy::parse(&coarse).unwrap(), &Unwatched).unwrap()
}

fn with_charges(charge: impl Fn(usize) -> f64) -> Submission {
    let mut polar = submission();
    let charges = (0..polar.crystal.atom_count()).map(|i| Matrix3::identity() * charge(i));
    polar.dielectric = Some(Dielectric {
        effective_charges: charges.collect(),
        permittivity: Matrix3::identity() * 2.5,
    });
    polar
}

fn free_energy_at_300_k(report: &Report) -> f64 {
    let point = report
        .free_energy
        .iter()
        .find(|f| (f.temperature_k - 300.0).abs() < 1e-9)
        .unwrap();
    assert!(point.defined);
    point.central_kj_per_mol
}

fn severity(report: &Report, rule: Rule) -> Severity {
    report
        .findings
        .iter()
        .find(|f| f.rule == rule)
        .unwrap()
        .severity
}

/// Identity: charges of zero set nothing apart.
#[test]
fn vanishing_charges_change_nothing() {
    let plain = free_energy_at_300_k(&examined(&submission()));
    let report = examined(&with_charges(|_| 0.0));
    assert!((free_energy_at_300_k(&report) - plain).abs() < 1e-6);
    assert_eq!(severity(&report, Rule::ChargeNeutrality), Severity::Pass);
}

/// Pick, Cohen & Martin, Phys. Rev. B 1, 910 (1970): effective charges sum to zero over the cell.
#[test]
fn charges_that_do_not_sum_to_zero_fail() {
    let report = examined(&with_charges(|_| 0.3));
    assert_eq!(severity(&report, Rule::ChargeNeutrality), Severity::Fail);
}

/// Atoms come as H, S, O, F in each molecule: opposite charges on neighbours.
#[test]
fn neutral_charges_split_optical_modes_by_direction() {
    let report = examined(&with_charges(|i| [0.4, 0.2, -0.4, -0.2][i % 4]));
    assert_eq!(severity(&report, Rule::ChargeNeutrality), Severity::Pass);
    let modes = &report.crystal.polar_modes;
    assert_eq!(modes.len(), 3);
    let optical = 3 * submission().crystal.atom_count() - 3;
    assert!(modes.iter().all(|m| m.wavenumbers_per_cm.len() == optical));
    // The macroscopic field adds Σ 4π (q̂·Z_i)²/(V ε m_i) > 0 to the trace in every direction; how it is shared differs.
    let spread = |a: usize, b: usize| {
        let pairs = modes[a]
            .wavenumbers_per_cm
            .iter()
            .zip(&modes[b].wavenumbers_per_cm);
        pairs.map(|(x, y)| (x - y).abs()).fold(0.0, f64::max)
    };
    assert!(
        spread(0, 1) > 1.0 && spread(1, 2) > 1.0,
        "{} {}",
        spread(0, 1),
        spread(1, 2)
    );
    free_energy_at_300_k(&report);
}
