//! The report.

use tarehouse_assay::report::{
    BracketParts, CrystalFacts, Curves, Finding, FreeEnergy, LowestBranch, Mesh, Noise, PolarModes,
    Remedy, Report, SoftMode, TruncationChange,
};
use tarehouse_assay::submission::Digest;

use super::ConvertError;
use super::names::{digest_from_hex, digest_to_hex, rule_by_name};
use crate::v1;

/// Number of an enum of the wire.
fn number<W>(value: impl Into<W>) -> i32
where
    i32: From<W>,
{
    i32::from(value.into())
}

/// Enum of the domain from its number on the wire.
fn known<W, D>(field: &'static str, value: i32) -> Result<D, ConvertError>
where
    W: TryFrom<i32>,
    D: TryFrom<W>,
{
    W::try_from(value)
        .ok()
        .and_then(|wire| D::try_from(wire).ok())
        .ok_or(ConvertError::UnknownEnum { field, value })
}

fn digest(field: &'static str, text: &str) -> Result<Digest, ConvertError> {
    digest_from_hex(text).ok_or(ConvertError::Digest(field))
}

fn triple<T>(field: &'static str, values: Vec<T>) -> Result<[T; 3], ConvertError> {
    values
        .try_into()
        .map_err(|values: Vec<T>| ConvertError::Length {
            field,
            expected: 3,
            found: values.len(),
        })
}

fn each<W, D: TryFrom<W>>(values: Vec<W>) -> Result<Vec<D>, D::Error> {
    values.into_iter().map(D::try_from).collect()
}

fn every<W, D: Into<W>>(values: Vec<D>) -> Vec<W> {
    values.into_iter().map(Into::into).collect()
}

impl From<Report> for v1::Report {
    fn from(report: Report) -> Self {
        Self {
            program_version: report.program_version,
            policy_digest: digest_to_hex(&report.policy_digest),
            package_digest: digest_to_hex(&report.package_digest),
            verdict: number::<v1::Verdict>(report.verdict),
            verdict_reasons: report.verdict_reasons,
            findings: every(report.findings),
            noise: Some(report.noise.into()),
            soft_modes: every(report.soft_modes),
            mesh: Some(report.mesh.into()),
            crystal: Some(report.crystal.into()),
            zero_point_energy_kj_per_mol: report.zero_point_energy_kj_per_mol,
            free_energy: every(report.free_energy),
            curves: Some(report.curves.into()),
            bracket_parts: report.bracket_parts.map(Into::into),
            free_energy_draws: report
                .free_energy_draws
                .into_iter()
                .map(|draw| v1::FreeEnergyDraw {
                    free_energy_kj_per_mol: draw,
                })
                .collect(),
            remedies: every(report.remedies),
            lowest_branches: every(report.lowest_branches),
        }
    }
}

impl TryFrom<v1::Report> for Report {
    type Error = ConvertError;

    fn try_from(report: v1::Report) -> Result<Self, ConvertError> {
        let missing = ConvertError::Missing;
        Ok(Self {
            program_version: report.program_version,
            policy_digest: digest("policy_digest", &report.policy_digest)?,
            package_digest: digest("package_digest", &report.package_digest)?,
            verdict: known::<v1::Verdict, _>("verdict", report.verdict)?,
            verdict_reasons: report.verdict_reasons,
            findings: each(report.findings)?,
            noise: report.noise.ok_or(missing("noise"))?.into(),
            soft_modes: each(report.soft_modes)?,
            mesh: report.mesh.ok_or(missing("mesh"))?.try_into()?,
            crystal: report.crystal.ok_or(missing("crystal"))?.try_into()?,
            zero_point_energy_kj_per_mol: report.zero_point_energy_kj_per_mol,
            free_energy: every(report.free_energy),
            curves: report.curves.ok_or(missing("curves"))?.into(),
            bracket_parts: report.bracket_parts.map(Into::into),
            free_energy_draws: report
                .free_energy_draws
                .into_iter()
                .map(|draw| draw.free_energy_kj_per_mol)
                .collect(),
            remedies: every(report.remedies),
            lowest_branches: each(report.lowest_branches)?,
        })
    }
}

impl From<Finding> for v1::Finding {
    fn from(finding: Finding) -> Self {
        Self {
            rule: finding.rule.name().to_owned(),
            severity: number::<v1::Severity>(finding.severity),
            measured: finding.measured,
            limit: finding.limit,
            unit: finding.unit,
            location: finding.location,
            likely_cause: number::<v1::LikelyCause>(finding.likely_cause),
            message: finding.message,
            remedy: finding.remedy,
        }
    }
}

impl TryFrom<v1::Finding> for Finding {
    type Error = ConvertError;

    fn try_from(finding: v1::Finding) -> Result<Self, ConvertError> {
        Ok(Self {
            rule: rule_by_name(&finding.rule).ok_or(ConvertError::UnknownRule(finding.rule))?,
            severity: known::<v1::Severity, _>("severity", finding.severity)?,
            measured: finding.measured,
            limit: finding.limit,
            unit: finding.unit,
            location: finding.location,
            likely_cause: known::<v1::LikelyCause, _>("likely_cause", finding.likely_cause)?,
            message: finding.message,
            remedy: finding.remedy,
        })
    }
}

impl From<SoftMode> for v1::SoftMode {
    fn from(mode: SoftMode) -> Self {
        Self {
            tag: number::<v1::SoftModeTag>(mode.tag),
            strength: number::<v1::Strength>(mode.strength),
            lowest_wavenumber_per_cm: mode.lowest_wavenumber_per_cm,
            raw_wavenumber_per_cm: mode.raw_wavenumber_per_cm,
            q: mode.q.to_vec(),
            point_count: mode.point_count,
            commensurate: mode.commensurate,
            z: mode.z,
            alias_share: mode.alias_share,
            external_fraction: mode.external_fraction,
            acoustic_overlap: mode.acoustic_overlap,
            participation: mode.participation,
            truncation_changes: every(mode.truncation_changes),
            exclusion_limit_per_cm: mode.exclusion_limit_per_cm,
            reason: mode.reason,
        }
    }
}

impl TryFrom<v1::SoftMode> for SoftMode {
    type Error = ConvertError;

    fn try_from(mode: v1::SoftMode) -> Result<Self, ConvertError> {
        Ok(Self {
            tag: known::<v1::SoftModeTag, _>("tag", mode.tag)?,
            strength: known::<v1::Strength, _>("strength", mode.strength)?,
            lowest_wavenumber_per_cm: mode.lowest_wavenumber_per_cm,
            raw_wavenumber_per_cm: mode.raw_wavenumber_per_cm,
            q: triple("q", mode.q)?,
            point_count: mode.point_count,
            commensurate: mode.commensurate,
            z: mode.z,
            alias_share: mode.alias_share,
            external_fraction: mode.external_fraction,
            acoustic_overlap: mode.acoustic_overlap,
            participation: mode.participation,
            truncation_changes: every(mode.truncation_changes),
            exclusion_limit_per_cm: mode.exclusion_limit_per_cm,
            reason: mode.reason,
        })
    }
}

impl From<LowestBranch> for v1::LowestBranch {
    fn from(branch: LowestBranch) -> Self {
        Self {
            q: branch.q.to_vec(),
            wavenumber_per_cm: branch.wavenumber_per_cm,
            lower_per_cm: branch.lower_per_cm,
            upper_per_cm: branch.upper_per_cm,
        }
    }
}

impl TryFrom<v1::LowestBranch> for LowestBranch {
    type Error = ConvertError;

    fn try_from(branch: v1::LowestBranch) -> Result<Self, ConvertError> {
        Ok(Self {
            q: triple("q", branch.q)?,
            wavenumber_per_cm: branch.wavenumber_per_cm,
            lower_per_cm: branch.lower_per_cm,
            upper_per_cm: branch.upper_per_cm,
        })
    }
}

impl From<Mesh> for v1::Mesh {
    fn from(mesh: Mesh) -> Self {
        Self {
            divisions: mesh.divisions.to_vec(),
            point_count: mesh.point_count,
            irreducible_count: mesh.irreducible_count,
        }
    }
}

impl TryFrom<v1::Mesh> for Mesh {
    type Error = ConvertError;

    fn try_from(mesh: v1::Mesh) -> Result<Self, ConvertError> {
        Ok(Self {
            divisions: triple("divisions", mesh.divisions)?,
            point_count: mesh.point_count,
            irreducible_count: mesh.irreducible_count,
        })
    }
}

/// Messages whose fields have the same names and types on both sides.
macro_rules! alike {
    ($name:ident { $($field:ident,)+ }) => {
        impl From<$name> for v1::$name {
            fn from(value: $name) -> Self {
                let $name { $($field,)+ } = value;
                Self { $($field,)+ }
            }
        }

        impl From<v1::$name> for $name {
            fn from(value: v1::$name) -> Self {
                let v1::$name { $($field,)+ } = value;
                Self { $($field,)+ }
            }
        }
    };
}

/// The same, with lists of messages that have a conversion of their own.
macro_rules! alike_with_lists {
    ($name:ident { $($field:ident,)+ } lists { $($list:ident,)+ }) => {
        impl From<$name> for v1::$name {
            fn from(value: $name) -> Self {
                let $name { $($field,)+ $($list,)+ } = value;
                Self { $($field,)+ $($list: every($list),)+ }
            }
        }

        impl TryFrom<v1::$name> for $name {
            type Error = ConvertError;

            fn try_from(value: v1::$name) -> Result<Self, ConvertError> {
                let v1::$name { $($field,)+ $($list,)+ } = value;
                Ok(Self { $($field,)+ $($list: each($list)?,)+ })
            }
        }
    };
}

alike! { TruncationChange { fraction, wavenumber_per_cm, } }
alike_with_lists! { CrystalFacts {
    space_group_number,
    space_group_symbol,
    volume_per_formula_unit_ang3,
    density_g_per_cm3,
    molecule_count,
    sound_velocity_min_m_per_s,
    sound_velocity_max_m_per_s,
    projection_relative_norm,
    projection_largest_ev_per_ang2,
    projection_free_energy_kj_per_mol,
    lattice_energy_kj_per_mol,
    compressibility_per_gpa,
} lists { polar_modes, } }
impl From<PolarModes> for v1::PolarModes {
    fn from(modes: PolarModes) -> Self {
        Self {
            direction: modes.direction.to_vec(),
            wavenumbers_per_cm: modes.wavenumbers_per_cm,
        }
    }
}

impl TryFrom<v1::PolarModes> for PolarModes {
    type Error = ConvertError;

    fn try_from(modes: v1::PolarModes) -> Result<Self, ConvertError> {
        Ok(Self {
            direction: triple("direction", modes.direction)?,
            wavenumbers_per_cm: modes.wavenumbers_per_cm,
        })
    }
}

alike! { FreeEnergy {
    temperature_k,
    defined,
    central_kj_per_mol,
    lower_kj_per_mol,
    upper_kj_per_mol,
    internal_energy_kj_per_mol,
    entropy_j_per_mol_k,
    heat_capacity_j_per_mol_k,
} }
alike! { Noise {
    sigma_ev_per_ang2,
    bound_only,
    erased,
    truncated,
    self_fixed,
    symmetry_expanded,
    rounded,
} }
alike! { BracketParts {
    noise_kj_per_mol,
    bias_kj_per_mol,
    alias_kj_per_mol,
    residual_force_kj_per_mol,
    floor_kj_per_mol,
} }
alike! { Remedy { setting, advice, effect_kj_per_mol, } }
alike! { Curves {
    dos_wavenumber_per_cm,
    dos_total,
    dos_external,
    reach_distance_ang,
    reach_largest_ev_per_ang2,
} }
