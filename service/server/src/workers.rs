//! The workers: each takes the next queued submission, has it examined on a blocking thread, and hands the outcome over.
//!
//! Invariants: as many examinations at a time as the configuration says; a lease that is not answered goes back to the
//! queue; nothing is claimed once stopping has begun; what runs then may finish within the grace time.

use std::sync::Arc;
use std::time::Duration;

use tarehouse_store::{Lease, Outcome, StoreError};
use tokio::task::JoinSet;

use crate::core::Core;
use crate::failure::{Failure, with_sources};
use crate::hub::Reporter;
use crate::judge::{self, Crash};

/// Pause after the store could not take an outcome, before the examination is tried again.
const RETRY_PAUSE: Duration = Duration::from_secs(2);

/// Starts the workers; the future ends when all have stopped.
pub(crate) fn start(core: &Arc<Core>) -> impl Future<Output = ()> + Send + use<> {
    let mut workers = JoinSet::new();
    for _ in 0..core.config.workers {
        workers.spawn(work(Arc::clone(core)));
    }
    async move {
        while let Some(ended) = workers.join_next().await {
            if let Err(error) = ended {
                tracing::error!(%error, "a worker died");
            }
        }
    }
}

async fn work(core: Arc<Core>) {
    loop {
        // Enabled before the claim, so that a submission queued in between wakes this worker.
        let mut queued = std::pin::pin!(core.queued.notified());
        queued.as_mut().enable();
        if core.drain.has_begun() {
            return;
        }
        match core.depot.ask(|store| Ok(store.claim_job())).await {
            Ok(Some(lease)) => {
                if !examine(&core, lease).await {
                    pause(&core).await;
                }
            }
            Ok(None) => tokio::select! {
                () = queued => {}
                () = core.drain.until_begun() => return,
            },
            Err(failure) => {
                tracing::error!(?failure, "the queue cannot be read");
                pause(&core).await;
            }
        }
    }
}

async fn pause(core: &Core) {
    tokio::select! {
        () = tokio::time::sleep(RETRY_PAUSE) => {}
        () = core.drain.until_begun() => {}
    }
}

/// One attempt; whether its outcome, good or bad, is in the store.
async fn examine(core: &Arc<Core>, lease: Lease) -> bool {
    let id = lease.id();
    match run(core, lease).await {
        Ok(kept) => kept,
        Err(failure) => {
            tracing::error!(%id, ?failure, "an examination could not be run");
            false
        }
    }
}

/// Runs the attempt on a blocking thread.
async fn run(core: &Arc<Core>, lease: Lease) -> Result<bool, Failure> {
    let core = Arc::clone(core);
    tokio::task::spawn_blocking(move || {
        let kept = attempt_and_keep(&core, &lease);
        drop(lease);
        kept
    })
    .await
    .map_err(Failure::internal)
}

fn attempt_and_keep(core: &Core, lease: &Lease) -> bool {
    let kept = match attempt(core, lease) {
        Ok(outcome) => {
            let verdict = outcome.verdict;
            let kept = core
                .depot
                .store()
                .complete_examination(&core.actor(), lease, outcome);
            kept.map(
                |done| tracing::info!(id = %lease.id(), ?verdict, state = %done.state, "examined"),
            )
        }
        Err(crash) => note(core, lease, &crash),
    };
    match kept {
        Ok(()) => true,
        Err(error) => {
            let id = lease.id();
            tracing::error!(%id, %error, "an outcome could not be stored; the submission stays queued");
            false
        }
    }
}

fn attempt(core: &Core, lease: &Lease) -> Result<Outcome, Crash> {
    let (id, attempt) = (lease.id(), lease.attempt());
    tracing::info!(%id, attempt, "examination begins");
    let reporter = Reporter::new(Arc::clone(&core.hub), id, attempt);
    let examiner = core.examiner.as_ref();
    judge::attempt(
        &core.depot.store(),
        id,
        examiner,
        &core.config.policy,
        &reporter,
    )
}

/// Notes a crashed attempt, with the report that a last one leaves behind.
fn note(core: &Core, lease: &Lease, crash: &Crash) -> Result<(), StoreError> {
    let (id, attempt) = (lease.id(), lease.attempt());
    let detail = with_sources(crash);
    tracing::error!(%id, attempt, %detail, "examination crashed");
    let store = core.depot.store();
    let package_digest = store.get_submission(id)?.package_digest;
    let report = judge::failed_report(package_digest, &core.config.policy, attempt);
    let noted = store.crash_examination(&core.actor(), lease, &detail, Some(&report));
    match noted {
        // Withdrawn meanwhile: there is nothing left to note.
        Err(StoreError::Forbidden { .. }) => Ok(()),
        noted => noted.map(drop),
    }
}
