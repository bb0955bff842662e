//! What follows from the findings.
//!
//! Reject on any finding that fails; hold when a cluster is possibly physical, when the bracket is too wide, or when a
//! setting that the policy requires is missing; accept the rest, with cautions. A weak numerical tag does not hold an
//! upload: its uncertainty is in the bracket, and the bracket is shown wherever the number is.

use crate::checks::settings::missing_required;
use crate::report::{Finding, FreeEnergy, LikelyCause, Rule, Severity, SoftMode, Tag, Verdict};
use crate::workup::Workup;

/// Verdict and its reasons, worst first.
pub(crate) fn decide(
    workup: &Workup<'_>,
    findings: &[Finding],
    soft_modes: &[SoftMode],
    width: Option<f64>,
) -> (Verdict, Vec<String>) {
    let failed: Vec<String> = findings
        .iter()
        .filter(|f| f.severity == Severity::Fail)
        .map(|f| format!("{}: {}", f.rule.name(), f.message))
        .collect();
    if !failed.is_empty() {
        return (Verdict::Reject, failed);
    }
    let mut reasons = Vec::new();
    for mode in soft_modes.iter().filter(|m| m.tag == Tag::PossiblyPhysical) {
        reasons.push(format!(
            "possibly physical soft modes, down to {:.1}i cm⁻¹: {}",
            -mode.lowest_wavenumber_per_cm, mode.reason
        ));
    }
    let limit = workup.limits.bracket.half_width_hold_kj_per_mol;
    if let Some(width) = width.filter(|w| *w > limit) {
        reasons.push(format!(
            "the bracket of the free energy is ±{width:.2} kJ/mol wide per formula unit; up to {limit} is accepted"
        ));
    }
    for key in missing_required(workup) {
        reasons.push(format!(
            "settings.{key} is required for this kind of method and is missing"
        ));
    }
    let verdict = if reasons.is_empty() {
        Verdict::Accept
    } else {
        Verdict::Hold
    };
    (verdict, reasons)
}

/// Half width of the bracket at the policy's judged temperature, kJ/mol per formula unit.
pub(crate) fn judged_half_width(workup: &Workup<'_>, energies: &[FreeEnergy]) -> Option<f64> {
    judged(workup, energies).map(|f| 0.5 * (f.upper_kj_per_mol - f.lower_kj_per_mol))
}

/// The free energy at the policy's judged temperature, where defined.
pub(crate) fn judged<'a>(
    workup: &Workup<'_>,
    energies: &'a [FreeEnergy],
) -> Option<&'a FreeEnergy> {
    let temperature_k = workup.limits.bracket.judged_temperature_k;
    energies
        .iter()
        .find(|f| f.defined && (f.temperature_k - temperature_k).abs() < f64::EPSILON)
}

/// The finding that sums up the soft modes.
pub(crate) fn soft_mode_finding(soft_modes: &[SoftMode]) -> Finding {
    let physical = soft_modes.iter().any(|m| m.tag == Tag::PossiblyPhysical);
    let lowest = soft_modes
        .iter()
        .map(|m| m.lowest_wavenumber_per_cm)
        .fold(f64::INFINITY, f64::min);
    if soft_modes.is_empty() {
        return Finding::new(Rule::SoftModes, Severity::Pass, "no soft modes on the mesh");
    }
    let (cause, remedy) = if physical {
        (
            LikelyCause::Instability,
            "follow the softest mode: displace along its pattern, relax, and submit the lower form; a tag is evidence, not proof",
        )
    } else {
        (
            LikelyCause::SmallSupercell,
            "a supercell that samples the wave vectors of the clusters decides; nothing was dropped, and the bracket holds the \
             uncertainty",
        )
    };
    let count = soft_modes.len();
    let clusters = if count == 1 { "cluster" } else { "clusters" };
    Finding::new(
        Rule::SoftModes,
        Severity::Caution,
        format!("{count} {clusters} of soft modes on the mesh"),
    )
    .measured(lowest, Some(0.0), "cm⁻¹")
    .because(cause, remedy)
}

/// The finding that says how wide the bracket is.
pub(crate) fn bracket_finding(workup: &Workup<'_>, width: Option<f64>) -> Finding {
    let limit = workup.limits.bracket.half_width_hold_kj_per_mol;
    let Some(width) = width else {
        return Finding::new(
            Rule::BracketWidth,
            Severity::Caution,
            "possibly physical soft modes leave no harmonic free energy, and no bracket",
        )
        .because(LikelyCause::Instability, "see soft-modes");
    };
    let severity = if width > limit {
        Severity::Caution
    } else {
        Severity::Pass
    };
    Finding::new(
        Rule::BracketWidth,
        severity,
        "half width of the bracket at the judged temperature; it holds noise, aliasing and residual force, not the level of \
         theory, anharmonicity or expansion",
    )
    .measured(width, Some(limit), "kJ/mol")
    .because(LikelyCause::SmallSupercell, "a larger supercell, tighter forces and a better relaxed geometry narrow it")
}
