//! One attempt at an examination, on a blocking thread: read, decode, examine, encode.
//!
//! Nothing here is lost by a panic or a crash: the submission stays queued until its outcome is durable.

use std::panic::{AssertUnwindSafe, catch_unwind};

use prost::Message as _;
use tarehouse_assay::report::{
    CrystalFacts, Curves, Finding, LikelyCause, Mesh, Noise, Report, Rule, Severity, Verdict,
};
use tarehouse_assay::submission::Digest;
use tarehouse_assay::{Policy, Progress, Submission};
use tarehouse_physics::ForceConstants;
use tarehouse_proto::{package, v1};
use tarehouse_store::{Outcome, RecordSummary, Store, StoreError, SubmissionId};

use crate::examiner::Examiner;
use crate::facts;
use crate::layers::panic_text;

/// Temperatures that a summary keeps; longer curves are read from the report.
const SUMMARY_TEMPERATURES_MAX: usize = 64;

/// Why an attempt came to nothing.
#[derive(Debug, thiserror::Error)]
pub(crate) enum Crash {
    /// What was stored could not be read.
    #[error("the package could not be read")]
    Read(#[from] StoreError),
    /// What was stored is no package, though it was one when it was sealed.
    #[error("the package could not be decoded: {0}")]
    Decode(#[from] package::Violations),
    /// Nothing could be computed.
    #[error("nothing could be computed: {0}")]
    Examine(#[from] tarehouse_assay::ExamineError),
    /// The examination panicked.
    #[error("the examination panicked: {0}")]
    Panic(String),
}

/// Reads a sealed package and decodes it.
pub(crate) fn decode(store: &Store, id: SubmissionId) -> Result<Submission, Crash> {
    let view = store.get_submission(id)?;
    let manifest = store.read_manifest(id)?;
    let mut arrays = Vec::with_capacity(view.arrays.len());
    for array in view.arrays {
        let name = array.declared.name;
        let bytes = store.read_array(id, &name)?;
        arrays.push((name, bytes));
    }
    let named: Vec<(&str, &[u8])> = arrays
        .iter()
        .map(|(name, bytes)| (name.as_str(), bytes.as_slice()))
        .collect();
    Ok(package::decode(&manifest, &named)?)
}

/// Examines a sealed package; a panic is a crash.
pub(crate) fn attempt(
    store: &Store,
    id: SubmissionId,
    examiner: &dyn Examiner,
    policy: &Policy,
    progress: &dyn Progress,
) -> Result<Outcome, Crash> {
    // What a panic may leave half done is dropped with the attempt; the store is not written here.
    catch_unwind(AssertUnwindSafe(|| {
        let submission = decode(store, id)?;
        let report = examiner.examine(&submission, policy, progress)?;
        let projected = wants_projected(report.verdict).then(|| {
            progress.advance("project", 0, 1);
            array_file(&examiner.projected_constants(&submission, policy))
        });
        progress.advance("store", 0, 1);
        Ok(outcome(&submission, report, projected))
    }))
    .unwrap_or_else(|payload| Err(Crash::Panic(panic_text(payload.as_ref()))))
}

/// Projected constants are kept of what is, or may come, into the catalogue.
fn wants_projected(verdict: Verdict) -> bool {
    match verdict {
        Verdict::Accept | Verdict::Hold => true,
        Verdict::Reject => false,
    }
}

/// Constants as an array file: eV/Å², displaced atom first, shape (L, n, 3, n, 3).
fn array_file(constants: &ForceConstants) -> Vec<u8> {
    let cells = constants.supercell().cell_count() as u64;
    let atoms = constants.atom_count() as u64;
    package::npy::write(&[cells, atoms, 3, atoms, 3], &constants.to_array())
}

/// What an examination hands to the store.
fn outcome(submission: &Submission, report: Report, projected: Option<Vec<u8>>) -> Outcome {
    let verdict = report.verdict;
    let summary = (verdict == Verdict::Accept).then(|| summary(submission, &report));
    Outcome {
        report: v1::Report::from(report).encode_to_vec(),
        projected,
        verdict,
        summary,
    }
}

fn summary(submission: &Submission, report: &Report) -> RecordSummary {
    let constants = &submission.settings.level;
    let fits = report.free_energy.len() <= SUMMARY_TEMPERATURES_MAX;
    let curve = if fits {
        report.free_energy.as_slice()
    } else {
        &[]
    };
    RecordSummary {
        level: constants.key(),
        energy_level: facts::energy_level(submission.energy.level.as_ref(), constants),
        lattice_energy_kj_per_mol: report.crystal.lattice_energy_kj_per_mol,
        zero_point_energy_kj_per_mol: report.zero_point_energy_kj_per_mol,
        defined: report.free_energy.iter().all(|point| point.defined),
        temperature_k: curve.iter().map(|point| point.temperature_k).collect(),
        central_kj_per_mol: curve.iter().map(|point| point.central_kj_per_mol).collect(),
        lower_kj_per_mol: curve.iter().map(|point| point.lower_kj_per_mol).collect(),
        upper_kj_per_mol: curve.iter().map(|point| point.upper_kj_per_mol).collect(),
        entropy_j_per_mol_k: curve
            .iter()
            .map(|point| point.entropy_j_per_mol_k)
            .collect(),
        density_g_per_cm3: Some(report.crystal.density_g_per_cm3),
        space_group_number: Some(report.crystal.space_group_number),
    }
}

/// The report of a submission whose examination did not finish in any attempt: held, and a curator sees why.
pub(crate) fn failed_report(package_digest: Digest, policy: &Policy, attempts: u32) -> Vec<u8> {
    let message = format!("The examination did not finish in {attempts} attempts.");
    let report = Report {
        program_version: tarehouse_assay::PROGRAM_VERSION.to_owned(),
        policy_digest: policy.digest,
        package_digest,
        verdict: Verdict::Hold,
        verdict_reasons: vec![message.clone()],
        findings: vec![Finding {
            rule: Rule::ExaminationFailed,
            severity: Severity::Fail,
            measured: Some(f64::from(attempts)),
            limit: None,
            unit: "attempts".to_owned(),
            location: String::new(),
            likely_cause: LikelyCause::Unknown,
            message,
            remedy: "Nothing is wrong with the upload as far as is known; a curator looks at the service's log."
                .to_owned(),
        }],
        noise: Noise::default(),
        soft_modes: Vec::new(),
        mesh: Mesh::default(),
        crystal: CrystalFacts::default(),
        zero_point_energy_kj_per_mol: 0.0,
        free_energy: Vec::new(),
        bracket_parts: None,
        free_energy_draws: Vec::new(),
        remedies: Vec::new(),
        curves: Curves::default(),
        lowest_branches: Vec::new(),
    };
    v1::Report::from(report).encode_to_vec()
}
