//! Waiting for a verdict: a watch that survives cuts, and polling where there is no watch.

use std::time::Duration;

use tarehouse_proto::v1::watch_submission_response::Event;
use tarehouse_proto::v1::{GetSubmissionRequest, Submission, WatchSubmissionRequest};
use tonic::{Code, Request, Status};

use crate::connect::{Session, asking};
use crate::failure::Failure;
use crate::progress::{Bar, Bars};
use crate::render::words::{self, is_final};
use crate::retry::{Pause, Retry, retrying};

/// A watch without any sign of life for this long is taken for cut.
const SILENCE_MAX: Duration = Duration::from_secs(90);
/// Pause between two questions where the service offers no watch.
const POLL_PAUSE: Duration = Duration::from_secs(2);

/// Asks for one submission.
///
/// # Errors
/// The service's answer.
pub async fn get(session: &Session, name: &str, pause: &Pause) -> Result<Submission, Failure> {
    let request = GetSubmissionRequest {
        name: name.to_owned(),
    };
    retrying(pause, || {
        let mut client = session.submissions();
        let request = request.clone();
        async move { client.get_submission(asking(request)).await }
    })
    .await
    .map_err(|status| Failure::service(format!("look at {name}"), status))?
    .into_inner()
    .submission
    .ok_or_else(|| Failure::missing("the submission"))
}

/// Waits until a submission reaches a final state.
///
/// # Errors
/// The service's answer, after trying again where that may help; [`Failure::Patience`] after `limit`.
pub async fn until_final(
    session: &Session,
    name: &str,
    bars: &Bars,
    limit: Option<Duration>,
    pause: &Pause,
) -> Result<Submission, Failure> {
    let waiting = wait(session, name, bars, pause);
    match limit {
        None => waiting.await,
        Some(limit) => tokio::time::timeout(limit, waiting)
            .await
            .unwrap_or_else(|_| {
                Err(Failure::Patience {
                    name: name.to_owned(),
                    waited_s: limit.as_secs(),
                })
            }),
    }
}

async fn wait(
    session: &Session,
    name: &str,
    bars: &Bars,
    pause: &Pause,
) -> Result<Submission, Failure> {
    let bar = bars.steps(name);
    let mut retry = Retry::new(pause.clone());
    loop {
        match follow(session, name, &bar, &mut retry).await {
            Ok(Some(submission)) => return Ok(submission),
            // The watch ended early, as when a server drains: ask again.
            Ok(None) => {
                if let Some(submission) = final_now(session, name, pause).await? {
                    return Ok(submission);
                }
                retry
                    .wait_after(Status::unavailable("the watch ended before the verdict"))
                    .await
                    .map_err(|status| Failure::service(format!("watch {name}"), status))?;
            }
            Err(status) if status.code() == Code::Unimplemented => {
                return poll(session, name, pause).await;
            }
            Err(status) => retry
                .wait_after(status)
                .await
                .map_err(|status| Failure::service(format!("watch {name}"), status))?,
        }
    }
}

/// Follows one watch to its end; nothing where it ended before a final state.
async fn follow(
    session: &Session,
    name: &str,
    bar: &Bar,
    retry: &mut Retry,
) -> Result<Option<Submission>, Status> {
    let request = Request::new(WatchSubmissionRequest {
        name: name.to_owned(),
    });
    let mut events = session
        .submissions()
        .watch_submission(request)
        .await?
        .into_inner();
    loop {
        let Ok(event) = tokio::time::timeout(SILENCE_MAX, events.message()).await else {
            return Err(Status::unavailable("the watch fell silent"));
        };
        let Some(message) = event? else {
            return Ok(None);
        };
        retry.progressed();
        match message.event {
            Some(Event::Submission(submission)) => {
                if is_final(submission.state()) {
                    return Ok(Some(submission));
                }
                bar.stage(words::state(submission.state()), 0, 0);
            }
            Some(Event::Progress(progress)) => {
                bar.stage(&progress.stage, progress.done, progress.total);
            }
            // An event that a later version of the contract adds is a sign of life, too.
            Some(Event::Heartbeat(_)) | None => {}
        }
    }
}

async fn final_now(
    session: &Session,
    name: &str,
    pause: &Pause,
) -> Result<Option<Submission>, Failure> {
    let submission = get(session, name, pause).await?;
    Ok(is_final(submission.state()).then_some(submission))
}

async fn poll(session: &Session, name: &str, pause: &Pause) -> Result<Submission, Failure> {
    loop {
        if let Some(submission) = final_now(session, name, pause).await? {
            return Ok(submission);
        }
        tokio::time::sleep(POLL_PAUSE).await;
    }
}
