//! What all services share: configuration, store, queue, changes, and how far stopping has come.

use std::sync::Arc;

use crate::config::Config;
use crate::drain::Drain;
use crate::examiner::Examiner;

/// Why the service could not be opened.
#[derive(Debug, thiserror::Error)]
pub enum OpenError {
    /// The folder of the store cannot be made.
    #[error("{folder}: the folder cannot be made")]
    Folder {
        /// Its path.
        folder: String,
        /// What the system said.
        #[source]
        source: std::io::Error,
    },
}

/// The shared parts.
pub(crate) struct Core {
    /// Values the service runs with.
    pub(crate) config: Config,
    /// How far stopping has come.
    pub(crate) drain: Drain,
    pub(crate) examiner: Arc<dyn Examiner>,
}

impl Core {
    /// Opens the store of the configuration.
    pub(crate) async fn open(
        config: Config,
        examiner: Arc<dyn Examiner>,
    ) -> Result<Arc<Self>, OpenError> {
        tokio::fs::create_dir_all(&config.store)
            .await
            .map_err(|source| OpenError::Folder {
                folder: config.store.display().to_string(),
                source,
            })?;
        Ok(Arc::new(Self {
            config,
            drain: Drain::default(),
            examiner,
        }))
    }

    /// Starts the workers; the future ends when all have stopped.
    pub(crate) fn start_workers(self: &Arc<Self>) -> impl Future<Output = ()> + Send + 'static {
        std::future::ready(())
    }

    /// Resolves when the store takes no more writes.
    pub(crate) async fn until_poisoned(&self) {
        std::future::pending().await
    }

    /// Closes the store.
    pub(crate) async fn close(&self) {}
}
