//! Uploads under way: how many, and which arrays they hold.

use std::collections::HashSet;
use std::sync::{Arc, Mutex, PoisonError};
use std::time::Duration;

use tarehouse_store::SubmissionId;
use tokio::sync::{OwnedSemaphorePermit, Semaphore};

use crate::core::permit;
use crate::failure::{Failure, reason};

/// When to come back to an array that another upload holds: a cut connection is noticed by then.
const RETRY_AFTER: Duration = Duration::from_secs(2);

type Held = Arc<Mutex<HashSet<(SubmissionId, String)>>>;

/// All uploads under way.
#[derive(Debug)]
pub(crate) struct Uploads {
    streams: Arc<Semaphore>,
    held: Held,
}

impl Uploads {
    /// Room for so many streams.
    pub(crate) fn new(streams_max: usize) -> Self {
        Self {
            streams: Arc::new(Semaphore::new(streams_max)),
            held: Held::default(),
        }
    }

    /// A place among the streams.
    pub(crate) fn stream(&self) -> Result<OwnedSemaphorePermit, Failure> {
        permit(
            &self.streams,
            reason::UPLOADS_FULL,
            "too many uploads are open",
        )
    }

    /// Holds an array for one upload until the hold is dropped.
    pub(crate) fn hold(&self, id: SubmissionId, array: &str) -> Result<Hold, Failure> {
        let key = (id, array.to_owned());
        let mut held = self.held.lock().unwrap_or_else(PoisonError::into_inner);
        if !held.insert(key.clone()) {
            return Err(Failure::Conflict {
                reason: reason::UPLOAD_IN_PROGRESS,
                message: format!("another upload of {array} is open"),
                retry_after: Some(RETRY_AFTER),
            });
        }
        Ok(Hold {
            key,
            held: Arc::clone(&self.held),
        })
    }
}

/// The right to write one array.
#[derive(Debug)]
pub(crate) struct Hold {
    key: (SubmissionId, String),
    held: Held,
}

impl Drop for Hold {
    fn drop(&mut self) {
        self.held
            .lock()
            .unwrap_or_else(PoisonError::into_inner)
            .remove(&self.key);
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn an_array_is_held_once_and_streams_are_counted() {
        let uploads = Uploads::new(2);
        let id = SubmissionId::from_bytes([3; 16]);
        let hold = uploads.hold(id, "constants.npy").unwrap();
        assert!(matches!(
            uploads.hold(id, "constants.npy"),
            Err(Failure::Conflict { .. })
        ));
        assert!(uploads.hold(id, "effective_charges.npy").is_ok());
        drop(hold);
        assert!(uploads.hold(id, "constants.npy").is_ok());
        let first = uploads.stream().unwrap();
        let _second = uploads.stream().unwrap();
        assert!(matches!(uploads.stream(), Err(Failure::Unavailable { .. })));
        drop(first);
        assert!(uploads.stream().is_ok());
    }
}
