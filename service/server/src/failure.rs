//! Why a call could not be served, and how that reads on the wire.
//!
//! Invariants: every status carries `google.rpc.ErrorInfo` with a reason of [`reason`] and the domain [`DOMAIN`]; a
//! refusal that time may heal carries `RetryInfo`; internal context goes to the log, never to the caller. An upload
//! whose physics is bad is no failure.

pub mod reason;

mod from_store;
mod status;

use std::time::Duration;

/// Domain of every `ErrorInfo`.
pub const DOMAIN: &str = "tarehouse";

/// Most field violations that a status carries; more break common clients. The message says how many there are.
pub const VIOLATIONS_MAX: usize = 20;

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

    /// The caller knows an earlier revision of a submission.
    pub(crate) fn etag_mismatch() -> Self {
        Self::Conflict {
            reason: reason::ETAG_MISMATCH,
            message: "the submission has changed since that etag; read it again".to_owned(),
            retry_after: None,
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
