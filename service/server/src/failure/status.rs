//! A failure as a status: code, reason, and as many details as common clients can read.

use std::collections::HashMap;

use tonic::{Code, Status};
use tonic_types::{ErrorDetails, FieldViolation, QuotaViolation, StatusExt as _};

use super::{Breach, DOMAIN, Failure, VIOLATIONS_MAX, reason};

/// Longest text of one violation that a status carries, bytes.
const VIOLATION_BYTES_MAX: usize = 240;

/// All violations of a status together, bytes: common clients refuse headers beyond 8 KiB, and this grows by a third
/// on its way there.
const DETAIL_BYTES_MAX: usize = 4400;

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
