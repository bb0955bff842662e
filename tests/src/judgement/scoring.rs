//! Examines one upload and holds the report against the truth.

use std::time::Instant;

use serde::Serialize;
use tarehouse_assay::report::{FreeEnergy, LikelyCause, Report, Severity, Strength, Tag};
use tarehouse_assay::{Policy, Unwatched, examine};
use tarehouse_demo_data::noise::Disturbance;
use tarehouse_physics::dynamics::{Dynamics, Sharing};
use tarehouse_physics::gamma_point::GammaCorrection;
use tarehouse_physics::images::PairImages;
use tarehouse_physics::long_wave::AcousticMatrix;
use tarehouse_physics::projection::projected;
use tarehouse_physics::qmesh::QMesh;
use tarehouse_physics::units::{EV_TO_KJ_PER_MOL, wavenumber_per_cm};
use tarehouse_physics::{ForceConstants, vibrations};

use crate::judgement::blunders::is_blunder;
use crate::judgement::exact::{Exact, TIE_ANG, diagonal, group_of};
use crate::judgement::lean;
use crate::judgement::uploads::{Case, Expected};
use crate::judgement::{BenchError, TEMPERATURES_K, seed_of};

/// Spacing of the service's own mesh, Å⁻¹: wave vectors that every examination looks at.
const SERVICE_SPACING_PER_ANG: f64 = 0.20;
/// Up to this many inequivalent points the mesh of an instability is twice as fine as the service's.
const DOUBLED_POINTS_MAX: usize = 700;
/// Draws of noise for σ_λ.
const DRAWS: u64 = 8;
/// A genuine instability is decidable from this many σ_λ on.
const DECIDABLE: f64 = 5.0;
/// Wave vectors between sampled ones that are looked at, the softest first.
const BETWEEN: usize = 6;
/// Temperature of the widths that are compared, K.
const WIDTH_TEMPERATURE_K: f64 = 300.0;
/// What a soft mode is lifted to where two interpolations are compared, eV/Å²/u.
const LIFTED: f64 = 1e-6;

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

/// A genuine instability at its most decidable wave vector.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct Depth {
    /// Fractional wave vector.
    pub q: [f64; 3],
    /// Exact eigenvalue, eV/Å²/u.
    pub eigenvalue: f64,
    /// Its standard deviation under the noise of the upload.
    pub sigma: f64,
    /// Its alias scale; zero at commensurate wave vectors.
    pub alias: f64,
    /// Whether it fits the supercell.
    pub commensurate: bool,
    /// Whether the service's own mesh holds it.
    pub on_service_mesh: bool,
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
    /// |F(other sharing) − F(nearest)| of the exact constants at 300 K, kJ/mol per molecule.
    pub alias: Option<f64>,
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
        outcome.verdict = "refused at decoding".to_owned();
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

/// How far the free energy of the exact constants depends on the way images share them.
fn alias(case: &Case<'_>) -> Result<f64, BenchError> {
    let (crystal, exact) = (case.member.exact.crystal(), &case.member.exact);
    let supercell = diagonal(case.multiples)?;
    let group = group_of(crystal)?;
    let images = PairImages::find(crystal, &supercell, TIE_ANG);
    let folded = exact.folded(&supercell)?;
    let dynamics = match group.inversion() {
        Some(inversion) => Dynamics::with_inversion(crystal, &folded, &images, inversion),
        None => Dynamics::new(crystal, &folded, &images),
    };
    let eigen = |error: tarehouse_physics::EigenError| BenchError::Eigen(error.to_string());
    let mesh = QMesh::standard(crystal, &supercell, &group, SERVICE_SPACING_PER_ANG);
    let acoustic = AcousticMatrix::new(&dynamics).map_err(eigen)?;
    let gamma = GammaCorrection::new(&acoustic, crystal, mesh.divisions(), 0.03);
    let term = vibrations::gamma_term(&gamma, WIDTH_TEMPERATURE_K);
    let mut energies = [0.0; 2];
    for (slot, sharing) in energies
        .iter_mut()
        .zip([Sharing::Nearest, Sharing::InversePower])
    {
        let mut spectrum = Vec::with_capacity(mesh.points().len());
        for (index, point) in mesh.points().iter().enumerate() {
            let values = if index == 0 {
                acoustic.optical_modes().eigenvalues
            } else {
                let form = dynamics.form(&point.q, sharing);
                form.eigenvalues(dynamics.branch_count()).map_err(eigen)?
            };
            spectrum.push(values.into_iter().map(|x| x.max(LIFTED)).collect());
        }
        *slot = vibrations::of_mesh(&mesh, &spectrum, term, WIDTH_TEMPERATURE_K).free_energy;
    }
    let molecules = case.member.model.molecule_count() as f64;
    Ok((energies[1] - energies[0]).abs() * EV_TO_KJ_PER_MOL / molecules)
}

fn margin(depth: &Depth) -> f64 {
    depth.eigenvalue + DECIDABLE * depth.sigma + depth.alias
}

fn is_decidable(depth: &Depth) -> bool {
    margin(depth) < 0.0
}

/// The most decidable soft mode of an unstable crystal, seen through a supercell with noise.
fn deepest(
    exact: &Exact,
    multiples: [i64; 3],
    noise: &Disturbance,
    key: u64,
) -> Result<Option<Depth>, BenchError> {
    let crystal = exact.crystal();
    let supercell = diagonal(multiples)?;
    let group = group_of(crystal)?;
    let coarse = QMesh::standard(crystal, &supercell, &group, SERVICE_SPACING_PER_ANG);
    let divisions = coarse.divisions();
    let doubled = QMesh::with_divisions(divisions.map(|n| 2 * n), &supercell, &group);
    let mesh = if doubled.points().len() <= DOUBLED_POINTS_MAX {
        doubled
    } else {
        coarse
    };
    let mut soft = Vec::new();
    for (index, point) in mesh.points().iter().enumerate() {
        let values = exact.eigenvalues(&point.q)?;
        // At Γ three values are zero: what lies clearly below is optical.
        let value = values.first().copied().unwrap_or_default();
        let limit = if index == 0 { -1e-7 } else { 0.0 };
        if value < limit {
            soft.push((value, *point));
        }
    }
    soft.sort_by(|a, b| a.0.total_cmp(&b.0));
    let sampled = soft.iter().find(|(_, point)| point.commensurate);
    let between = soft.iter().filter(|(_, point)| !point.commensurate);
    let images = PairImages::find(crystal, &supercell, TIE_ANG);
    let folded = exact.folded(&supercell)?;
    let dynamics = Dynamics::new(crystal, &folded, &images);
    let mut draws = Vec::new();
    for k in 0..DRAWS {
        let noisy = noise.apply(crystal, &folded, key.wrapping_add(k))?;
        let error = difference(&noisy, &folded);
        draws.push(Dynamics::new(crystal, &projected(&error, &group), &images));
    }
    let mut best: Option<Depth> = None;
    for (eigenvalue, point) in sampled.into_iter().chain(between.take(BETWEEN)) {
        let modes = dynamics
            .modes(&point.q)
            .map_err(|error| BenchError::Eigen(error.to_string()))?;
        let vector = modes.vector(0);
        let shift = |d: &Dynamics, sharing| d.form(&point.q, sharing).expectation(vector);
        let squares: f64 = draws
            .iter()
            .map(|draw| shift(draw, Sharing::Nearest).powi(2))
            .sum();
        let alias = if point.commensurate {
            0.0
        } else {
            (shift(&dynamics, Sharing::Nearest) - shift(&dynamics, Sharing::InversePower)).abs()
        };
        let on_coarse = (0..3).all(|c| {
            let scaled = point.q[c] * f64::from(divisions[c]);
            (scaled - scaled.round()).abs() < 1e-9
        });
        let depth = Depth {
            q: point.q.into(),
            eigenvalue: *eigenvalue,
            sigma: (squares / draws.len() as f64).sqrt(),
            alias,
            commensurate: point.commensurate,
            on_service_mesh: on_coarse,
        };
        if best.as_ref().is_none_or(|b| margin(&depth) < margin(b)) {
            best = Some(depth);
        }
    }
    Ok(best)
}

fn difference(left: &ForceConstants, right: &ForceConstants) -> ForceConstants {
    left.map_blocks(|k, block| block - right.blocks()[k])
}

/// A depth in words.
pub fn depth_words(depth: &Depth) -> String {
    format!(
        "exact {:.1} cm⁻¹ at {:.3?} ({}{}): λ {:.2e}, σ_λ {:.1e}, a {:.1e} eV/Å²/u",
        wavenumber_per_cm(depth.eigenvalue),
        depth.q,
        if depth.commensurate {
            "sampled"
        } else {
            "between"
        },
        if depth.on_service_mesh {
            ""
        } else {
            ", beside the service's mesh"
        },
        depth.eigenvalue,
        depth.sigma,
        depth.alias
    )
}
