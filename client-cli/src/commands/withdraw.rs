//! `tarehouse withdraw`: take a submission back.

use tarehouse_proto::v1::{Submission, WithdrawSubmissionRequest};

use super::{Context, ResumeNote, in_session};
use crate::arguments::WithdrawArgs;
use crate::connect::{Session, asking, resource_name};
use crate::exit::Exit;
use crate::failure::Failure;
use crate::render::lists;
use crate::retry::{Pause, retrying};
use crate::waiting;
use crate::wire_json;

/// Runs the command.
///
/// # Errors
/// Why nothing was taken back.
pub async fn run(args: WithdrawArgs, context: &mut Context<'_>) -> Result<Exit, Failure> {
    let target = context.existing_target(&args.connect)?;
    let name = resource_name("submissions", &args.id);
    let note = ResumeNote::default();
    note.set(format!(
        "Whether it was taken back is told by `tarehouse watch {} {}`.",
        args.id,
        target.as_arguments()
    ));
    let work = async |session: &Session, context: &mut Context<'_>| {
        withdraw(session, &name, &args.reason, &context.pause).await
    };
    let submission = in_session(target, context, &note, work).await?;
    let text = if context.console.wants_json(args.format.format) {
        wire_json::pretty(&submission)?
    } else {
        lists::submission(&submission, context.console.view())
    };
    context.console.data(&text)?;
    Ok(Exit::Done)
}

/// Takes a submission back, unless it changed since this function looked at it.
///
/// # Errors
/// The service's answer: an accepted submission is not taken back, and one that is withdrawn stays so.
pub async fn withdraw(
    session: &Session,
    name: &str,
    reason: &str,
    pause: &Pause,
) -> Result<Submission, Failure> {
    let request = WithdrawSubmissionRequest {
        name: name.to_owned(),
        etag: waiting::get(session, name, pause).await?.etag,
        reason: reason.to_owned(),
    };
    retrying(pause, || {
        let mut client = session.submissions();
        let request = request.clone();
        async move { client.withdraw_submission(asking(request)).await }
    })
    .await
    .map_err(|status| Failure::service(format!("withdraw {name}"), status))?
    .into_inner()
    .submission
    .ok_or_else(|| Failure::missing("the submission"))
}
