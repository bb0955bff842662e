//! Settings by kind of method against the policy. A missing setting is a caution that says why it matters.

use super::Limit;
use crate::policy::KindLimits;
use crate::report::{Finding, LikelyCause, Rule, Severity};
use crate::submission::{Differences, MethodKind, Scheme, Settings};
use crate::workup::Workup;

pub(crate) fn check(workup: &Workup<'_>) -> Vec<Finding> {
    let settings = &workup.submission.settings;
    let Some(kind) = settings.kind else {
        return vec![missing(
            Rule::SettingKind,
            "settings.kind",
            "without the kind of method no other setting can be judged",
        )];
    };
    let policy = workup.limits.settings.of(kind);
    let message = format!("constants from {}", kind_words(kind));
    let mut findings = vec![Finding::new(Rule::SettingKind, Severity::Pass, message)];
    findings.extend(scf(settings, policy));
    findings.extend(density_grid(settings, policy));
    findings.extend(k_spacing(settings, policy));
    findings.extend(model_digest(settings, policy));
    findings.extend(float_bits(settings, policy));
    findings.extend(residual_force(settings, policy));
    findings.extend(stress(settings, policy));
    findings.extend(differences(settings));
    findings.extend(displacement(settings, policy));
    findings.push(level(settings));
    findings
}

/// Keys of `[settings]` that the policy requires of this kind and that are missing.
pub(crate) fn missing_required(workup: &Workup<'_>) -> Vec<String> {
    let settings = &workup.submission.settings;
    let Some(kind) = settings.kind else {
        return Vec::new();
    };
    let required = &workup.limits.settings.of(kind).required;
    required
        .iter()
        .filter(|key| !is_given(settings, key))
        .cloned()
        .collect()
}

fn is_given(settings: &Settings, key: &str) -> bool {
    let level = &settings.level;
    match key {
        "program" => settings.program.is_some(),
        "functional" => level.functional.is_some(),
        "dispersion" => level.dispersion.is_some(),
        "basis" => level.basis.is_some(),
        "pseudopotentials" => level.pseudopotentials.is_some(),
        "model_digest" => settings.model_digest.is_some(),
        "float_bits" => settings.float_bits.is_some(),
        "orbital_cutoff_ev" => settings.orbital_cutoff_ev.is_some(),
        "density_to_orbital_cutoff" => settings.density_to_orbital_cutoff.is_some(),
        "k_spacing_per_angstrom" => settings.k_spacing_per_angstrom.is_some(),
        "scf_tolerance_ev_per_atom" => settings.scf_tolerance_ev_per_atom.is_some(),
        "force_residual_rms_ev_per_angstrom" => {
            settings.force_residual_rms_ev_per_angstrom.is_some()
        }
        "force_residual_max_ev_per_angstrom" => {
            settings.force_residual_max_ev_per_angstrom.is_some()
        }
        "stress_gpa" => settings.stress_gpa.is_some(),
        "scheme" => settings.scheme.is_some(),
        "differences" => settings.differences.is_some(),
        "displacement_angstrom" => settings.displacement_angstrom.is_some(),
        _ => false,
    }
}

fn kind_words(kind: MethodKind) -> &'static str {
    match kind {
        MethodKind::Dft => "density-functional theory",
        MethodKind::Wavefunction => "wave-function theory",
        MethodKind::TightBinding => "tight binding",
        MethodKind::MlPotential => "a machine-learned potential",
        MethodKind::ForceField => "a force field",
    }
}

fn missing(rule: Rule, key: &str, why: &str) -> Finding {
    Finding::new(
        rule,
        Severity::Caution,
        format!("{key} is not declared: {why}"),
    )
    .at(key)
    .because(LikelyCause::MissingSetting, format!("declare {key}"))
}

/// A value that should not exceed the policy's limit.
fn at_most(
    rule: Rule,
    key: &str,
    value: Option<f64>,
    limit: Option<f64>,
    unit: &'static str,
    why: &str,
    remedy: &str,
) -> Option<Finding> {
    let limit = limit?;
    let Some(value) = value else {
        return Some(missing(rule, key, why));
    };
    let finding = Finding::graded(rule, value, unit, Limit::caution_only(limit))
        .at(key)
        .saying(format!("{key} = {value:e}"))
        .because(LikelyCause::LooseSetting, remedy);
    Some(finding)
}

fn scf(settings: &Settings, policy: &KindLimits) -> Option<Finding> {
    at_most(
        Rule::SettingScf,
        "settings.scf_tolerance_ev_per_atom",
        settings.scf_tolerance_ev_per_atom,
        policy.scf_tolerance_caution_ev_per_atom,
        "eV/atom",
        "soft modes rest on cancellation to about one part in a million, and SCF noise is what breaks it first",
        "tighten the SCF tolerance; 1e-11 to 1e-13 eV/atom is common for lattice dynamics",
    )
}

fn density_grid(settings: &Settings, policy: &KindLimits) -> Option<Finding> {
    let least = policy.density_to_orbital_cutoff_min?;
    let key = "settings.density_to_orbital_cutoff";
    let Some(value) = settings.density_to_orbital_cutoff else {
        let why = "a density grid that does not move with the atoms breaks the translation sum";
        return Some(missing(Rule::SettingDensityGrid, key, why));
    };
    let severity = if value < least {
        Severity::Caution
    } else {
        Severity::Pass
    };
    let finding = Finding::new(
        Rule::SettingDensityGrid,
        severity,
        format!("{key} = {value}"),
    )
    .measured(value, Some(least), "")
    .at(key)
    .because(LikelyCause::LooseSetting, "use a ratio of 4 to 5");
    Some(finding)
}

fn k_spacing(settings: &Settings, policy: &KindLimits) -> Option<Finding> {
    at_most(
        Rule::SettingKSpacing,
        "settings.k_spacing_per_angstrom",
        settings.k_spacing_per_angstrom,
        policy.k_spacing_caution_per_angstrom,
        "Å⁻¹",
        "a coarse sampling of the electrons changes with the supercell and with the displacement",
        "use a finer sampling",
    )
}

fn model_digest(settings: &Settings, policy: &KindLimits) -> Option<Finding> {
    if !policy.model_digest_wanted {
        return None;
    }
    let key = "settings.model_digest";
    Some(match &settings.model_digest {
        Some(digest) => Finding::new(
            Rule::SettingModelDigest,
            Severity::Pass,
            format!("{key} = {digest}"),
        ),
        None => missing(
            Rule::SettingModelDigest,
            key,
            "two potentials of one name may differ, and energies compare only within one",
        ),
    })
}

fn float_bits(settings: &Settings, policy: &KindLimits) -> Option<Finding> {
    let least = policy.float_bits_min?;
    let key = "settings.float_bits";
    let Some(bits) = settings.float_bits else {
        let why = "single precision leaves seven digits, which is the cancellation itself";
        return Some(missing(Rule::SettingFloatBits, key, why));
    };
    let severity = if bits < least {
        Severity::Caution
    } else {
        Severity::Pass
    };
    let finding = Finding::new(Rule::SettingFloatBits, severity, format!("{key} = {bits}"))
        .measured(f64::from(bits), Some(f64::from(least)), "bit")
        .at(key)
        .because(
            LikelyCause::LooseSetting,
            "compute forces in double precision",
        );
    Some(finding)
}

fn residual_force(settings: &Settings, policy: &KindLimits) -> Option<Finding> {
    let rms = settings.force_residual_rms_ev_per_angstrom;
    let declared = rms.or(settings.force_residual_max_ev_per_angstrom);
    let key = match (rms, declared) {
        (None, Some(_)) => "settings.force_residual_max_ev_per_angstrom",
        _ => "settings.force_residual_rms_ev_per_angstrom",
    };
    at_most(
        Rule::SettingResidualForce,
        key,
        declared,
        policy.force_residual_caution_ev_per_angstrom,
        "eV/Å",
        "residual forces cannot be read off the constants, and F is typically too high by 30 to 75 kJ/mol per eV/Å of them \
         at 300 K; the bracket takes the policy's value instead",
        "relax further before displacing atoms",
    )
}

fn stress(settings: &Settings, policy: &KindLimits) -> Option<Finding> {
    let stress = settings.stress_gpa?;
    at_most(
        Rule::SettingStress,
        "settings.stress_gpa",
        Some(stress.amax()),
        policy.stress_caution_gpa,
        "GPa",
        "",
        "relax the cell, or declare it as expanded or experimental",
    )
}

fn differences(settings: &Settings) -> Option<Finding> {
    if settings.scheme == Some(Scheme::LinearResponse) {
        return None;
    }
    let key = "settings.differences";
    Some(match settings.differences {
        None => missing(
            Rule::SettingDifferences,
            key,
            "forward differences keep the third-order term, central ones cancel it",
        ),
        Some(Differences::Central) => Finding::new(
            Rule::SettingDifferences,
            Severity::Pass,
            "central differences",
        )
        .at(key),
        Some(Differences::Forward) => Finding::new(
            Rule::SettingDifferences,
            Severity::Caution,
            "forward differences keep the third-order term of the energy",
        )
        .at(key)
        .because(LikelyCause::LooseSetting, "use central differences"),
    })
}

fn displacement(settings: &Settings, policy: &KindLimits) -> Option<Finding> {
    let [least, largest] = policy.displacement_angstrom?;
    if settings.scheme == Some(Scheme::LinearResponse) {
        return None;
    }
    let key = "settings.displacement_angstrom";
    let Some(value) = settings.displacement_angstrom else {
        let why = "noise grows as its inverse, truncation as its square";
        return Some(missing(Rule::SettingDisplacement, key, why));
    };
    let (limit, words) = if value < least {
        (
            least,
            "small displacements divide the noise of the forces by a small number",
        )
    } else {
        (largest, "large displacements bring higher-order terms in")
    };
    let inside = (least..=largest).contains(&value);
    let severity = if inside {
        Severity::Pass
    } else {
        Severity::Caution
    };
    let message = if inside {
        format!("{key} = {value}")
    } else {
        format!("{key} = {value}: {words}")
    };
    let finding = Finding::new(Rule::SettingDisplacement, severity, message)
        .measured(value, Some(limit), "Å")
        .at(key)
        .because(LikelyCause::LooseSetting, "use a displacement near 0.01 Å");
    Some(finding)
}

fn level(settings: &Settings) -> Finding {
    let key = settings.level.key();
    let parts = &settings.level;
    if parts.functional.is_none() {
        return missing(
            Rule::SettingLevel,
            "settings.functional",
            "energies compare only within one level of theory, and an undeclared level compares with nothing else",
        );
    }
    Finding::new(
        Rule::SettingLevel,
        Severity::Pass,
        format!("level of the constants: {key}"),
    )
}
