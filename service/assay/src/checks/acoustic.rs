//! Acoustic modes at Γ, found by overlap with the rigid translations, raw and projected; what projection moved; sound
//! velocities and the stability of long waves.

use tarehouse_physics::gamma_point::directions;
use tarehouse_physics::long_wave::{rigid_translations, sound_velocity_range};
use tarehouse_physics::units::wavenumber_per_cm;

use super::Limit;
use crate::noise::{distance, rms};
use crate::report::{CrystalFacts, Finding, LikelyCause, Rule, Severity};
use crate::workup::Workup;

pub(crate) fn check(workup: &Workup<'_>, facts: &CrystalFacts) -> Vec<Finding> {
    vec![
        raw(workup),
        projected(workup),
        projection_shift(workup, facts),
        sound_velocity(workup, facts),
        elastic_stability(workup),
    ]
}

fn raw(workup: &Workup<'_>) -> Finding {
    let acoustic = workup.raw_gamma.acoustic.map(wavenumber_per_cm);
    let worst = acoustic.iter().fold(0.0_f64, |m, x| m.max(x.abs()));
    let limits = &workup.limits.acoustic;
    let limits = Limit {
        caution: limits.raw_caution_per_cm,
        fail: limits.raw_fail_per_cm,
    };
    Finding::graded(Rule::AcousticRaw, worst, "cm⁻¹", limits)
        .at("Γ")
        .saying(format!("rigid translations of the raw constants lie at {}", show(&acoustic)))
        .because(
            LikelyCause::ScfNoise,
            "the translation sums say which side is at fault; write forces with all their digits and tighten the SCF",
        )
}

fn projected(workup: &Workup<'_>) -> Finding {
    let order = workup.dynamics.branch_count();
    let gamma = workup.dynamics.matrix(&nalgebra::Vector3::zeros());
    let matrix = nalgebra::DMatrix::from_fn(order, order, |r, c| gamma[r * order + c].re);
    let rigid = rigid_translations(workup.crystal.masses_u());
    let inner = rigid.transpose() * matrix * &rigid;
    let values = nalgebra::SymmetricEigen::new(inner).eigenvalues;
    let acoustic: Vec<f64> = values.iter().map(|x| wavenumber_per_cm(*x)).collect();
    let worst = acoustic.iter().fold(0.0_f64, |m, x| m.max(x.abs()));
    let limits = &workup.limits.acoustic;
    let limits = Limit {
        caution: limits.projected_caution_per_cm,
        fail: limits.projected_fail_per_cm,
    };
    Finding::graded(Rule::AcousticProjected, worst, "cm⁻¹", limits)
        .at("Γ")
        .saying("rigid translations after the sums are enforced; what is left is rounding")
        .because(
            LikelyCause::Unknown,
            "report this: the projection itself did not close",
        )
}

fn projection_shift(workup: &Workup<'_>, facts: &CrystalFacts) -> Finding {
    let limit = workup.limits.acoustic.projection_caution_kj_per_mol;
    let words = format!(
        "enforcing sums and space group moved constants by {:.1e} of their norm, at most {:.1e} eV/Å²",
        facts.projection_relative_norm, facts.projection_largest_ev_per_ang2
    );
    match facts.projection_free_energy_kj_per_mol {
        Some(change) => Finding::graded(
            Rule::ProjectionShift,
            change.abs(),
            "kJ/mol",
            Limit::caution_only(limit),
        )
        .saying(format!(
            "{words}; the free energy at the judged temperature by {change:+.3} kJ/mol"
        ))
        .because(LikelyCause::ScfNoise, "reduce the residuals of the sums"),
        None => Finding::new(
            Rule::ProjectionShift,
            Severity::Pass,
            format!("{words}; soft modes leave no free energy to compare"),
        ),
    }
}

/// Norm and largest element of what projection removed.
pub(crate) fn projection_change(workup: &Workup<'_>) -> (f64, f64) {
    let raw = &workup.submission.constants;
    let count = (9.0 * raw.blocks().len() as f64).sqrt();
    let norm = rms(raw) * count;
    let moved = distance(raw, &workup.projected);
    let largest = raw
        .blocks()
        .iter()
        .zip(workup.projected.blocks())
        .map(|(a, b)| (a - b).amax())
        .fold(0.0, f64::max);
    (if norm > 0.0 { moved / norm } else { 0.0 }, largest)
}

fn sound_velocity(workup: &Workup<'_>, facts: &CrystalFacts) -> Finding {
    let [slow, fast] = workup.limits.acoustic.sound_velocity_m_per_s;
    let range = facts
        .sound_velocity_min_m_per_s
        .zip(facts.sound_velocity_max_m_per_s);
    match range {
        None => Finding::new(
            Rule::SoundVelocity,
            Severity::Pass,
            "no range of sound velocities: some long wave is unstable, see elastic-stability",
        ),
        Some((least, largest)) => {
            let outside = least < slow || largest > fast;
            let severity = if outside {
                Severity::Caution
            } else {
                Severity::Pass
            };
            let (measured, limit) = if largest > fast {
                (largest, fast)
            } else {
                (least, slow)
            };
            Finding::new(
                Rule::SoundVelocity,
                severity,
                format!("sound travels at {least:.0} to {largest:.0} m/s over all directions"),
            )
            .measured(measured, Some(limit), "m/s")
            .because(
                LikelyCause::SmallSupercell,
                "check unit and masses; a supercell that ends inside the range of the forces bends acoustic branches",
            )
        }
    }
}

/// Slowest and fastest sound velocity over a sphere of directions, m/s.
pub(crate) fn velocities(workup: &Workup<'_>) -> Option<(f64, f64)> {
    sound_velocity_range(&workup.acoustic, &directions())
}

fn elastic_stability(workup: &Workup<'_>) -> Finding {
    let (value, direction) = directions()
        .iter()
        .map(|d| (workup.acoustic.eigenvalues(d)[0], *d))
        .fold((f64::INFINITY, nalgebra::Vector3::zeros()), |a, b| {
            if b.0 < a.0 { b } else { a }
        });
    let severity = if value < 0.0 {
        Severity::Caution
    } else {
        Severity::Pass
    };
    let words = if value < 0.0 {
        "long waves in some direction have negative stiffness; in the Γ correction it was lifted to the policy's floor"
    } else {
        "long waves have positive stiffness in every direction"
    };
    let linear = workup.acoustic.linear_term;
    Finding::new(
        Rule::ElasticStability,
        severity,
        format!(
            "{words}. Term linear in q, which exact constants do not have: {linear:.1e} eV/Å/u"
        ),
    )
    .measured(value, Some(0.0), "eV/u")
    .at(format!(
        "along ({:.2}, {:.2}, {:.2})",
        direction.x, direction.y, direction.z
    ))
    .because(
        LikelyCause::SmallSupercell,
        "compare with a larger supercell: a long wave is never sampled by one, always extrapolated",
    )
}

fn show(values: &[f64; 3]) -> String {
    let words: Vec<String> = values
        .iter()
        .map(|x| {
            if *x < 0.0 {
                format!("{:.2}i", -x)
            } else {
                format!("{x:.2}")
            }
        })
        .collect();
    format!("{} cm⁻¹", words.join(", "))
}
