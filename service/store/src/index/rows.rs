//! Encoded rows of the index. They may change freely with [`SHAPE`](super::clean): the index is built anew then.

use prost::Message;

use crate::event::wire::{ObjectWire, SummaryWire, id_of, verdict_code, verdict_of};
use crate::event::{Created, Examined};
use crate::id::SubmissionId;
use crate::state::State;
use crate::trail::writer::Committed;
use crate::view::{ArrayView, CompoundView, DeclaredArray, RecordView, SubmissionView};

#[derive(Clone, PartialEq, Eq, Message)]
pub(crate) struct ArrayRow {
    #[prost(string, tag = "1")]
    pub(crate) name: String,
    #[prost(message, required, tag = "2")]
    pub(crate) object: ObjectWire,
    #[prost(bool, tag = "3")]
    pub(crate) stored: bool,
}

#[derive(Clone, PartialEq, Eq, Message)]
pub(crate) struct SubmissionRow {
    #[prost(uint32, tag = "1")]
    pub(crate) state: u32,
    #[prost(string, tag = "2")]
    pub(crate) contributor: String,
    #[prost(string, tag = "3")]
    pub(crate) compound: String,
    #[prost(string, tag = "4")]
    pub(crate) form: String,
    #[prost(string, tag = "5")]
    pub(crate) formula: String,
    #[prost(string, optional, tag = "6")]
    pub(crate) contributor_key: Option<String>,
    #[prost(bytes = "vec", tag = "7")]
    pub(crate) package_digest: Vec<u8>,
    #[prost(message, required, tag = "8")]
    pub(crate) manifest: ObjectWire,
    #[prost(message, repeated, tag = "9")]
    pub(crate) arrays: Vec<ArrayRow>,
    #[prost(uint64, tag = "10")]
    pub(crate) created_ms: u64,
    #[prost(uint64, tag = "11")]
    pub(crate) updated_ms: u64,
    #[prost(uint64, optional, tag = "12")]
    pub(crate) sealed_ms: Option<u64>,
    #[prost(uint64, optional, tag = "13")]
    pub(crate) examined_ms: Option<u64>,
    #[prost(uint64, tag = "14")]
    pub(crate) created_seq: u64,
    #[prost(uint64, tag = "15")]
    pub(crate) revision: u64,
    #[prost(uint32, tag = "16")]
    pub(crate) crashed_attempts: u32,
    #[prost(message, optional, tag = "17")]
    pub(crate) report: Option<ObjectWire>,
    #[prost(message, optional, tag = "18")]
    pub(crate) projected: Option<ObjectWire>,
    #[prost(uint32, optional, tag = "19")]
    pub(crate) verdict: Option<u32>,
    #[prost(bytes = "vec", optional, tag = "20")]
    pub(crate) policy_digest: Option<Vec<u8>>,
    #[prost(string, optional, tag = "21")]
    pub(crate) program_version: Option<String>,
    #[prost(bytes = "vec", optional, tag = "22")]
    pub(crate) supersedes: Option<Vec<u8>>,
    #[prost(bytes = "vec", optional, tag = "23")]
    pub(crate) superseded_by: Option<Vec<u8>>,
    #[prost(string, tag = "24")]
    pub(crate) updated_by: String,
    #[prost(string, optional, tag = "25")]
    pub(crate) withdrawal_reason: Option<String>,
}

#[derive(Clone, PartialEq, Message)]
pub(crate) struct RecordRow {
    #[prost(string, tag = "1")]
    pub(crate) compound: String,
    #[prost(string, tag = "2")]
    pub(crate) form: String,
    #[prost(string, tag = "3")]
    pub(crate) formula: String,
    #[prost(string, tag = "4")]
    pub(crate) contributor: String,
    #[prost(bytes = "vec", tag = "5")]
    pub(crate) package_digest: Vec<u8>,
    #[prost(uint64, tag = "6")]
    pub(crate) accepted_ms: u64,
    #[prost(bytes = "vec", optional, tag = "7")]
    pub(crate) policy_digest: Option<Vec<u8>>,
    #[prost(bool, tag = "8")]
    pub(crate) retired: bool,
    #[prost(message, required, tag = "9")]
    pub(crate) summary: SummaryWire,
}

#[derive(Clone, PartialEq, Eq, Message)]
pub(crate) struct CompoundRow {
    #[prost(string, tag = "1")]
    pub(crate) name: String,
    #[prost(string, tag = "2")]
    pub(crate) formula: String,
    #[prost(uint64, tag = "3")]
    pub(crate) record_count: u64,
    #[prost(uint64, tag = "4")]
    pub(crate) form_count: u64,
}

impl SubmissionRow {
    /// Row of a submission that was just opened.
    pub(crate) fn opened(event: &Created, change: &Committed) -> Self {
        Self {
            state: u32::from(State::Draft.code()),
            contributor: event.contributor.clone(),
            compound: event.compound.clone(),
            form: event.form.clone(),
            formula: event.formula.clone(),
            contributor_key: event.contributor_key.clone(),
            package_digest: event.package_digest.to_vec(),
            manifest: event.manifest.into(),
            arrays: event
                .arrays
                .iter()
                .map(|array| ArrayRow {
                    name: array.name.clone(),
                    object: ObjectWire {
                        digest: array.digest.to_vec(),
                        size: array.size,
                    },
                    stored: false,
                })
                .collect(),
            created_ms: change.time_ms,
            created_seq: change.seq,
            ..Self::default()
        }
    }

    /// Notes what an examination said.
    pub(crate) fn examined(&mut self, event: &Examined, change: &Committed) {
        self.examined_ms = Some(change.time_ms);
        self.report = Some(event.report.into());
        self.projected = event.projected.map(Into::into);
        self.verdict = Some(verdict_code(event.verdict));
        self.policy_digest = change.policy_digest.map(|digest| digest.to_vec());
        self.program_version = Some(change.program_version.clone());
        self.supersedes = event.supersedes.map(|id| id.as_bytes().to_vec());
        self.superseded_by = event.superseded_by.map(|id| id.as_bytes().to_vec());
    }

    /// The state.
    pub(crate) fn state(&self) -> Result<State, String> {
        State::from_code(self.state).ok_or_else(|| format!("state {} is not known", self.state))
    }

    /// In the domain's words.
    pub(crate) fn view(self, id: SubmissionId) -> Result<SubmissionView, String> {
        let state = self.state()?;
        let mut arrays = Vec::with_capacity(self.arrays.len());
        for array in self.arrays {
            let object: crate::view::ObjectRef = array.object.try_into()?;
            arrays.push(ArrayView {
                declared: DeclaredArray {
                    name: array.name,
                    size: object.size,
                    digest: object.digest,
                },
                stored: array.stored,
            });
        }
        Ok(SubmissionView {
            id,
            state,
            contributor: self.contributor,
            compound: self.compound,
            form: self.form,
            formula: self.formula,
            contributor_key: self.contributor_key,
            package_digest: digest(self.package_digest)?,
            manifest: self.manifest.try_into()?,
            arrays,
            created_ms: self.created_ms,
            updated_ms: self.updated_ms,
            updated_by: self.updated_by,
            sealed_ms: self.sealed_ms,
            examined_ms: self.examined_ms,
            revision: self.revision,
            crashed_attempts: self.crashed_attempts,
            report: self.report.map(TryInto::try_into).transpose()?,
            projected: self.projected.map(TryInto::try_into).transpose()?,
            verdict: match self.verdict {
                None => None,
                Some(code) => Some(verdict_of(code).ok_or("a verdict is not known")?),
            },
            policy_digest: self.policy_digest.map(digest).transpose()?,
            program_version: self.program_version,
            supersedes: self.supersedes.map(id_of).transpose()?,
            superseded_by: self.superseded_by.map(id_of).transpose()?,
            withdrawal_reason: self.withdrawal_reason,
        })
    }
}

impl RecordRow {
    /// In the domain's words.
    pub(crate) fn view(self, id: SubmissionId) -> Result<RecordView, String> {
        Ok(RecordView {
            id,
            compound: self.compound,
            form: self.form,
            formula: self.formula,
            contributor: self.contributor,
            package_digest: digest(self.package_digest)?,
            accepted_ms: self.accepted_ms,
            policy_digest: self.policy_digest.map(digest).transpose()?,
            retired: self.retired,
            summary: self.summary.into(),
        })
    }
}

impl From<CompoundRow> for CompoundView {
    fn from(row: CompoundRow) -> Self {
        Self {
            name: row.name,
            formula: row.formula,
            record_count: row.record_count,
            form_count: row.form_count,
        }
    }
}

fn digest(bytes: Vec<u8>) -> Result<[u8; 32], String> {
    bytes
        .try_into()
        .map_err(|_| "a digest has 32 bytes".to_owned())
}
