//! What the store refuses, as a failure of the call. Exhaustive: a new error of the store must find its place here.

use std::time::Duration;

use tarehouse_store::StoreError;

use super::{Breach, Failure, reason, with_sources};

/// When to come back to a store that cannot serve.
const STORE_RETRY_AFTER: Duration = Duration::from_secs(30);

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
            StoreError::RevisionMismatch { .. } => Self::etag_mismatch(),
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
