//! The store as the async side sees it: every call runs on a blocking thread, and only so many at a time.

use std::sync::Arc;

use tarehouse_store::{Store, StoreError};
use tokio::sync::Semaphore;
use tokio_util::sync::CancellationToken;

use crate::failure::Failure;

/// Store calls that run at the same time.
const CALLS_MAX: usize = 32;

/// The store behind a bounded number of blocking threads.
#[derive(Debug)]
pub(crate) struct Depot {
    store: Store,
    slots: Arc<Semaphore>,
    broken: CancellationToken,
}

impl Depot {
    /// Wraps an open store.
    pub(crate) fn new(store: Store) -> Self {
        Self {
            store,
            slots: Arc::new(Semaphore::new(CALLS_MAX)),
            broken: CancellationToken::new(),
        }
    }

    /// Asks the store on a blocking thread. The call goes on where the asker is dropped.
    pub(crate) async fn ask<T: Send + 'static>(
        &self,
        call: impl FnOnce(&Store) -> Result<T, StoreError> + Send + 'static,
    ) -> Result<T, Failure> {
        self.ask_plainly(call)
            .await
            .and_then(|answer| answer.map_err(Failure::from))
    }

    /// As [`Depot::ask`], with the store's own error.
    pub(crate) async fn ask_plainly<T: Send + 'static>(
        &self,
        call: impl FnOnce(&Store) -> Result<T, StoreError> + Send + 'static,
    ) -> Result<Result<T, StoreError>, Failure> {
        let slot = Arc::clone(&self.slots)
            .acquire_owned()
            .await
            .map_err(Failure::internal)?;
        let store = self.store.clone();
        let answer = tokio::task::spawn_blocking(move || {
            let answer = call(&store);
            drop(slot);
            answer
        })
        .await
        .map_err(Failure::internal)?;
        if let Err(StoreError::Poisoned(detail)) = &answer {
            tracing::error!(%detail, "a sync failed: nothing more is acknowledged");
            self.broken.cancel();
        }
        Ok(answer)
    }

    /// The store itself, for blocking threads.
    pub(crate) fn store(&self) -> Store {
        self.store.clone()
    }

    /// Resolves when a sync has failed, after which the process must end.
    pub(crate) async fn until_broken(&self) {
        self.broken.cancelled().await;
    }

    /// Whether a sync has failed.
    pub(crate) fn is_broken(&self) -> bool {
        self.broken.is_cancelled()
    }
}
