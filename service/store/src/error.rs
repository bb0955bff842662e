//! Why the store could not open and why an operation was not done.

use std::io;
use std::path::PathBuf;

use crate::id::SubmissionId;
use crate::state::{ForbiddenTransition, State};

/// Why a store did not open.
#[derive(Debug, thiserror::Error)]
pub enum OpenError {
    /// Another process or another handle has it.
    #[error("the store at {} is in use", path.display())]
    Locked {
        /// Folder of the store.
        path: PathBuf,
    },
    /// The file system refused.
    #[error("{doing} failed at {}", path.display())]
    Io {
        /// What was attempted.
        doing: &'static str,
        /// Where.
        path: PathBuf,
        /// The system's words.
        #[source]
        source: io::Error,
    },
    /// The trail ends before the anchor: acknowledged changes are gone.
    #[error(
        "the trail ends at frame {trail_seq}, but the anchor says that frame {anchor_seq} was written; \
         acknowledged changes are missing ({place})"
    )]
    BehindAnchor {
        /// Last valid frame.
        trail_seq: u64,
        /// Frame that the anchor names.
        anchor_seq: u64,
        /// Where the trail ends.
        place: String,
    },
    /// Trail and anchor do not belong together.
    #[error("frame {seq} of the trail is not the one that the anchor names")]
    AnchorMismatch {
        /// Frame that the anchor names.
        seq: u64,
    },
    /// The trail has frames, but the anchor is missing or unreadable.
    #[error("the trail has {trail_seq} frames, but the anchor is missing or damaged")]
    AnchorDamaged {
        /// Last valid frame.
        trail_seq: u64,
    },
    /// A frame is whole but cannot be understood or does not follow from those before it.
    #[error("frame {seq} of the trail cannot be applied: {detail}")]
    Frame {
        /// Its number.
        seq: u64,
        /// Why not.
        detail: String,
    },
    /// Objects that the trail refers to are missing or have another size.
    #[error("{} objects are missing or have the wrong size, first {}", .missing.len(), .missing.first().map_or("", |m| m))]
    ObjectsMissing {
        /// Digest of each, with what is wrong.
        missing: Vec<String>,
    },
    /// The index could not be built.
    #[error("the index could not be built: {detail}")]
    Index {
        /// Why not.
        detail: String,
    },
}

/// Where a trail is damaged in the middle. What precedes it can be read; nothing can be written.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct TrailDamage {
    /// Segment file.
    pub segment: String,
    /// Byte offset in it.
    pub offset: u64,
    /// Last valid frame before it.
    pub after_seq: u64,
    /// What is wrong there.
    pub detail: String,
}

/// Whether the store takes changes.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Health {
    /// It does.
    Good,
    /// It does not, because the trail is damaged in the middle.
    ReadOnly(TrailDamage),
    /// It does not, because a sync failed; the process should end and be started anew.
    Poisoned(String),
    /// It does not: it was closed.
    Closed,
}

/// One thing that is wrong with a request.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Violation {
    /// Field, with index where there is one.
    pub field: String,
    /// What is wrong.
    pub message: String,
}

/// Why an operation was not done.
#[derive(Debug, thiserror::Error)]
pub enum StoreError {
    /// The request itself is wrong, in all these places.
    #[error("the request is not valid: {}", .0.iter().map(|v| format!("{}: {}", v.field, v.message)).collect::<Vec<_>>().join("; "))]
    Invalid(Vec<Violation>),
    /// There is no such submission or record.
    #[error("there is no submission or record {0}")]
    NotFound(SubmissionId),
    /// The submission has no such array.
    #[error("submission {id} declares no array \"{name}\"")]
    NoSuchArray {
        /// Submission.
        id: SubmissionId,
        /// Name asked for.
        name: String,
    },
    /// The array was declared but has not arrived, or there is no report or projected array yet.
    #[error("{what} of submission {id} is not there yet")]
    NotThereYet {
        /// Submission.
        id: SubmissionId,
        /// What was asked for.
        what: String,
    },
    /// The request id was used before with another package.
    #[error("request id {request_id} was used before for another package, as submission {id}")]
    RequestConflict {
        /// The request id.
        request_id: String,
        /// Submission it opened.
        id: SubmissionId,
    },
    /// The submission has changed since the revision that the caller knows.
    #[error("submission {id} is at revision {present}, not {expected}")]
    RevisionMismatch {
        /// Submission.
        id: SubmissionId,
        /// Revision that the caller knows.
        expected: u64,
        /// Revision it has.
        present: u64,
    },
    /// The state does not allow it.
    #[error("submission {id}: {source}")]
    Forbidden {
        /// Submission.
        id: SubmissionId,
        /// The move.
        source: ForbiddenTransition,
    },
    /// Arrays can be sent to drafts only.
    #[error("submission {id} is {state} and takes no arrays")]
    NotADraft {
        /// Submission.
        id: SubmissionId,
        /// State it is in.
        state: State,
    },
    /// The array is already whole.
    #[error("array \"{name}\" of submission {id} is already stored")]
    AlreadyStored {
        /// Submission.
        id: SubmissionId,
        /// Array.
        name: String,
    },
    /// A part does not start where the last one ended.
    #[error("the next part of \"{name}\" starts at byte {expected}, not {offset}")]
    WrongOffset {
        /// Array.
        name: String,
        /// Offset given.
        offset: u64,
        /// Offset expected.
        expected: u64,
    },
    /// More bytes than declared.
    #[error("array \"{name}\" was declared with {declared} bytes; this part would end at {end}")]
    TooLong {
        /// Array.
        name: String,
        /// Bytes declared.
        declared: u64,
        /// Where the part would end.
        end: u64,
    },
    /// Fewer bytes than declared when finishing.
    #[error("array \"{name}\" was declared with {declared} bytes; {received} have arrived")]
    TooShort {
        /// Array.
        name: String,
        /// Bytes declared.
        declared: u64,
        /// Bytes received.
        received: u64,
    },
    /// The content is not what was declared; what had been received was dropped.
    #[error("array \"{name}\" does not have the declared BLAKE3 digest")]
    DigestMismatch {
        /// Array.
        name: String,
    },
    /// Arrays are missing, so the submission cannot be sealed.
    #[error("submission {id} still lacks {}", .missing.join(", "))]
    ArraysMissing {
        /// Submission.
        id: SubmissionId,
        /// Names.
        missing: Vec<String>,
    },
    /// The page token was not made by this store.
    #[error("the page token is not valid")]
    PageToken,
    /// The page token belongs to another filter.
    #[error("the page token belongs to another filter")]
    PageTokenFilter,
    /// A stored object is missing or its content does not have its digest.
    #[error("object {digest} is damaged: {detail}")]
    ObjectDamaged {
        /// Hexadecimal digest.
        digest: String,
        /// What is wrong.
        detail: String,
    },
    /// No space is left. Nothing was changed; it can be tried again when there is space.
    #[error("no space is left on the disk")]
    NoSpace,
    /// The file system refused; nothing was changed.
    #[error("{doing} failed")]
    Io {
        /// What was attempted.
        doing: &'static str,
        /// The system's words.
        #[source]
        source: io::Error,
    },
    /// The trail is damaged; nothing is written.
    #[error("the store is read-only: the trail is damaged in {} at byte {}", .0.segment, .0.offset)]
    ReadOnly(TrailDamage),
    /// A sync failed; whether the last changes are durable is not known, and no more are taken.
    #[error("the store takes no more changes: {0}")]
    Poisoned(String),
    /// The store was closed.
    #[error("the store is closed")]
    Closed,
    /// The index lags too far behind or has failed; the trail is not concerned.
    #[error("the index cannot answer: {detail}")]
    IndexUnavailable {
        /// Why.
        detail: String,
    },
}

impl StoreError {
    /// An I/O error, told apart from lack of space.
    pub(crate) fn io(doing: &'static str, source: io::Error) -> Self {
        if crate::disk::is_no_space(&source) {
            Self::NoSpace
        } else {
            Self::Io { doing, source }
        }
    }
}
