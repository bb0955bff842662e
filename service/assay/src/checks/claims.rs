//! The contributor's own zero-point and free energies against the recomputed ones.

use tarehouse_physics::thermodynamics::FreeEnergyCurve;
use tarehouse_physics::units::EV_TO_KJ_PER_MOL;

use super::Limit;
use crate::report::{Finding, FreeEnergy, LikelyCause, Rule, Severity};
use crate::workup::Workup;

const REMEDY: &str = "compare the q-mesh and the treatment of soft and acoustic modes: here no mode is dropped and no \
                      imaginary frequency is made positive; if they agree, check unit and masses";

pub(crate) fn check(workup: &Workup<'_>, energies: &[FreeEnergy]) -> Vec<Finding> {
    let claims = &workup.submission.claims;
    let to_kj = EV_TO_KJ_PER_MOL / workup.submission.formula_units();
    let mut findings = Vec::new();
    let defined = energies.first().is_some_and(|f| f.defined);
    if let Some(claimed) = claims.zero_point_energy_ev {
        let limit = workup.limits.claims.zero_point_caution_kj_per_mol;
        let here = energies
            .first()
            .filter(|_| defined)
            .map(|f| f.central_kj_per_mol);
        let place = "claims.zero_point_energy".to_owned();
        findings.push(compared(
            Rule::ClaimZeroPoint,
            place,
            claimed * to_kj,
            here,
            limit,
        ));
    }
    let curve = defined.then(|| curve(energies)).flatten();
    for (index, (temperature_k, claimed)) in claims.free_energy_ev.iter().enumerate() {
        let limit = workup.limits.claims.free_energy_caution_kj_per_mol;
        let here = curve
            .as_ref()
            .and_then(|c| c.free_energy(*temperature_k).ok());
        let place = format!("claims.free_energy[{index}], {temperature_k} K");
        findings.push(compared(
            Rule::ClaimFreeEnergy,
            place,
            claimed * to_kj,
            here,
            limit,
        ));
    }
    findings
}

/// F over T from the free energies of a report, kJ/mol and kJ/mol/K per formula unit; `None` where undefined.
pub(crate) fn curve(energies: &[FreeEnergy]) -> Option<FreeEnergyCurve> {
    let column = |f: fn(&FreeEnergy) -> f64| energies.iter().map(f).collect::<Vec<f64>>();
    FreeEnergyCurve::new(
        column(|f| f.temperature_k),
        column(|f| f.central_kj_per_mol),
        column(|f| 1e-3 * f.entropy_j_per_mol_k),
    )
    .ok()
}

fn compared(
    rule: Rule,
    place: String,
    claimed_kj: f64,
    here_kj: Option<f64>,
    limit: f64,
) -> Finding {
    let Some(here) = here_kj else {
        let message = format!(
            "claimed {claimed_kj:.3} kJ/mol per formula unit; there is no value here to compare with (no harmonic free energy, \
             or a temperature outside the grid)"
        );
        return Finding::new(rule, Severity::Caution, message)
            .at(place)
            .because(
                LikelyCause::DifferentTreatment,
                "claim a temperature on the policy's grid, and see the soft modes",
            );
    };
    let difference = (claimed_kj - here).abs();
    Finding::graded(rule, difference, "kJ/mol", Limit::caution_only(limit))
        .at(place)
        .saying(format!(
            "claimed {claimed_kj:.3}, recomputed {here:.3} kJ/mol per formula unit"
        ))
        .because(LikelyCause::DifferentTreatment, REMEDY)
}
