//! `tarehouse submit`: check here, send, wait, sum up.
//!
//! Folders are taken one after the other, so that only one is in memory; verdicts are waited for after all were sent,
//! while the service works on the first already.

use std::path::{Path, PathBuf};
use std::time::Duration;

use tarehouse_proto::v1::Submission;

use super::precheck::blocking;
use super::{Context, ResumeNote, in_session};
use crate::arguments::SubmitArgs;
use crate::connect::Session;
use crate::exit::Exit;
use crate::failure::Failure;
use crate::package_folder::{self, PackageFiles};
use crate::progress::Bars;
use crate::render::failure;
use crate::render::lists::{Outcome, id_of, summary};
use crate::retry::Pause;
use crate::upload;
use crate::waiting;
use crate::wire_json;

/// Runs the command.
///
/// # Errors
/// Where no folder could be taken at all; what befell single folders is in the summary.
pub async fn run(args: SubmitArgs, context: &mut Context<'_>) -> Result<Exit, Failure> {
    let target = context.target(&args.connect)?;
    let note = ResumeNote::default();
    let resume = format!("tarehouse submit {} …", target.as_arguments());
    note.set(format!(
        "Nothing was lost: `{resume}` with the same folders goes on from here."
    ));
    let outcomes = in_session(target, context, &note, async |session, context| {
        submit_all(session, context, &args, &note).await
    })
    .await?;
    show(context, &args, &outcomes)?;
    Ok(Exit::worst(outcomes.iter().map(|outcome| outcome.exit)))
}

/// Sends every folder, then waits for the verdicts unless told not to.
///
/// Where the service is lost, the folders that remain are not tried one by one.
///
/// # Errors
/// None so far: what befalls a folder is in its outcome.
pub async fn submit_all(
    session: &Session,
    context: &mut Context<'_>,
    args: &SubmitArgs,
    note: &ResumeNote,
) -> Result<Vec<Outcome>, Failure> {
    let bars = context.bars();
    let pause = context.pause.clone();
    let mut outcomes = Vec::new();
    let mut lost = None;
    for folder in &args.packages {
        if let Some(exit) = lost {
            outcomes.push(not_tried(folder, exit));
            continue;
        }
        let sent = send_folder(session, folder, &bars, &pause).await;
        if let Err(failure) = &sent {
            context.tell(failure);
            lost = is_lost(failure).then(|| failure.exit());
        }
        outcomes.push(outcome(folder, sent));
        note.set(resume_text(session, args, &outcomes));
    }
    if args.no_wait {
        return Ok(outcomes);
    }
    let limit = args.timeout.map(Duration::from_secs);
    for outcome in &mut outcomes {
        let Some(submission) = outcome
            .submission
            .as_ref()
            .filter(|_| outcome.problems.is_empty())
        else {
            continue;
        };
        let name = submission.name.clone();
        match waiting::until_final(session, &name, &bars, limit, &pause).await {
            Ok(submission) => {
                outcome.exit = Exit::from_state(submission.state());
                outcome.submission = Some(submission);
            }
            Err(failure) => {
                context.tell(&failure);
                outcome.exit = failure.exit();
                outcome.problems = problems(&failure);
            }
        }
    }
    Ok(outcomes)
}

/// Reads, checks and sends one folder, until it is sealed.
///
/// # Errors
/// All violations of the package, with nothing sent; or the service's answer.
pub async fn send_folder(
    session: &Session,
    folder: &Path,
    bars: &Bars,
    pause: &Pause,
) -> Result<Submission, Failure> {
    let path = folder.to_owned();
    let package = blocking("reading the package", move || package_folder::read(&path)).await??;
    send_package(session, &package.files, bars, pause).await
}

/// Sends a package that was checked, until it is sealed.
///
/// # Errors
/// The service's answer.
pub async fn send_package(
    session: &Session,
    files: &PackageFiles,
    bars: &Bars,
    pause: &Pause,
) -> Result<Submission, Failure> {
    let submission = upload::create(session, files, pause).await?;
    if !upload::takes_arrays(submission.state()) {
        return Ok(submission);
    }
    upload::send_arrays(session, &submission.name, files, bars, pause).await?;
    upload::seal(session, &submission.name, &files.folder, pause).await
}

/// Whether the next folder would meet the same failure.
fn is_lost(failure: &Failure) -> bool {
    matches!(failure, Failure::Service { .. })
        && matches!(
            failure.exit(),
            Exit::Unavailable | Exit::NotAllowed | Exit::Quota
        )
}

fn not_tried(folder: &Path, exit: Exit) -> Outcome {
    Outcome {
        folder: folder.display().to_string(),
        submission: None,
        exit,
        problems: vec!["not tried, after the failure before".to_owned()],
    }
}

fn outcome(folder: &Path, sent: Result<Submission, Failure>) -> Outcome {
    let folder = folder.display().to_string();
    match sent {
        Ok(submission) => Outcome {
            folder,
            exit: Exit::from_state(submission.state()),
            submission: Some(submission),
            problems: Vec::new(),
        },
        Err(failure) => Outcome {
            folder,
            submission: None,
            exit: failure.exit(),
            problems: problems(&failure),
        },
    }
}

/// What a summary says about a failure: its details, or what happened where there are none.
fn problems(failure: &Failure) -> Vec<String> {
    let mut all = failure::details(failure);
    if all.is_empty() {
        all.push(failure.to_string());
    }
    all
}

fn resume_text(session: &Session, args: &SubmitArgs, outcomes: &[Outcome]) -> String {
    let to = session.target().as_arguments();
    let names: Vec<String> = outcomes
        .iter()
        .filter_map(|outcome| outcome.submission.as_ref())
        .map(|submission| id_of(&submission.name))
        .collect();
    let rest: Vec<String> = args
        .packages
        .iter()
        .skip(outcomes.len())
        .map(|folder: &PathBuf| folder.display().to_string())
        .collect();
    let sent = names.last().map(|last| {
        format!(
            "{} of {} packages were sent. {}: `tarehouse watch {last} {to}` waits for the last.",
            names.len(),
            args.packages.len(),
            session.target().without_you(),
        )
    });
    let unsent = (!rest.is_empty()).then(|| {
        format!(
            "The rest goes on where it stopped with `tarehouse submit {} {to}`.",
            rest.join(" ")
        )
    });
    let parts: Vec<String> = sent.into_iter().chain(unsent).collect();
    parts.join(" ")
}

fn show(context: &mut Context<'_>, args: &SubmitArgs, outcomes: &[Outcome]) -> Result<(), Failure> {
    let text = if context.console.wants_json(args.format.format) {
        let lines: Result<Vec<String>, Failure> = outcomes.iter().map(json_line).collect();
        lines?.join("\n")
    } else {
        summary(outcomes, context.console.view())
    };
    context.console.data(&text)?;
    Ok(())
}

/// One folder as one line of JSON; keys in a fixed order.
fn json_line(outcome: &Outcome) -> Result<String, Failure> {
    let submission = match &outcome.submission {
        Some(submission) => wire_json::compact(submission)?,
        None => "null".to_owned(),
    };
    let problems: Vec<String> = outcome
        .problems
        .iter()
        .map(|problem| wire_json::quoted(problem))
        .collect();
    Ok(format!(
        "{{\"folder\":{},\"outcome\":{},\"exit_code\":{},\"problems\":[{}],\"submission\":{submission}}}",
        wire_json::quoted(&outcome.folder),
        wire_json::quoted(outcome.word()),
        outcome.exit.code(),
        problems.join(","),
    ))
}
