//! What to do next: for each part of the bracket, and for each finding that is not a matter of width, the setting that is
//! the likely limit and what to try. Ordered by effect on the bracket.

pub(crate) mod next_supercell;

use crate::report::{
    BracketParts, Finding, LikelyCause, Remedy, Rule, Severity, SoftMode, Strength, Tag,
};
use crate::submission::{Differences, Scheme};
use crate::workup::Workup;

/// All remedies, largest effect first; those that are not a matter of width come last, in the order of the findings.
pub(crate) fn remedies(
    workup: &Workup<'_>,
    parts: Option<&BracketParts>,
    findings: &[Finding],
    soft_modes: &[SoftMode],
) -> Vec<Remedy> {
    let mut remedies = Vec::new();
    if let Some(parts) = parts {
        let width = parts.half_width_kj_per_mol();
        let floor = parts.floor_kj_per_mol;
        let worth = |part: f64| part > workup.limits.bracket.remedy_share * width && part > floor;
        let noise = parts.noise_kj_per_mol + parts.bias_kj_per_mol;
        if worth(noise) {
            remedies.push(against_noise(workup, noise));
        }
        if worth(parts.alias_kj_per_mol) {
            remedies.push(larger_supercell(
                workup,
                soft_modes,
                Some(parts.alias_kj_per_mol),
            ));
        }
        if worth(parts.residual_force_kj_per_mol) {
            remedies.push(better_geometry(workup, parts.residual_force_kj_per_mol));
        }
    }
    remedies.sort_by(|a, b| {
        b.effect_kj_per_mol
            .unwrap_or(0.0)
            .total_cmp(&a.effect_kj_per_mol.unwrap_or(0.0))
    });
    let open = soft_modes.iter().any(|m| m.strength == Strength::Weak);
    if open && !remedies.iter().any(|r| r.setting == SUPERCELL) {
        remedies.push(larger_supercell(workup, soft_modes, None));
    }
    let stands = findings
        .iter()
        .filter(|f| f.severity != Severity::Pass && is_own_matter(f));
    remedies.extend(stands.map(|f| Remedy {
        setting: setting_of(f),
        advice: f.remedy.clone(),
        effect_kj_per_mol: None,
    }));
    remedies
}

const SUPERCELL: &str = "constants.supercell";

/// Findings whose remedy is not already one of the bracket's.
fn is_own_matter(finding: &Finding) -> bool {
    let of_width = matches!(
        finding.rule,
        Rule::BracketWidth
            | Rule::SupercellSize
            | Rule::Reach
            | Rule::RotationSum
            | Rule::ElasticStability
    );
    !of_width && !finding.remedy.is_empty() && finding.likely_cause != LikelyCause::SmallSupercell
}

fn setting_of(finding: &Finding) -> String {
    let is_key = finding.location.contains('.') && !finding.location.contains(' ');
    if is_key {
        finding.location.clone()
    } else {
        finding.rule.name().to_owned()
    }
}

/// Which setting limits the noise: what the signatures and the declared settings point to, in that order.
fn against_noise(workup: &Workup<'_>, effect: f64) -> Remedy {
    let settings = &workup.submission.settings;
    let policy = settings.kind.map(|kind| workup.limits.settings.of(kind));
    let scf_limit = policy.and_then(|p| p.scf_tolerance_caution_ev_per_atom);
    let least_step = policy
        .and_then(|p| p.displacement_angstrom)
        .map(|range| range[0]);
    let least_bits = policy.and_then(|p| p.float_bits_min);
    let (setting, advice) = if workup.noise.summary.rounded {
        (
            "forces",
            "write forces with all their digits: the constants are multiples of one quantum",
        )
    } else if settings
        .float_bits
        .zip(least_bits)
        .is_some_and(|(bits, least)| bits < least)
    {
        ("settings.float_bits", "compute forces in double precision")
    } else if settings.differences == Some(Differences::Forward) {
        (
            "settings.differences",
            "use central differences: the third-order term cancels",
        )
    } else if settings
        .displacement_angstrom
        .zip(least_step)
        .is_some_and(|(h, least)| h < least)
    {
        (
            "settings.displacement_angstrom",
            "use a displacement near 0.01 Å: the noise of the forces is divided by it",
        )
    } else if scf_limit.is_some() {
        (
            "settings.scf_tolerance_ev_per_atom",
            "tighten the SCF tolerance a hundredfold, and the density grid with it; forces err as the square root of the energy",
        )
    } else if settings.scheme == Some(Scheme::FiniteDisplacement) || settings.scheme.is_none() {
        (
            "settings.displacement_angstrom",
            "repeat one displacement at half and at twice its length: noise falls with it, truncation grows as its square",
        )
    } else {
        (
            "settings.scheme",
            "tighten the convergence of the linear response",
        )
    };
    Remedy {
        setting: setting.to_owned(),
        advice: advice.to_owned(),
        effect_kj_per_mol: Some(effect),
    }
}

fn larger_supercell(workup: &Workup<'_>, soft_modes: &[SoftMode], effect: Option<f64>) -> Remedy {
    let open: Vec<[f64; 3]> = soft_modes
        .iter()
        .filter(|m| m.strength == Strength::Weak || m.tag == Tag::PossiblyPhysical)
        .map(|m| m.q)
        .collect();
    Remedy {
        setting: SUPERCELL.to_owned(),
        advice: next_supercell::advice(workup, &open),
        effect_kj_per_mol: effect,
    }
}

fn better_geometry(workup: &Workup<'_>, effect: f64) -> Remedy {
    let settings = &workup.submission.settings;
    let rms = settings.force_residual_rms_ev_per_angstrom;
    let (setting, advice) = match (rms, settings.force_residual_max_ev_per_angstrom) {
        (None, None) => (
            "settings.force_residual_rms_ev_per_angstrom",
            "declare the residual force: it is not known, and the policy's value was taken",
        ),
        (None, Some(_)) => (
            "settings.force_residual_rms_ev_per_angstrom",
            "declare the root mean square of the residual force: only its largest value is known, and was taken instead",
        ),
        (Some(_), _) => (
            "settings.force_residual_rms_ev_per_angstrom",
            "relax the geometry further before displacing atoms, ten times below the present residual force",
        ),
    };
    Remedy {
        setting: setting.to_owned(),
        advice: advice.to_owned(),
        effect_kj_per_mol: Some(effect),
    }
}
