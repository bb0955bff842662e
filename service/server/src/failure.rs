//! Why a call could not be served, and how that reads on the wire.
//!
//! Invariants: every status carries `google.rpc.ErrorInfo` with a reason of [`reason`] and the domain [`DOMAIN`]; a
//! refusal that time may heal carries `RetryInfo`; internal context goes to the log, never to the caller. An upload
//! whose physics is bad is no failure.

use std::collections::HashMap;
use std::time::Duration;

use tarehouse_store::StoreError;
use tonic::{Code, Status};
use tonic_types::{ErrorDetails, FieldViolation, QuotaViolation, StatusExt as _};

/// Domain of every `ErrorInfo`.
pub const DOMAIN: &str = "tarehouse";

/// Most field violations that a status carries; more break common clients. The message says how many there are.
pub const VIOLATIONS_MAX: usize = 20;

/// Longest text of one violation that a status carries, bytes.
const VIOLATION_BYTES_MAX: usize = 240;

/// All violations of a status together, bytes: common clients refuse headers beyond 8 KiB, and this grows by a third
/// on its way there.
const DETAIL_BYTES_MAX: usize = 4400;

/// When to come back to a store that cannot serve.
const STORE_RETRY_AFTER: Duration = Duration::from_secs(30);

/// Reasons of `ErrorInfo`; only ever appended to.
pub mod reason {
    /// The package breaks the package format; the violations say where.
    pub const PACKAGE_INVALID: &str = "PACKAGE_INVALID";
    /// A field of the request is not what its comment asks for.
    pub const REQUEST_INVALID: &str = "REQUEST_INVALID";
    /// The declared arrays do not agree with the manifest.
    pub const ARRAYS_DISAGREE: &str = "ARRAYS_DISAGREE";
    /// A message is longer than the service reads.
    pub const MESSAGE_TOO_LARGE: &str = "MESSAGE_TOO_LARGE";
    /// The stream ended, or its frames came in another order than open, chunks, finish.
    pub const STREAM_INCOMPLETE: &str = "STREAM_INCOMPLETE";
    /// The CRC-32 of a chunk is not that of its bytes.
    pub const CHECKSUM_MISMATCH: &str = "CHECKSUM_MISMATCH";
    /// A chunk does not follow the committed bytes.
    pub const OFFSET_MISMATCH: &str = "OFFSET_MISMATCH";
    /// More bytes than announced.
    pub const SIZE_EXCEEDED: &str = "SIZE_EXCEEDED";
    /// The digest of the whole array is not the declared one.
    pub const DIGEST_MISMATCH: &str = "DIGEST_MISMATCH";
    /// The size of the whole array is not the declared one.
    pub const SIZE_MISMATCH: &str = "SIZE_MISMATCH";
    /// The caller was silent for too long.
    pub const STREAM_IDLE: &str = "STREAM_IDLE";
    /// The method's time is over.
    pub const DEADLINE_EXCEEDED: &str = "DEADLINE_EXCEEDED";
    /// No such submission.
    pub const SUBMISSION_NOT_FOUND: &str = "SUBMISSION_NOT_FOUND";
    /// No such record.
    pub const RECORD_NOT_FOUND: &str = "RECORD_NOT_FOUND";
    /// No such array.
    pub const ARRAY_NOT_FOUND: &str = "ARRAY_NOT_FOUND";
    /// The submission has not been examined.
    pub const REPORT_NOT_FOUND: &str = "REPORT_NOT_FOUND";
    /// No such compound.
    pub const COMPOUND_NOT_FOUND: &str = "COMPOUND_NOT_FOUND";
    /// The request id was used for another package.
    pub const REQUEST_ID_CONFLICT: &str = "REQUEST_ID_CONFLICT";
    /// Another upload of this array is open.
    pub const UPLOAD_IN_PROGRESS: &str = "UPLOAD_IN_PROGRESS";
    /// The etag is not the present one.
    pub const ETAG_MISMATCH: &str = "ETAG_MISMATCH";
    /// The state does not allow it.
    pub const STATE_FORBIDS: &str = "STATE_FORBIDS";
    /// Arrays are missing.
    pub const ARRAYS_MISSING: &str = "ARRAYS_MISSING";
    /// Too many submissions wait.
    pub const QUEUE_FULL: &str = "QUEUE_FULL";
    /// Too many upload streams are open.
    pub const UPLOADS_FULL: &str = "UPLOADS_FULL";
    /// Too many watches are open.
    pub const WATCHES_FULL: &str = "WATCHES_FULL";
    /// Too many arrays are being fetched.
    pub const FETCHES_FULL: &str = "FETCHES_FULL";
    /// A temperature lies outside the grid of the policy.
    pub const TEMPERATURE_OUTSIDE: &str = "TEMPERATURE_OUTSIDE";
    /// The members of a series are of different forms or levels.
    pub const SERIES_MIXED: &str = "SERIES_MIXED";
    /// The pressure is beyond what one volume answers for.
    pub const VOLUME_SERIES_NEEDED: &str = "VOLUME_SERIES_NEEDED";
    /// The members make no volume series.
    pub const VOLUME_SERIES_UNFIT: &str = "VOLUME_SERIES_UNFIT";
    /// No temperature and pressure asked for lies inside the volumes examined.
    pub const VOLUMES_EXCEEDED: &str = "VOLUMES_EXCEEDED";
    /// The service is stopping.
    pub const DRAINING: &str = "DRAINING";
    /// The principal holds too many drafts.
    pub const DRAFT_QUOTA: &str = "DRAFT_QUOTA";
    /// No space is left in the store.
    pub const NO_SPACE: &str = "NO_SPACE";
    /// The store takes no writes.
    pub const STORE_UNAVAILABLE: &str = "STORE_UNAVAILABLE";
    /// What is stored is not what was stored.
    pub const STORE_DAMAGED: &str = "STORE_DAMAGED";
    /// A fault of the service.
    pub const INTERNAL: &str = "INTERNAL";
}

/// What one field of a request breaks.
#[derive(Debug, Clone, PartialEq, Eq)]
pub(crate) struct Breach {
    /// Path of the field.
    pub(crate) field: String,
    /// What is wrong.
    pub(crate) message: String,
}

/// Why a call could not be served.
#[derive(Debug, Clone, PartialEq, Eq)]
pub(crate) enum Failure {
    /// The request is wrong whatever the state of the service.
    Invalid {
        reason: &'static str,
        message: String,
        breaches: Vec<Breach>,
        /// Breaches beyond those listed.
        unlisted_count: usize,
    },
    /// What was asked for is not there.
    NotFound {
        reason: &'static str,
        message: String,
    },
    /// Somebody else was first.
    Conflict {
        reason: &'static str,
        message: String,
        retry_after: Option<Duration>,
    },
    /// The request id stands for something else.
    Exists {
        reason: &'static str,
        message: String,
    },
    /// The present state does not allow it.
    Forbidden {
        reason: &'static str,
        message: String,
        breaches: Vec<Breach>,
    },
    /// Later it may work.
    Unavailable {
        reason: &'static str,
        message: String,
        retry_after: Duration,
    },
    /// The service has nothing left to give.
    Exhausted {
        reason: &'static str,
        message: String,
    },
    /// The caller has used up what it may use.
    Quota {
        reason: &'static str,
        subject: String,
        message: String,
        retry_after: Duration,
    },
    /// The time is over.
    Late {
        reason: &'static str,
        message: String,
    },
    /// Stored bytes are damaged.
    Damaged { message: String },
    /// A fault of the service; `context` is for the log.
    Internal { context: String },
}

impl Failure {
    /// One field is wrong.
    pub(crate) fn field(field: &str, message: impl Into<String>) -> Self {
        let message = message.into();
        Self::Invalid {
            reason: reason::REQUEST_INVALID,
            message: format!("{field}: {message}"),
            breaches: vec![Breach {
                field: field.to_owned(),
                message,
            }],
            unlisted_count: 0,
        }
    }

    /// A wrong request without a field to point at.
    pub(crate) fn invalid(reason: &'static str, message: impl Into<String>) -> Self {
        Self::Invalid {
            reason,
            message: message.into(),
            breaches: Vec::new(),
            unlisted_count: 0,
        }
    }

    /// The present state does not allow it.
    pub(crate) fn forbidden(reason: &'static str, message: String) -> Self {
        Self::Forbidden {
            reason,
            message,
            breaches: Vec::new(),
        }
    }

    /// The service is stopping.
    pub(crate) fn draining() -> Self {
        Self::Unavailable {
            reason: reason::DRAINING,
            message: "the service is stopping; try again when it is back".to_owned(),
            retry_after: Duration::from_secs(5),
        }
    }

    /// A fault of the service.
    pub(crate) fn internal(context: impl std::fmt::Display) -> Self {
        Self::Internal {
            context: context.to_string(),
        }
    }
}

impl From<StoreError> for Failure {
    fn from(error: StoreError) -> Self {
        let message = error.to_string();
        match error {
            StoreError::Invalid(violations) => Self::Invalid {
                reason: reason::REQUEST_INVALID,
                message: "the request breaks limits of the store".to_owned(),
                breaches: violations
                    .into_iter()
                    .map(|violation| Breach {
                        field: violation.field,
                        message: violation.message,
                    })
                    .collect(),
                unlisted_count: 0,
            },
            StoreError::NotFound(_) => Self::NotFound {
                reason: reason::SUBMISSION_NOT_FOUND,
                message,
            },
            StoreError::NoSuchArray { .. } | StoreError::NotThereYet { .. } => Self::NotFound {
                reason: reason::ARRAY_NOT_FOUND,
                message,
            },
            StoreError::RequestConflict { .. } => Self::Exists {
                reason: reason::REQUEST_ID_CONFLICT,
                message,
            },
            StoreError::Forbidden { .. }
            | StoreError::NotADraft { .. }
            | StoreError::AlreadyStored { .. } => Self::forbidden(reason::STATE_FORBIDS, message),
            StoreError::WrongOffset { .. } => Self::forbidden(reason::OFFSET_MISMATCH, message),
            StoreError::TooLong { .. } => Self::invalid(reason::SIZE_EXCEEDED, message),
            StoreError::TooShort { .. } => Self::invalid(reason::SIZE_MISMATCH, message),
            StoreError::DigestMismatch { .. } => Self::invalid(reason::DIGEST_MISMATCH, message),
            StoreError::ArraysMissing { .. } => Self::forbidden(reason::ARRAYS_MISSING, message),
            StoreError::PageToken | StoreError::PageTokenFilter => {
                Self::field("page_token", message)
            }
            StoreError::ObjectDamaged { .. } => Self::Damaged { message },
            StoreError::NoSpace => Self::Exhausted {
                reason: reason::NO_SPACE,
                message,
            },
            StoreError::Io { .. } => Self::internal(with_sources(&error)),
            StoreError::ReadOnly(_)
            | StoreError::Poisoned(_)
            | StoreError::IndexUnavailable { .. } => {
                tracing::error!(%message, "the store cannot serve");
                Self::Unavailable {
                    reason: reason::STORE_UNAVAILABLE,
                    message:
                        "the store cannot serve this now; the operator has been told in the log"
                            .to_owned(),
                    retry_after: STORE_RETRY_AFTER,
                }
            }
            StoreError::Closed => Self::draining(),
        }
    }
}

/// An error with its sources, for the log.
pub(crate) fn with_sources(error: &dyn std::error::Error) -> String {
    let mut words = error.to_string();
    let mut source = error.source();
    while let Some(inner) = source {
        words = format!("{words}: {inner}");
        source = inner.source();
    }
    words
}

impl From<Failure> for Status {
    fn from(failure: Failure) -> Self {
        match failure {
            Failure::Invalid {
                reason,
                message,
                breaches,
                unlisted_count,
            } => violated(
                Code::InvalidArgument,
                reason,
                message,
                breaches,
                unlisted_count,
            ),
            Failure::NotFound { reason, message } => plain(Code::NotFound, reason, message),
            Failure::Conflict {
                reason,
                message,
                retry_after,
            } => {
                let mut details = info(reason);
                if retry_after.is_some() {
                    details.set_retry_info(retry_after);
                }
                Self::with_error_details(Code::Aborted, message, details)
            }
            Failure::Exists { reason, message } => plain(Code::AlreadyExists, reason, message),
            Failure::Forbidden {
                reason,
                message,
                breaches,
            } => violated(Code::FailedPrecondition, reason, message, breaches, 0),
            Failure::Unavailable {
                reason,
                message,
                retry_after,
            } => {
                let mut details = info(reason);
                details.set_retry_info(Some(retry_after));
                Self::with_error_details(Code::Unavailable, message, details)
            }
            Failure::Quota {
                reason,
                subject,
                message,
                retry_after,
            } => {
                let mut details = info(reason);
                details.set_retry_info(Some(retry_after));
                details.set_quota_failure(vec![QuotaViolation::new(subject, message.clone())]);
                Self::with_error_details(Code::ResourceExhausted, message, details)
            }
            Failure::Exhausted { reason, message } => {
                plain(Code::ResourceExhausted, reason, message)
            }
            Failure::Late { reason, message } => plain(Code::DeadlineExceeded, reason, message),
            Failure::Damaged { message } => {
                tracing::error!(%message, "stored bytes are damaged");
                let public = "what is stored is damaged; the operator has been told in the log";
                plain(Code::DataLoss, reason::STORE_DAMAGED, public.to_owned())
            }
            Failure::Internal { context } => {
                tracing::error!(%context, "a call failed inside the service");
                let public = "a fault of the service; its log says more under this request id";
                plain(Code::Internal, reason::INTERNAL, public.to_owned())
            }
        }
    }
}

fn info(reason: &'static str) -> ErrorDetails {
    ErrorDetails::with_error_info(reason, DOMAIN, HashMap::new())
}

fn plain(code: Code, reason: &'static str, message: String) -> Status {
    Status::with_error_details(code, message, info(reason))
}

fn violated(
    code: Code,
    reason: &'static str,
    message: String,
    breaches: Vec<Breach>,
    unlisted_count: usize,
) -> Status {
    let mut details = info(reason);
    let count = breaches.len() + unlisted_count;
    let mut bytes_left = DETAIL_BYTES_MAX;
    let mut shown = Vec::new();
    for breach in breaches.into_iter().take(VIOLATIONS_MAX) {
        let (field, words) = (shortened(&breach.field), shortened(&breach.message));
        let Some(left) = bytes_left.checked_sub(field.len() + words.len()) else {
            break;
        };
        bytes_left = left;
        shown.push(FieldViolation::new(field, words));
    }
    let message = match count - shown.len() {
        0 => message,
        more => format!("{message} ({count} violations, {more} more than are listed)"),
    };
    if !shown.is_empty() {
        details.set_bad_request(shown);
    }
    Status::with_error_details(code, message, details)
}

fn shortened(text: &str) -> String {
    if text.len() <= VIOLATION_BYTES_MAX {
        return text.to_owned();
    }
    let mut end = VIOLATION_BYTES_MAX;
    while !text.is_char_boundary(end) {
        end -= 1;
    }
    format!("{}…", text.get(..end).unwrap_or_default())
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_status_lists_twenty_violations_and_counts_the_rest() {
        for (count, length, listed) in [
            (1, 10, 1),
            (19, 10, 19),
            (20, 10, 20),
            (21, 10, 20),
            (500, 10, 20),
            (20, 1000, 17),
        ] {
            let breaches = (0..count)
                .map(|k| Breach {
                    field: format!("f[{k}]"),
                    message: "x".repeat(length),
                })
                .collect();
            let status = Status::from(Failure::Invalid {
                reason: reason::PACKAGE_INVALID,
                message: "no".to_owned(),
                breaches,
                unlisted_count: 3,
            });
            let details = status.get_error_details();
            let found = details.bad_request().unwrap().field_violations.len();
            assert_eq!(found, listed);
            let more = format!("{} more than are listed", count + 3 - listed);
            assert!(status.message().contains(&more), "{}", status.message());
            assert!(status.details().len() < 5000, "{}", status.details().len());
        }
    }

    #[test]
    fn what_is_listed_in_full_is_not_counted() {
        let status = Status::from(Failure::field("name", "is bad"));
        assert_eq!(status.message(), "name: is bad");
        let details = status.get_error_details();
        assert_eq!(
            details.bad_request().unwrap().field_violations[0].field,
            "name"
        );
    }

    #[test]
    fn unavailable_says_when_to_come_back() {
        let status = Status::from(Failure::draining());
        let details = status.get_error_details();
        assert_eq!(details.error_info().unwrap().reason, reason::DRAINING);
        assert_eq!(details.error_info().unwrap().domain, DOMAIN);
        assert!(details.retry_info().unwrap().retry_delay.is_some());
    }

    #[test]
    fn internal_context_stays_inside() {
        let status = Status::from(Failure::internal("/secret/path"));
        assert!(!status.message().contains("secret"));
        assert_eq!(status.code(), Code::Internal);
    }
}
