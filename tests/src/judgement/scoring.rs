//! Examines one upload and holds the report against the truth.

use std::time::Instant;

use serde::Serialize;
use tarehouse_assay::report::{FreeEnergy, LikelyCause, Report, Severity, Strength, Tag};
use tarehouse_assay::{Policy, Unwatched, examine};
use tarehouse_demo_data::noise::Disturbance;

use crate::judgement::blunders::is_blunder;
use crate::judgement::depth::{Aliasing, Depth, alias, deepest, is_decidable};
use crate::judgement::lean;
use crate::judgement::uploads::{Case, Expected};
use crate::judgement::{BenchError, TEMPERATURES_K, seed_of};

/// The worst tag of an upload, in rising order.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Worst {
    /// No soft modes.
    None,
    /// Numerical, strong.
    NumericalStrong,
    /// Numerical, weak.
    NumericalWeak,
    /// Possibly physical, weak.
    PhysicalWeak,
    /// Possibly physical, strong.
    PhysicalStrong,
}

/// What is asked of the tags of an upload.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Truth {
    /// Never possibly physical.
    Stable,
    /// Possibly physical.
    Unstable,
    /// Unstable, but below what one upload can show.
    Undecidable,
    /// Not judged by tags.
    Blunder,
}

/// A bracket beside the truth, kJ/mol per molecule.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct Bracketed {
    /// K.
    pub temperature_k: f64,
    /// True free energy.
    pub truth: f64,
    /// Central value less the truth.
    pub error: f64,
    /// Half width.
    pub half_width: f64,
    /// Whether a bracket was given and holds the truth.
    pub covered: bool,
}

/// Everything that came of one upload.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Outcome {
    /// Class.
    pub class: &'static str,
    /// Seed and number of the case.
    pub seed: u64,
    /// Number of the case.
    pub turn: u64,
    /// Crystal.
    pub crystal: String,
    /// Atoms in the cell.
    pub atom_count: usize,
    /// Multiples of the cell in the supercell.
    pub multiples: [i64; 3],
    /// Variant.
    pub detail: String,
    /// True σ of one constant where known, eV/Å².
    pub sigma: Option<f64>,
    /// σ that the report found.
    pub sigma_found: Option<f64>,
    /// What is asked of the tags.
    pub truth: Truth,
    /// The worst tag.
    pub worst: Worst,
    /// Its reason and numbers.
    pub worst_words: String,
    /// Brackets, for stable crystals.
    pub brackets: Vec<Bracketed>,
    /// What folding and the mesh do to the free energy.
    pub alias: Option<Aliasing>,
    /// The instability.
    pub depth: Option<Depth>,
    /// The cause that should be named.
    pub cause_expected: Option<&'static str>,
    /// Causes of findings that do not pass, worst first.
    pub causes: Vec<String>,
    /// Whether the blunder was named, or the upload could not even be decoded.
    pub named: bool,
    /// Blunders named although there is none.
    pub false_alarms: Vec<String>,
    /// Lean of the array towards negated translations; see [`lean`].
    pub lean_negated: Option<f64>,
    /// Lean of the array towards a supercell with exchanged axes.
    pub lean_exchanged: Option<f64>,
    /// The verdict.
    pub verdict: String,
    /// Time of the examination, s.
    pub seconds: f64,
}

/// Examines a case.
///
/// # Errors
/// [`BenchError`].
pub fn score(
    case: &Case<'_>,
    class: &'static str,
    seed: u64,
    turn: u64,
    policy: &Policy,
) -> Result<Outcome, BenchError> {
    let mut outcome = blank(case, class, seed, turn);
    let Some(submission) = &case.submission else {
        "refused at decoding".clone_into(&mut outcome.verdict);
        outcome.named = true;
        return Ok(outcome);
    };
    let quick;
    let policy = if outcome.truth == Truth::Blunder {
        quick = coarse(policy);
        &quick
    } else {
        policy
    };
    let started = Instant::now();
    let report = examine(submission, policy, &Unwatched)?;
    outcome.seconds = started.elapsed().as_secs_f64();
    describe(&mut outcome, &report);
    outcome.lean_negated = lean::towards_negated(submission);
    outcome.lean_exchanged = lean::towards_exchanged(submission);
    match &case.expected {
        Expected::Stable(sigma) => {
            outcome.sigma = (*sigma > 0.0).then_some(*sigma);
            if let Some(truth) = &case.member.truth {
                outcome.brackets = brackets(&truth.free_energy_kj_per_mol, &report.free_energy);
            }
            outcome.alias = Some(alias(case)?);
        }
        Expected::Unstable(exact, noise) => {
            let key = seed_of("draws", &[seed, turn]);
            let depth = deepest(exact, case.multiples, noise, key)?;
            outcome.truth = match depth {
                Some(depth) if is_decidable(&depth) => Truth::Unstable,
                _ => Truth::Undecidable,
            };
            outcome.depth = depth;
            if let Disturbance::White { sigma } = noise {
                outcome.sigma = Some(*sigma);
            }
        }
        Expected::Blunder(blunder) => {
            let name = blunder.cause().name();
            outcome.named = outcome.causes.iter().any(|cause| cause.ends_with(name));
            outcome.false_alarms.clear();
        }
    }
    Ok(outcome)
}

/// The policy with a coarse mesh and few draws: the findings that name blunders look at neither.
fn coarse(policy: &Policy) -> Policy {
    let mut coarse = policy.clone();
    coarse.limits.mesh.spacing_per_angstrom = 1.0;
    coarse.limits.soft_modes.noise_draws = 2;
    coarse
}

fn blank(case: &Case<'_>, class: &'static str, seed: u64, turn: u64) -> Outcome {
    let (truth, cause_expected) = match &case.expected {
        Expected::Stable(_) => (Truth::Stable, None),
        Expected::Unstable(..) => (Truth::Unstable, None),
        Expected::Blunder(blunder) => (Truth::Blunder, Some(blunder.cause().name())),
    };
    Outcome {
        class,
        seed,
        turn,
        crystal: case.member.label.clone(),
        atom_count: case.member.atom_count(),
        multiples: case.multiples,
        detail: case.detail.clone(),
        sigma: None,
        sigma_found: None,
        truth,
        worst: Worst::None,
        worst_words: String::new(),
        brackets: Vec::new(),
        alias: None,
        depth: None,
        cause_expected,
        causes: Vec::new(),
        named: false,
        false_alarms: Vec::new(),
        lean_negated: None,
        lean_exchanged: None,
        verdict: String::new(),
        seconds: 0.0,
    }
}

fn describe(outcome: &mut Outcome, report: &Report) {
    outcome.sigma_found = Some(report.noise.sigma_ev_per_ang2);
    outcome.verdict = format!("{:?}", report.verdict).to_lowercase();
    for mode in &report.soft_modes {
        let tag = match (mode.tag, mode.strength) {
            (Tag::Numerical, Strength::Strong) => Worst::NumericalStrong,
            (Tag::Numerical, Strength::Weak) => Worst::NumericalWeak,
            (Tag::PossiblyPhysical, Strength::Weak) => Worst::PhysicalWeak,
            (Tag::PossiblyPhysical, Strength::Strong) => Worst::PhysicalStrong,
        };
        if tag > outcome.worst {
            outcome.worst = tag;
            outcome.worst_words = format!(
                "{:.1} cm⁻¹ at {:.3?}, {} points, z {:.1?}, alias share {:.2?}: {}",
                mode.lowest_wavenumber_per_cm,
                mode.q,
                mode.point_count,
                mode.z,
                mode.alias_share,
                mode.reason
            );
        }
    }
    let mut findings: Vec<_> = report
        .findings
        .iter()
        .filter(|f| f.severity > Severity::Pass && f.likely_cause != LikelyCause::None)
        .collect();
    findings.sort_by_key(|f| std::cmp::Reverse(f.severity));
    let alarms = findings.iter().filter(|f| is_blunder(f.likely_cause));
    outcome.false_alarms = alarms
        .map(|f| {
            format!(
                "{} {:?} {} ({:.3?} against {:.3?}): {}",
                f.rule.name(),
                f.severity,
                f.likely_cause.name(),
                f.measured,
                f.limit,
                f.message
            )
        })
        .collect();
    outcome.causes = findings
        .iter()
        .map(|f| {
            let mark = if f.severity == Severity::Fail {
                "fail"
            } else {
                "caution"
            };
            format!("{} {mark} {}", f.rule.name(), f.likely_cause.name())
        })
        .collect();
}

fn brackets(truth: &[f64; 4], energies: &[FreeEnergy]) -> Vec<Bracketed> {
    TEMPERATURES_K
        .iter()
        .zip(truth)
        .map(|(&temperature_k, &truth)| {
            let found = energies
                .iter()
                .find(|f| f.defined && (f.temperature_k - temperature_k).abs() < 1e-9);
            let (error, half_width, covered) = found.map_or((f64::NAN, f64::NAN, false), |f| {
                let half = 0.5 * (f.upper_kj_per_mol - f.lower_kj_per_mol);
                let covered = f.lower_kj_per_mol <= truth && truth <= f.upper_kj_per_mol;
                (f.central_kj_per_mol - truth, half, covered)
            });
            Bracketed {
                temperature_k,
                truth,
                error,
                half_width,
                covered,
            }
        })
        .collect()
}
