//! The events of the trail: what each change of state says.
//!
//! A payload is known by its kind and version; a written payload is never changed, a new shape gets a new version and
//! the old one stays readable.

use tarehouse_assay::report::Verdict;
use tarehouse_assay::submission::Digest;

use crate::id::SubmissionId;
use crate::state::State;
use crate::view::{DeclaredArray, ObjectRef, RecordSummary};

pub(crate) mod wire;

/// A change of state.
#[derive(Debug, Clone, PartialEq)]
pub(crate) enum Event {
    Created(Box<Created>),
    ArrayStored(ArrayStored),
    Sealed(SubmissionId),
    Crashed(Crashed),
    Examined(Box<Examined>),
    Withdrawn(Withdrawn),
    Retired(SubmissionId),
    RequestBound(RequestBound),
}

/// A submission was opened.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct Created {
    pub(crate) id: SubmissionId,
    pub(crate) request_id: String,
    pub(crate) package_digest: Digest,
    pub(crate) manifest: ObjectRef,
    pub(crate) arrays: Vec<DeclaredArray>,
    pub(crate) compound: String,
    pub(crate) form: String,
    pub(crate) formula: String,
    pub(crate) contributor_key: Option<String>,
    pub(crate) contributor: String,
}

/// An array arrived whole.
#[derive(Debug, Clone, PartialEq, Eq)]
pub(crate) struct ArrayStored {
    pub(crate) id: SubmissionId,
    pub(crate) name: String,
    pub(crate) object: ObjectRef,
}

/// An attempt at an examination crashed.
#[derive(Debug, Clone, PartialEq, Eq)]
pub(crate) struct Crashed {
    pub(crate) id: SubmissionId,
    pub(crate) attempt: u32,
    pub(crate) detail: String,
    /// State after it: queued, or held after the last attempt.
    pub(crate) state: State,
    /// Report that says so, after the last attempt.
    pub(crate) report: Option<ObjectRef>,
}

/// An examination ended.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct Examined {
    pub(crate) id: SubmissionId,
    pub(crate) report: ObjectRef,
    pub(crate) projected: Option<ObjectRef>,
    pub(crate) verdict: Verdict,
    pub(crate) state: State,
    pub(crate) summary: Option<RecordSummary>,
    /// Older submission that this one takes out of the catalogue.
    pub(crate) supersedes: Option<SubmissionId>,
    /// Newer accepted submission, where this one comes too late for the catalogue.
    pub(crate) superseded_by: Option<SubmissionId>,
}

/// The contributor took a submission back.
#[derive(Debug, Clone, PartialEq, Eq)]
pub(crate) struct Withdrawn {
    pub(crate) id: SubmissionId,
    /// The contributor's words; empty where none were given.
    pub(crate) reason: String,
}

/// One more request id found a submission that was there before, and stands for it from now on.
#[derive(Debug, Clone, PartialEq, Eq)]
pub(crate) struct RequestBound {
    pub(crate) id: SubmissionId,
    pub(crate) request_id: String,
}

/// Why a payload could not be read.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
pub(crate) enum EventError {
    #[error("kind {kind} version {version} is not known to this program")]
    Unknown { kind: u32, version: u32 },
    #[error("the payload of kind {kind} cannot be decoded: {detail}")]
    Payload { kind: u32, detail: String },
}

impl Event {
    /// Submission that it speaks of.
    pub(crate) fn id(&self) -> SubmissionId {
        match self {
            Self::Created(event) => event.id,
            Self::ArrayStored(event) => event.id,
            Self::Crashed(event) => event.id,
            Self::Examined(event) => event.id,
            Self::Withdrawn(event) => event.id,
            Self::RequestBound(event) => event.id,
            Self::Sealed(id) | Self::Retired(id) => *id,
        }
    }

    /// Whether it changes what can be read of its submission, and with that its revision.
    pub(crate) fn changes_submission(&self) -> bool {
        !matches!(self, Self::RequestBound(_))
    }

    /// Objects that must exist because of it.
    pub(crate) fn objects(&self) -> Vec<ObjectRef> {
        match self {
            Self::Created(event) => vec![event.manifest],
            Self::ArrayStored(event) => vec![event.object],
            Self::Crashed(event) => event.report.into_iter().collect(),
            Self::Examined(event) => {
                let mut objects = vec![event.report];
                objects.extend(event.projected);
                objects
            }
            Self::Sealed(_) | Self::Withdrawn(_) | Self::Retired(_) | Self::RequestBound(_) => {
                Vec::new()
            }
        }
    }
}
