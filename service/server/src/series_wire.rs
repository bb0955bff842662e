//! Series of examinations as the contract tells them.

use tarehouse_assay::quasi_harmonic::{Bracketed, Equilibrium, VolumeSeriesError};
use tarehouse_assay::series::{Change, Conclusion, Differing, Quantity, QuantityKind, Value};
use tarehouse_proto::v1;

/// A setting that differs.
pub(crate) fn setting(differing: Differing) -> v1::SeriesSetting {
    v1::SeriesSetting {
        setting: differing.setting.to_owned(),
        values: differing.values,
    }
}

/// What follows; unspecified where nothing was judged.
pub(crate) fn conclusion(of: Option<Conclusion>) -> v1::SeriesConclusion {
    match of {
        None => v1::SeriesConclusion::Unspecified,
        Some(Conclusion::Stopped) => v1::SeriesConclusion::Stopped,
        Some(Conclusion::CannotBeTold) => v1::SeriesConclusion::CannotBeTold,
        Some(Conclusion::StillMoving) => v1::SeriesConclusion::StillMoving,
    }
}

/// One quantity along a series.
pub(crate) fn quantity(of: Quantity) -> v1::SeriesQuantity {
    let (kind, temperature_k, q) = match of.kind {
        QuantityKind::FreeEnergy(t) => (v1::SeriesQuantityKind::FreeEnergy, Some(t), Vec::new()),
        QuantityKind::BracketHalfWidth(t) => (
            v1::SeriesQuantityKind::BracketHalfWidth,
            Some(t),
            Vec::new(),
        ),
        QuantityKind::LowestBranch(q) => (v1::SeriesQuantityKind::LowestBranch, None, q.to_vec()),
    };
    v1::SeriesQuantity {
        kind: kind.into(),
        temperature_k,
        q,
        values: of.values.into_iter().map(value).collect(),
        changes: of.changes.into_iter().map(change).collect(),
        conclusion: conclusion(of.conclusion).into(),
        reason: of.reason,
    }
}

fn value(of: Option<Value>) -> v1::SeriesValue {
    v1::SeriesValue {
        central: of.map(|value| value.central),
        lower: of.map(|value| value.lower),
        upper: of.map(|value| value.upper),
    }
}

fn change(of: Option<Change>) -> v1::SeriesChange {
    v1::SeriesChange {
        change: of.map(|change| change.change),
        combined_half_width: of.map(|change| change.combined),
    }
}

/// One temperature and pressure of a volume series.
pub(crate) fn point(
    temperature_k: f64,
    pressure_gpa: f64,
    answer: Result<Equilibrium, VolumeSeriesError>,
) -> v1::QuasiHarmonicPoint {
    let unanswered = v1::QuasiHarmonicPoint {
        temperature_k,
        pressure_gpa,
        ..v1::QuasiHarmonicPoint::default()
    };
    match answer {
        Ok(found) => v1::QuasiHarmonicPoint {
            defined: true,
            gibbs_kj_per_mol: Some(bracketed(found.gibbs_kj_per_mol)),
            volume_ang3: Some(bracketed(found.volume_ang3)),
            bulk_modulus_gpa: Some(bracketed(found.bulk_modulus_gpa)),
            expansion_per_k: Some(bracketed(found.expansion_per_k)),
            entropy_j_per_mol_k: Some(found.entropy_j_per_mol_k),
            heat_capacity_v_j_per_mol_k: Some(found.heat_capacity_v_j_per_mol_k),
            heat_capacity_p_j_per_mol_k: Some(found.heat_capacity_p_j_per_mol_k),
            fit_residual_kj_per_mol: Some(found.fit_residual_kj_per_mol),
            ..unanswered
        },
        Err(error) => v1::QuasiHarmonicPoint {
            refusal: error.to_string(),
            ..unanswered
        },
    }
}

fn bracketed(of: Bracketed) -> v1::Bracketed {
    v1::Bracketed {
        central: of.central,
        half_width: of.half_width,
    }
}
