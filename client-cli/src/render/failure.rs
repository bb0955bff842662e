//! Errors for people: what happened, where, what to do next.

use std::error::Error as _;

use tonic::{Code, Status};
use tonic_types::StatusExt as _;

use super::text::{Page, Style, View, clean};
use crate::exit::Exit;
use crate::failure::Failure;

/// The error as text for stderr.
pub fn to_text(failure: &Failure, view: View) -> String {
    let mut page = Page::new(view);
    if let Failure::Interrupted { resume } = failure {
        page.hanging("", "  ", &format!("Stopped. {resume}"));
        return page.finish();
    }
    let word = view.paint(Style::Bad, "error:");
    page.hanging("", "  ", &format!("{word} {}", clean(&failure.to_string())));
    for detail in details(failure) {
        page.hanging("  - ", "    ", &clean(&detail));
    }
    let next = next_step(failure);
    if !next.is_empty() {
        page.hanging("", "  ", &format!("next: {}", clean(&next)));
    }
    page.finish()
}

/// All that is known beyond the first line.
pub fn details(failure: &Failure) -> Vec<String> {
    match failure {
        Failure::InvalidPackage { violations, .. } => violations.clone(),
        Failure::Policy { detail, .. }
        | Failure::Connect { detail, .. }
        | Failure::LocalStore { detail, .. } => vec![detail.clone()],
        Failure::File { source, .. } => vec![source.to_string()],
        Failure::Output(error) => vec![error.to_string()],
        Failure::Service { status, .. } => status_details(status),
        Failure::Usage { .. }
        | Failure::Contract(_)
        | Failure::Damaged { .. }
        | Failure::NotFound { .. }
        | Failure::Patience { .. }
        | Failure::Internal { .. }
        | Failure::Interrupted { .. } => Vec::new(),
    }
}

fn status_details(status: &Status) -> Vec<String> {
    let mut all = Vec::new();
    let rich = status.get_error_details();
    let message = match status.message() {
        "" => code_words(status.code()),
        message => message,
    };
    match rich.error_info() {
        Some(info) => all.push(format!("{message} ({})", info.reason)),
        None => all.push(message.to_owned()),
    }
    if let Some(request) = rich.bad_request() {
        let violations = request.field_violations.iter().map(|violation| {
            if violation.field.is_empty() {
                violation.description.clone()
            } else {
                format!("{}: {}", violation.field, violation.description)
            }
        });
        // A single violation is often the message itself.
        all.extend(violations.filter(|violation| violation != message));
    }
    if let Some(quota) = rich.quota_failure() {
        all.extend(
            quota
                .violations
                .iter()
                .map(|violation| format!("{}: {}", violation.subject, violation.description)),
        );
    }
    let mut source = status.source();
    while let Some(error) = source {
        all.push(error.to_string());
        source = error.source();
    }
    all.dedup();
    all
}

fn code_words(code: Code) -> &'static str {
    match code {
        Code::Unavailable => "the service takes no requests now",
        Code::DeadlineExceeded => "the answer did not come in time",
        Code::PermissionDenied | Code::Unauthenticated => "you may not do this",
        Code::NotFound => "there is no such thing",
        code => code.description(),
    }
}

fn next_step(failure: &Failure) -> String {
    match failure {
        Failure::Usage { next, .. } | Failure::NotFound { next, .. } => next.clone(),
        Failure::InvalidPackage { folder, .. } => {
            format!("correct what is listed; nothing was sent. `tarehouse precheck {folder}` looks again.")
        }
        Failure::File { .. } => "check the path and its permissions.".into(),
        Failure::Policy { .. } => "start from the file deploy/policy.toml of this version.".into(),
        Failure::Connect { .. } => "see that the server runs at this address and that http:// is right; or use \
             --local DIR, which needs no server."
            .into(),
        Failure::LocalStore { .. } => {
            "one process at a time may have a store open: close the other, or serve the store with tarehouse-server \
             and use --server URL."
                .into()
        }
        Failure::Service { status, .. } => service_next(status),
        Failure::Patience { name, .. } => format!("it goes on without you; `tarehouse watch {name}` waits again."),
        Failure::Damaged { .. } => "run the command again; if it recurs, tell the operator of the service.".into(),
        Failure::Contract(_) => "compare the versions of client and service.".into(),
        Failure::Internal { .. } => "this is a fault of the program; please report it with the package.".into(),
        Failure::Output(_) | Failure::Interrupted { .. } => String::new(),
    }
}

fn service_next(status: &Status) -> String {
    if let Some(delay) = status
        .get_error_details()
        .retry_info()
        .and_then(|info| info.retry_delay)
    {
        return format!("try again in {} s.", delay.as_secs().max(1));
    }
    let details = status.get_error_details();
    let reason = details.error_info().map_or("", |info| info.reason.as_str());
    match reason {
        "COMPOUND_NOT_FOUND" => return "see `tarehouse list compounds` for the names.".to_owned(),
        "ARRAY_NOT_FOUND" => {
            return "the manifest names the files: `tarehouse fetch ID --array package.toml --out package.toml`."
                .to_owned();
        }
        _ => {}
    }
    match Exit::from_grpc(status.code()) {
        Exit::Usage => "correct what is listed and run the command again.",
        Exit::NotFound => "see `tarehouse list submissions` and `tarehouse list records` for what there is.",
        Exit::NotAllowed => "ask the operator of the service for access.",
        Exit::Unavailable => "try again in a while; what has arrived is kept, and `tarehouse submit` goes on from there.",
        Exit::Deadline => "try again; if it recurs, the service is overloaded.",
        Exit::Conflict => "see its state with `tarehouse watch ID`, then decide.",
        Exit::Quota => "wait, or ask the operator for a larger share.",
        _ => "tell the operator of the service, with the time and this message.",
    }
    .to_owned()
}

#[cfg(test)]
mod tests {
    use super::*;
    use std::time::Duration;
    use tonic_types::{ErrorDetails, FieldViolation};

    #[test]
    fn every_violation_of_the_service_is_listed_with_its_reason() {
        let details = ErrorDetails::with_bad_request(vec![
            FieldViolation::new("crystal.positions[3]", "not finite"),
            FieldViolation::new("energy.unit", "unknown"),
        ]);
        let mut details = details;
        details.set_error_info(
            "MANIFEST_INVALID",
            "tarehouse",
            std::collections::HashMap::new(),
        );
        let status = Status::with_error_details(Code::InvalidArgument, "two violations", details);
        let text = to_text(
            &Failure::service("create the submission", status),
            View::plain(80),
        );
        for part in [
            "could not create the submission",
            "two violations (MANIFEST_INVALID)",
            "crystal.positions[3]: not finite",
            "energy.unit: unknown",
            "next: correct",
        ] {
            assert!(text.contains(part), "{part} is missing from\n{text}");
        }
    }

    #[test]
    fn the_service_may_say_when_to_try_again() {
        let details = ErrorDetails::with_retry_info(Some(Duration::from_secs(7)));
        let status = Status::with_error_details(Code::Unavailable, "the queue is full", details);
        let failure = Failure::service("seal submissions/1", status);
        assert!(to_text(&failure, View::plain(60)).contains("try again in 7 s"));
        assert_eq!(failure.exit(), Exit::Unavailable);
    }

    #[test]
    fn a_single_violation_that_is_the_message_is_said_once() {
        let mut details =
            ErrorDetails::with_bad_request(vec![FieldViolation::new("name", "32 digits")]);
        details.set_error_info("REQUEST_INVALID", "tarehouse", []);
        let status = Status::with_error_details(Code::InvalidArgument, "name: 32 digits", details);
        let text = to_text(&Failure::service("look", status), View::plain(80));
        assert_eq!(text.matches("name: 32 digits").count(), 1, "{text}");
    }

    #[test]
    fn the_next_step_names_a_command_that_helps() {
        for (reason, command) in [
            ("COMPOUND_NOT_FOUND", "tarehouse list compounds"),
            ("ARRAY_NOT_FOUND", "--array package.toml"),
            ("SUBMISSION_NOT_FOUND", "tarehouse list submissions"),
        ] {
            let details = ErrorDetails::with_error_info(reason, "tarehouse", []);
            let status = Status::with_error_details(Code::NotFound, "none", details);
            let text = to_text(&Failure::service("look", status), View::plain(100));
            assert!(text.contains(command), "{text}");
        }
    }

    #[test]
    fn lines_fit_sixty_columns() {
        let failure = Failure::InvalidPackage {
            folder: "form-ii".to_owned(),
            violations: vec![format!("package.toml: {}", "long words ".repeat(20)); 3],
        };
        let text = to_text(&failure, View::plain(60));
        assert!(text.lines().all(|line| line.chars().count() <= 60));
        assert_eq!(text.matches("package.toml").count(), 3);
    }
}
