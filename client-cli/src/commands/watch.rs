//! `tarehouse watch`: wait for the verdict of a submission.

use std::time::Duration;

use tarehouse_proto::v1::State;

use super::{Context, ResumeNote, in_session};
use crate::arguments::WatchArgs;
use crate::connect::resource_name;
use crate::exit::Exit;
use crate::failure::Failure;
use crate::render::lists;
use crate::waiting;
use crate::wire_json;

/// Runs the command.
///
/// # Errors
/// Why no verdict was reached.
pub async fn run(args: WatchArgs, context: &mut Context<'_>) -> Result<Exit, Failure> {
    let target = context.existing_target(&args.connect)?;
    let name = resource_name("submissions", &args.id);
    let note = ResumeNote::default();
    note.set(format!(
        "{}; `tarehouse watch {} {}` waits again.",
        target.without_you(),
        args.id,
        target.as_arguments()
    ));
    let submission = in_session(target, context, &note, async |session, context| {
        let pause = context.pause.clone();
        let now = waiting::get(session, &name, &pause).await?;
        if now.state() == State::Draft {
            context.console.message(
                "This is a draft: its upload is not complete. `tarehouse submit` with its folder goes on from there.",
            );
        }
        let limit = args.timeout.map(Duration::from_secs);
        waiting::until_final(session, &name, &context.bars(), limit, &pause).await
    })
    .await?;
    let text = if context.console.wants_json(args.format.format) {
        wire_json::pretty(&submission)?
    } else {
        lists::submission(&submission, context.console.view())
    };
    context.console.data(&text)?;
    Ok(Exit::from_state(submission.state()))
}
