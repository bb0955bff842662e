//! What goes into the store and what comes out of it, in the domain's words.

use tarehouse_assay::report::Verdict;
use tarehouse_assay::submission::Digest;

use crate::id::SubmissionId;
use crate::state::State;

/// Who acts, written into every frame.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Actor {
    /// Principal; `local` where there is no server.
    pub principal: String,
    /// Digest of the policy in force, where one matters.
    pub policy_digest: Option<Digest>,
}

impl Actor {
    /// A principal, with no policy.
    pub fn new(principal: impl Into<String>) -> Self {
        Self {
            principal: principal.into(),
            policy_digest: None,
        }
    }

    /// The same under a policy.
    #[must_use]
    pub fn under(mut self, policy_digest: Digest) -> Self {
        self.policy_digest = Some(policy_digest);
        self
    }
}

/// A stored file, by content.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct ObjectRef {
    /// BLAKE3 of the content.
    pub digest: Digest,
    /// Length, bytes.
    pub size: u64,
}

/// An array that a submission promises.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct DeclaredArray {
    /// File name in the package.
    pub name: String,
    /// Length, bytes.
    pub size: u64,
    /// BLAKE3 of the file.
    pub digest: Digest,
}

/// A submission to be opened. The contributor is the actor's principal.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct NewSubmission {
    /// Makes a repeated request harmless; unique per contributor.
    pub request_id: String,
    /// BLAKE3 of the package, as the package format defines it.
    pub package_digest: Digest,
    /// Bytes of `package.toml`.
    pub manifest: Vec<u8>,
    /// Arrays that will follow.
    pub arrays: Vec<DeclaredArray>,
    /// Name of the compound.
    pub compound: String,
    /// Contributor's label of the polymorph.
    pub form: String,
    /// One formula unit, Hill order.
    pub formula: String,
    /// Contributor's own id.
    pub contributor_key: Option<String>,
}

/// Answer to a creation.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Receipt {
    /// The submission.
    pub id: SubmissionId,
    /// Whether this call opened it; else it was there before.
    pub created: bool,
    /// State it is in.
    pub state: State,
}

/// One array of a submission.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct ArrayView {
    /// What was declared.
    pub declared: DeclaredArray,
    /// Whether it arrived whole.
    pub stored: bool,
}

/// A submission with its history.
#[derive(Debug, Clone, PartialEq)]
pub struct SubmissionView {
    /// Id.
    pub id: SubmissionId,
    /// State.
    pub state: State,
    /// Principal who opened it.
    pub contributor: String,
    /// Name of the compound.
    pub compound: String,
    /// Label of the polymorph.
    pub form: String,
    /// One formula unit, Hill order.
    pub formula: String,
    /// Contributor's own id.
    pub contributor_key: Option<String>,
    /// BLAKE3 of the package.
    pub package_digest: Digest,
    /// The manifest.
    pub manifest: ObjectRef,
    /// Arrays in the order declared.
    pub arrays: Vec<ArrayView>,
    /// When it was opened, ms since 1970.
    pub created_ms: u64,
    /// When it last changed, ms since 1970.
    pub updated_ms: u64,
    /// Principal who last changed it.
    pub updated_by: String,
    /// When it was sealed, ms since 1970.
    pub sealed_ms: Option<u64>,
    /// When its examination ended, ms since 1970.
    pub examined_ms: Option<u64>,
    /// Number of the frame that last changed it; an etag.
    pub revision: u64,
    /// Attempts that crashed.
    pub crashed_attempts: u32,
    /// The report, once there is one.
    pub report: Option<ObjectRef>,
    /// Projected constants, once there are some.
    pub projected: Option<ObjectRef>,
    /// What the examination concluded.
    pub verdict: Option<Verdict>,
    /// Policy of the examination.
    pub policy_digest: Option<Digest>,
    /// Program version of the examination.
    pub program_version: Option<String>,
    /// Older submission that it took out of the catalogue.
    pub supersedes: Option<SubmissionId>,
    /// Newer submission that took it out of the catalogue.
    pub superseded_by: Option<SubmissionId>,
    /// Why the contributor took it back, where that was said.
    pub withdrawal_reason: Option<String>,
}

/// Numbers of an accepted submission that lists and rankings need; at most
/// [`SUMMARY_BYTES_MAX`](crate::limits::SUMMARY_BYTES_MAX) when encoded.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct RecordSummary {
    /// Level of the constants, as [`LevelParts::key`](tarehouse_assay::submission::LevelParts::key) writes it.
    pub level: String,
    /// Level of the static energy, written likewise.
    pub energy_level: String,
    /// Static lattice energy, kJ/mol per formula unit.
    pub lattice_energy_kj_per_mol: f64,
    /// Zero-point energy, kJ/mol per formula unit.
    pub zero_point_energy_kj_per_mol: f64,
    /// Whether there is a harmonic free energy; else the lists of energies say nothing.
    pub defined: bool,
    /// Temperatures of the lists below, K; empty where the curve is too long and must be read from the report.
    pub temperature_k: Vec<f64>,
    /// Vibrational free energy, kJ/mol per formula unit.
    pub central_kj_per_mol: Vec<f64>,
    /// Lower end of the bracket, kJ/mol per formula unit.
    pub lower_kj_per_mol: Vec<f64>,
    /// Upper end of the bracket, kJ/mol per formula unit.
    pub upper_kj_per_mol: Vec<f64>,
    /// Entropy, J/mol/K per formula unit.
    pub entropy_j_per_mol_k: Vec<f64>,
    /// Density, g/cm³.
    pub density_g_per_cm3: Option<f64>,
    /// Space-group number, International Tables A.
    pub space_group_number: Option<u32>,
}

/// A record of the catalogue.
#[derive(Debug, Clone, PartialEq)]
pub struct RecordView {
    /// Id of the submission that became it.
    pub id: SubmissionId,
    /// Name of the compound, as contributed.
    pub compound: String,
    /// Label of the polymorph.
    pub form: String,
    /// One formula unit, Hill order.
    pub formula: String,
    /// Principal who contributed it.
    pub contributor: String,
    /// BLAKE3 of the package.
    pub package_digest: Digest,
    /// When it was accepted, ms since 1970.
    pub accepted_ms: u64,
    /// Policy it was accepted under.
    pub policy_digest: Option<Digest>,
    /// Whether it has been taken out again.
    pub retired: bool,
    /// Its numbers.
    pub summary: RecordSummary,
}

/// A compound with at least one record that is not retired.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct CompoundView {
    /// Name, as first contributed.
    pub name: String,
    /// One formula unit, as first contributed.
    pub formula: String,
    /// Records that are not retired.
    pub record_count: u64,
    /// Labels of polymorphs among them.
    pub form_count: u64,
}

/// How many entries from where.
#[derive(Debug, Clone, PartialEq, Eq, Default)]
pub struct PageRequest {
    /// Entries wanted; 0 for the default, more than the maximum is the maximum.
    pub size: usize,
    /// Token of the page before; empty for the first.
    pub token: String,
}

/// A part of a list.
#[derive(Debug, Clone, PartialEq)]
pub struct Page<T> {
    /// Entries.
    pub entries: Vec<T>,
    /// Token of the next page; empty at the end. A page may be short or empty and still have a next one.
    pub next_token: String,
}

/// Which submissions; all conditions hold.
#[derive(Debug, Clone, PartialEq, Eq, Default)]
pub struct SubmissionFilter {
    /// In this state.
    pub state: Option<State>,
    /// Of this contributor.
    pub contributor: Option<String>,
    /// Of this compound; case and blanks do not matter.
    pub compound: Option<String>,
}

/// Order of a list of records.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub enum RecordOrder {
    /// Latest accepted first.
    #[default]
    Newest,
    /// Lowest static lattice energy first. Comparable only inside one compound and level.
    LatticeEnergy,
}

/// Which records; all conditions hold.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct RecordFilter {
    /// Of this compound; case and blanks do not matter.
    pub compound: Option<String>,
    /// Of this form.
    pub form: Option<String>,
    /// At this level of the constants.
    pub level: Option<String>,
    /// At this level of the static energy.
    pub energy_level: Option<String>,
    /// Of this contributor.
    pub contributor: Option<String>,
    /// Static lattice energy at most this, kJ/mol per formula unit.
    pub lattice_energy_max_kj_per_mol: Option<f64>,
    /// Retired ones too.
    pub include_retired: bool,
    /// In which order.
    pub order: RecordOrder,
}

/// What an examination hands over.
#[derive(Debug, Clone, PartialEq)]
pub struct Outcome {
    /// Encoded report.
    pub report: Vec<u8>,
    /// Projected constants as an array file.
    pub projected: Option<Vec<u8>>,
    /// What it concluded.
    pub verdict: Verdict,
    /// Numbers for the catalogue; needed to accept.
    pub summary: Option<RecordSummary>,
}

/// Answer to a finished examination.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Completion {
    /// State of the submission now.
    pub state: State,
    /// Whether this verdict counted; else another was first, or the submission was withdrawn.
    pub counted: bool,
}

/// Answer to a crashed examination.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct CrashOutcome {
    /// State of the submission now: queued again, or held after the last attempt.
    pub state: State,
    /// Attempts that have crashed.
    pub crashed_attempts: u32,
}
