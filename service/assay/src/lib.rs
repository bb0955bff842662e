//! Judgement: checks, soft-mode tags, free-energy bracket and verdict. No input or output, no async.

mod branches;
mod checks;
mod curves;
mod effective;
mod facts;
mod free_energy;
mod noise;
mod polar;
pub mod policy;
pub mod pressure;
pub mod quasi_harmonic;
mod remedies;
pub mod report;
pub mod series;
mod soft_modes;
mod spectra;
pub mod submission;
mod verdict;
mod workup;

pub use policy::Policy;
pub use report::Report;
pub use submission::Submission;
pub use workup::projected_constants;

use workup::Workup;

use std::fmt;

/// Version of the program that a report names.
pub const PROGRAM_VERSION: &str = env!("CARGO_PKG_VERSION");

/// Where an examination stands, for people who wait.
pub trait Progress: Sync {
    /// Called from any thread: `done` of `total` steps of the stage `stage` are finished.
    fn advance(&self, stage: &'static str, done: usize, total: usize);
}

/// Progress that nobody watches.
#[derive(Debug, Clone, Copy)]
pub struct Unwatched;

impl Progress for Unwatched {
    fn advance(&self, _stage: &'static str, _done: usize, _total: usize) {}
}

/// Why nothing could be computed. Bad physics is never an error: it is a report.
#[derive(Debug, Clone, PartialEq)]
pub enum ExamineError {
    /// An eigenproblem could not be solved.
    Eigenproblem {
        /// What was being computed.
        during: &'static str,
        /// The solver's words.
        detail: String,
    },
}

impl fmt::Display for ExamineError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Self::Eigenproblem { during, detail } => write!(f, "{during}: {detail}"),
        }
    }
}

impl std::error::Error for ExamineError {}

/// Examines a submission under a policy: the one entrance of this crate.
///
/// The report is a pure function of the package, the policy and the program version.
///
/// # Errors
/// Only where nothing could be computed.
pub fn examine(
    submission: &Submission,
    policy: &Policy,
    progress: &dyn Progress,
) -> Result<Report, ExamineError> {
    progress.advance("structure and constants", 0, 1);
    let workup = Workup::new(submission, &policy.limits)?;
    progress.advance("structure and constants", 1, 1);
    let spectra = spectra::spectra(&workup, progress)?;
    progress.advance("judgement", 0, 1);
    let truncated = soft_modes::truncated_dynamics(&workup);
    let soft_modes = soft_modes::soft_modes(&workup, &spectra, &truncated)?;
    let defined = soft_modes
        .iter()
        .all(|mode| mode.tag == report::Tag::Numerical);
    let energies = free_energy::free_energies(&workup, &spectra, defined);
    let bracket_parts = energies.judged_parts(&workup);
    let free_energy = energies.values;
    let facts = facts::facts(&workup, &spectra, &free_energy);
    let width = verdict::judged_half_width(&workup, &free_energy);
    let mut findings = checks::structure::check(&workup);
    findings.extend(checks::blunders::check(&workup));
    findings.extend(checks::sums::check(&workup));
    findings.extend(checks::acoustic::check(&workup, &facts));
    findings.extend(checks::reach::check(&workup, &truncated)?);
    findings.extend(checks::settings::check(&workup));
    findings.extend(checks::claims::check(&workup, &free_energy));
    findings.extend(checks::long_range::check(&workup));
    findings.push(verdict::soft_mode_finding(&soft_modes));
    findings.push(verdict::bracket_finding(&workup, width));
    let (verdict, verdict_reasons) = verdict::decide(&workup, &findings, &soft_modes, width);
    let remedies = remedies::remedies(&workup, bracket_parts.as_ref(), &findings, &soft_modes);
    let report = Report {
        program_version: PROGRAM_VERSION.to_owned(),
        policy_digest: policy.digest,
        package_digest: submission.package_digest,
        verdict,
        verdict_reasons,
        findings,
        noise: workup.noise.summary.clone(),
        soft_modes,
        mesh: facts::mesh(&workup),
        crystal: facts,
        zero_point_energy_kj_per_mol: free_energy.first().map_or(0.0, |f| f.central_kj_per_mol),
        free_energy,
        bracket_parts,
        free_energy_draws: energies.draws,
        remedies,
        curves: curves::curves(&workup, &spectra),
        lowest_branches: branches::lowest(&workup, &spectra),
    };
    progress.advance("judgement", 1, 1);
    Ok(report)
}
