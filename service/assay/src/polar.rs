//! The dipole–dipole part of a submission that gives effective charges and permittivity.

use std::sync::Arc;

use nalgebra::{Matrix3, Vector3};
use tarehouse_physics::dipoles::{Dipoles, EffectiveCharges, neutrality_residual};
use tarehouse_physics::dynamics::Dynamics;
use tarehouse_physics::symmetry::SpaceGroup;
use tarehouse_physics::units::wavenumber_per_cm;
use tarehouse_physics::{Crystal, ForceConstants};

use crate::report::PolarModes;
use crate::submission::{LongRange, Submission};
use crate::workup::Workup;

/// What effective charges and permittivity lead to.
pub(crate) struct Polar {
    /// |Σ Z_i| over Σ |Z_i| as given.
    pub(crate) neutrality_residual: f64,
    /// Largest change of a charge by symmetry and neutrality, e.
    pub(crate) charge_shift: f64,
    /// The part that is set apart, or why it cannot be.
    pub(crate) part: Result<DipolePart, String>,
}

/// The dipole–dipole part, whole and folded into the supercell.
pub(crate) struct DipolePart {
    dipoles: Arc<Dipoles>,
    folded: ForceConstants,
    long_range: LongRange,
}

impl Polar {
    /// `None` where no charges are given. Charges are made neutral and symmetric first.
    pub(crate) fn new(
        submission: &Submission,
        crystal: &Crystal,
        group: &SpaceGroup,
    ) -> Option<Self> {
        let given = submission.dielectric.as_ref()?;
        let used =
            EffectiveCharges::projected(&given.effective_charges, &given.permittivity, group);
        let pairs = given.effective_charges.iter().zip(&used.charges);
        let charge_shift = pairs.map(|(a, b)| (a - b).amax()).fold(0.0, f64::max);
        let part = Dipoles::new(crystal, &used)
            .map(|dipoles| DipolePart {
                folded: dipoles.folded(submission.constants.supercell()),
                dipoles: Arc::new(dipoles),
                long_range: submission.declaration.long_range,
            })
            .map_err(|error| error.to_string());
        Some(Self {
            neutrality_residual: neutrality_residual(&given.effective_charges),
            charge_shift,
            part,
        })
    }
}

/// Dynamics with the dipole–dipole part set apart, where there is one.
pub(crate) fn with_dipoles(polar: Option<&Polar>, dynamics: Dynamics) -> Dynamics {
    match polar.map(|polar| &polar.part) {
        Some(Ok(part)) => match part.long_range {
            LongRange::Included => dynamics.separating(&part.dipoles, &part.folded),
            LongRange::Removed => dynamics.adding(&part.dipoles, &part.folded),
        },
        Some(Err(_)) | None => dynamics,
    }
}

/// Optical modes at Γ reached along each reciprocal axis; empty where no dipoles are set apart.
pub(crate) fn modes_by_direction(workup: &Workup<'_>) -> Vec<PolarModes> {
    if workup.acoustic.field().is_none() {
        return Vec::new();
    }
    let reciprocal = workup.crystal.reciprocal();
    let axes = Matrix3::<f64>::identity();
    axes.column_iter()
        .map(|axis| {
            let axis: Vector3<f64> = axis.into_owned();
            let values = workup.acoustic.optical_along(&reciprocal.tr_mul(&axis));
            PolarModes {
                direction: axis.into(),
                wavenumbers_per_cm: values.into_iter().map(wavenumber_per_cm).collect(),
            }
        })
        .collect()
}
