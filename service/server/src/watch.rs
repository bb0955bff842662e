//! Watches: the submission at once, then every change and the progress of its examination, until a final state.

use std::sync::Arc;

use tarehouse_proto::v1;
use tarehouse_proto::v1::watch_submission_response::Event;
use tarehouse_store::SubmissionId;
use tokio::sync::{OwnedSemaphorePermit, mpsc, watch};
use tokio_stream::wrappers::ReceiverStream;
use tonic::Status;

use crate::core::Core;
use crate::failure::Failure;
use crate::hub::{News, Stage};

/// Events on their way to one watcher; a slow one skips what has been overtaken.
const EVENTS_MAX: usize = 4;

type Events = mpsc::Sender<Result<v1::WatchSubmissionResponse, Status>>;

/// Starts a watch. The submission must exist.
pub(crate) async fn start(
    core: &Arc<Core>,
    id: SubmissionId,
) -> Result<ReceiverStream<Result<v1::WatchSubmissionResponse, Status>>, Failure> {
    core.drain.admit()?;
    let permit = core.watch_permit()?;
    // The board first, the state second: what changes in between is news.
    let board = core.hub.watch(id);
    core.submission(id).await?;
    let (events, stream) = mpsc::channel(EVENTS_MAX);
    let watcher = Watcher {
        core: Arc::clone(core),
        id,
        board,
        events,
    };
    tokio::spawn(watcher.run(permit));
    Ok(ReceiverStream::new(stream))
}

struct Watcher {
    core: Arc<Core>,
    id: SubmissionId,
    board: watch::Receiver<News>,
    events: Events,
}

impl Watcher {
    async fn run(mut self, permit: OwnedSemaphorePermit) {
        let core = Arc::clone(&self.core);
        let events = self.events.clone();
        let ended = tokio::select! {
            ended = self.follow() => ended,
            () = core.drain.until_begun() => Err(Failure::draining()),
            () = events.closed() => Ok(()),
        };
        if let Err(failure) = ended {
            // A watcher whose channel is full learns from the end of the stream.
            let _ = events.try_send(Err(failure.into()));
        }
        drop(permit);
    }

    async fn follow(&mut self) -> Result<(), Failure> {
        let (mut told, mut stage) = (None, None);
        loop {
            let news = *self.board.borrow_and_update();
            if told != Some(news.changes) {
                let submission = self.core.submission_message(self.id).await?;
                let state = v1::State::try_from(submission.state).unwrap_or_default();
                if !self.tell(Event::Submission(submission)).await || is_final(state) {
                    return Ok(());
                }
                told = Some(news.changes);
            }
            if news.stage != stage {
                stage = news.stage;
                if let Some(stage) = stage
                    && !self.tell(Event::Progress(progress(stage))).await
                {
                    return Ok(());
                }
            }
            let changed = tokio::time::timeout(self.core.config.heartbeat, self.board.changed());
            match changed.await {
                Ok(Ok(())) => {}
                Ok(Err(_)) => return Err(Failure::internal("a board vanished under its watcher")),
                Err(_) => {
                    if !self.tell(Event::Heartbeat(v1::Heartbeat {})).await {
                        return Ok(());
                    }
                }
            }
        }
    }

    /// Sends an event; false where nobody listens any more.
    async fn tell(&self, event: Event) -> bool {
        let message = v1::WatchSubmissionResponse { event: Some(event) };
        self.events.send(Ok(message)).await.is_ok()
    }
}

fn progress(stage: Stage) -> v1::Progress {
    v1::Progress {
        stage: stage.name.to_owned(),
        done: stage.done as u64,
        total: stage.total as u64,
        attempt: stage.attempt,
    }
}

/// Whether a watch ends here.
fn is_final(state: v1::State) -> bool {
    match state {
        v1::State::Unspecified | v1::State::Draft | v1::State::Queued => false,
        v1::State::Accepted
        | v1::State::Held
        | v1::State::Rejected
        | v1::State::Returned
        | v1::State::Retired
        | v1::State::Withdrawn => true,
    }
}
