//! Whether the supercell holds the range of the forces: decay of |Φ| with distance, the supercell against the molecules,
//! and the change of the lowest branches when small constants are dropped.

use nalgebra::Vector3;
use rayon::prelude::*;
use tarehouse_physics::dynamics::Dynamics;
use tarehouse_physics::units::wavenumber_per_cm;

use super::Limit;
use crate::ExamineError;
use crate::remedies::next_supercell;
use crate::report::{Curves, Finding, LikelyCause, Rule, Severity};
use crate::workup::{Workup, eigen_error, show_q};

pub(crate) fn check(
    workup: &Workup<'_>,
    truncated: &[(f64, Dynamics)],
) -> Result<Vec<Finding>, ExamineError> {
    Ok(vec![
        reach(workup),
        supercell_size(workup),
        truncation(workup, truncated)?,
    ])
}

/// Largest |Φ| of the pairs in distance bins: the decay curve.
pub(crate) fn decay_curve(workup: &Workup<'_>, curves: &mut Curves) {
    let width = workup.limits.curves.reach_bin_angstrom;
    for (distance, largest) in pairs(workup) {
        #[allow(
            clippy::cast_possible_truncation,
            clippy::cast_sign_loss,
            reason = "a distance inside a supercell over a bin width is a small positive number"
        )]
        let bin = (distance / width) as usize;
        while curves.reach_distance_ang.len() <= bin {
            let centre = (curves.reach_distance_ang.len() as f64 + 0.5) * width;
            curves.reach_distance_ang.push(centre);
            curves.reach_largest_ev_per_ang2.push(0.0);
        }
        let slot = &mut curves.reach_largest_ev_per_ang2[bin];
        *slot = slot.max(largest);
    }
}

/// (distance in Å, largest element in eV/Å²) of every pair of different atoms, projected constants.
fn pairs<'a>(workup: &'a Workup<'_>) -> impl Iterator<Item = (f64, f64)> + 'a {
    let n = workup.crystal.atom_count();
    let home = workup.projected.home_cell();
    workup
        .projected
        .blocks()
        .iter()
        .enumerate()
        .filter_map(move |(flat, block)| {
            let (l, i, j) = (flat / (n * n), flat / n % n, flat % n);
            let own = l == home && i == j;
            (!own).then(|| {
                (
                    workup.images.distance(&workup.crystal, l, i, j),
                    block.amax(),
                )
            })
        })
}

fn reach(workup: &Workup<'_>) -> Finding {
    let all: Vec<(f64, f64)> = pairs(workup).collect();
    let outer_share = workup.limits.reach.outer_share;
    let farthest = all.iter().map(|p| p.0).fold(0.0, f64::max);
    let largest = workup
        .projected
        .largest_self_constant()
        .max(f64::MIN_POSITIVE);
    let outer = all
        .iter()
        .filter(|p| p.0 >= outer_share * farthest)
        .map(|p| p.1)
        .fold(0.0, f64::max);
    let limits = Limit::caution_only(workup.limits.reach.decay_caution);
    Finding::graded(Rule::Reach, outer / largest, "", limits)
        .at(format!("pairs beyond {:.1} Å", outer_share * farthest))
        .saying(format!(
            "the largest constant in the outer part of the supercell is {outer:.1e} eV/Å², compared with the largest self \
             constant"
        ))
        .because(
            LikelyCause::SmallSupercell,
            "the forces have not died out at the border: a larger supercell is needed before branches between sampled wave \
             vectors mean much",
        )
}

fn supercell_size(workup: &Workup<'_>) -> Finding {
    let half = 0.5 * workup.shortest_supercell_vector_ang();
    let contact = workup.molecules.nearest_centre_distance_ang();
    let severity = if workup.is_narrow() {
        Severity::Caution
    } else {
        Severity::Pass
    };
    let words = if workup.is_narrow() {
        "the supercell is one molecule wide in some direction: an acoustic branch along it is never sampled"
    } else {
        "half the shortest supercell vector reaches beyond the nearest molecule"
    };
    Finding::new(Rule::SupercellSize, severity, words)
        .measured(half, Some(contact), "Å")
        .because(
            LikelyCause::SmallSupercell,
            next_supercell::advice(workup, &[]),
        )
}

fn truncation(workup: &Workup<'_>, truncated: &[(f64, Dynamics)]) -> Result<Finding, ExamineError> {
    let judged = workup.limits.reach.truncation_judged_fraction;
    let mut points = workup.projected.supercell().commensurate_points();
    if points.len() > 1 {
        // Γ's lowest modes are the rigid translations, which no truncation moves.
        points.retain(|q| q.norm() > 0.0);
    }
    let shifts = points
        .par_iter()
        .map(|q| lowest_branch_shifts(workup, truncated, q))
        .collect::<Result<Vec<Vec<f64>>, _>>()?;
    let mut words = Vec::new();
    let (mut worst, mut place) = (0.0_f64, String::new());
    for (k, (fraction, _)) in truncated.iter().enumerate() {
        let largest = shifts
            .iter()
            .map(|at_point| at_point[k])
            .fold(0.0, f64::max);
        words.push(format!("{largest:.1} cm⁻¹ at {fraction:.0e}"));
        for (q, at_point) in points.iter().zip(&shifts) {
            if *fraction <= judged && at_point[k] > worst {
                (worst, place) = (at_point[k], show_q(q));
            }
        }
    }
    let limits = Limit::caution_only(workup.limits.reach.truncation_caution_per_cm);
    Ok(Finding::graded(Rule::Truncation, worst, "cm⁻¹", limits)
        .at(place)
        .saying(format!(
            "dropping constants below a fraction of the largest moves the lowest branch at sampled wave vectors by {}",
            words.join(", ")
        ))
        .because(
            LikelyCause::SmallSupercell,
            "the soft branches rest on very small constants: these must be accurate, so tighten the SCF and the grid",
        ))
}

/// How far each truncation moves the lowest branch at q, cm⁻¹; at Γ the lowest beyond the rigid translations.
fn lowest_branch_shifts(
    workup: &Workup<'_>,
    truncated: &[(f64, Dynamics)],
    q: &Vector3<f64>,
) -> Result<Vec<f64>, ExamineError> {
    let branch = if q.norm() > 0.0 { 0 } else { 3 };
    let lowest = |dynamics: &Dynamics| -> Result<f64, ExamineError> {
        let values = dynamics.eigenvalues(q).map_err(eigen_error("truncation"))?;
        Ok(wavenumber_per_cm(
            values.get(branch).copied().unwrap_or_default(),
        ))
    };
    let full = lowest(&workup.dynamics)?;
    truncated
        .iter()
        .map(|(_, dynamics)| Ok((lowest(dynamics)? - full).abs()))
        .collect()
}
