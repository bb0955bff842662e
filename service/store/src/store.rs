//! The store as its users see it: one handle, blocking calls.
//!
//! Order of an acknowledged change: object synced, trail frame synced, answer, index. Every call may block on the
//! disk; an async caller puts it on a blocking thread.

mod examine;
mod intake;
mod open;
mod read;
mod transfer;

use std::collections::HashMap;
use std::fmt;
use std::path::PathBuf;
use std::sync::atomic::{AtomicBool, Ordering};
use std::sync::{Arc, Condvar, Mutex, MutexGuard, PoisonError};
use std::time::{Duration, SystemTime, UNIX_EPOCH};

pub use examine::Lease;
pub use transfer::ArrayStatus;

use crate::disk::{Disk, Held, RealDisk};
use crate::error::{Health, OpenError, StoreError, TrailDamage};
use crate::event::Event;
use crate::id::SubmissionId;
use crate::index::{Index, Observer};
use crate::keylock::KeyLocks;
use crate::ledger::{Entry, Ledger};
use crate::object::{Objects, PutError};
use crate::state::State;
use crate::trail::anchor::Mark;
use crate::trail::writer::{CommitError, Proposal, Writer};
use crate::upload::Uploads;
use crate::view::{Actor, ObjectRef};

/// How a store is opened.
#[derive(Clone)]
pub struct Options {
    /// Written into every frame.
    pub program_version: String,
    /// File system.
    pub disk: Arc<dyn Disk>,
    /// Time, ms since 1970.
    pub clock: Arc<dyn Fn() -> u64 + Send + Sync>,
    /// A trail segment is sealed when it is longer, bytes.
    pub segment_bytes_max: u64,
    /// How long a reader waits for the index to catch up.
    pub read_wait: Duration,
    /// How long the embedded database may take to open.
    pub index_open_limit: Duration,
    /// Memory for the embedded database's cache, bytes.
    pub index_cache_bytes: u64,
    /// Open even if objects that the trail refers to are missing; see [`Store::missing_objects`].
    pub tolerate_missing_objects: bool,
}

impl Default for Options {
    fn default() -> Self {
        Self {
            program_version: env!("CARGO_PKG_VERSION").to_owned(),
            disk: Arc::new(RealDisk),
            clock: Arc::new(|| {
                let since = SystemTime::now().duration_since(UNIX_EPOCH);
                since.map_or(0, |since| {
                    u64::try_from(since.as_millis()).unwrap_or(u64::MAX)
                })
            }),
            segment_bytes_max: 32 << 20,
            read_wait: Duration::from_secs(5),
            index_open_limit: Duration::from_mins(1),
            index_cache_bytes: 64 << 20,
            tolerate_missing_objects: false,
        }
    }
}

impl fmt::Debug for Options {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.debug_struct("Options")
            .field("program_version", &self.program_version)
            .field("segment_bytes_max", &self.segment_bytes_max)
            .finish_non_exhaustive()
    }
}

/// An open store. Clones are handles of the same store.
#[derive(Debug, Clone)]
pub struct Store {
    inner: Arc<Inner>,
}

/// What the writer's thread and the callers share.
#[derive(Debug, Default)]
pub(crate) struct Shared {
    pub(crate) core: Mutex<Core>,
    /// Something was queued or put back.
    pub(crate) queued: Condvar,
}

#[derive(Debug, Default)]
pub(crate) struct Core {
    pub(crate) ledger: Ledger,
    /// Hash of the last durable frame.
    pub(crate) head: tarehouse_assay::submission::Digest,
    /// Submissions under examination, with the number of the lease.
    pub(crate) leases: HashMap<SubmissionId, u64>,
    pub(crate) lease_count: u64,
}

struct Inner {
    root: PathBuf,
    options: Options,
    shared: Arc<Shared>,
    objects: Objects,
    uploads: Uploads,
    keys: KeyLocks,
    /// None where the trail is damaged and nothing is written.
    writer: Option<Writer>,
    index: Index,
    damage: Option<TrailDamage>,
    missing: Vec<String>,
    closed: AtomicBool,
    lock: Mutex<Option<Box<dyn Held>>>,
}

impl fmt::Debug for Inner {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.debug_struct("Store")
            .field("root", &self.root)
            .finish_non_exhaustive()
    }
}

impl Shared {
    pub(crate) fn lock(&self) -> MutexGuard<'_, Core> {
        self.core.lock().unwrap_or_else(PoisonError::into_inner)
    }
}

impl Store {
    /// Opens the store in a folder, or makes a new one there; its parent must exist.
    ///
    /// # Errors
    /// [`OpenError`]. A trail damaged in the middle is no error: the store opens read-only, see [`Store::health`].
    pub fn open(folder: impl Into<PathBuf>, options: Options) -> Result<Self, OpenError> {
        open::open(folder.into(), options)
    }

    /// Whether it takes changes.
    pub fn health(&self) -> Health {
        if self.inner.closed.load(Ordering::Acquire) {
            return Health::Closed;
        }
        if let Some(damage) = &self.inner.damage {
            return Health::ReadOnly(damage.clone());
        }
        let poisoned = self.inner.writer.as_ref().and_then(Writer::poisoned);
        poisoned.map_or(Health::Good, Health::Poisoned)
    }

    /// Objects that were found missing at the start, where that was tolerated.
    pub fn missing_objects(&self) -> &[String] {
        &self.inner.missing
    }

    /// Number of the last durable change.
    pub fn last_seq(&self) -> u64 {
        self.inner.shared.lock().ledger.last_seq
    }

    /// Whether this start had to build the index anew.
    pub fn index_was_rebuilt(&self) -> bool {
        self.inner.index.rebuilt()
    }

    /// Registers a function that is called after a change is durable and can be read. It runs on the index thread, in
    /// the order of changes: it must be quick and must not call the store.
    pub fn on_change(&self, observer: Observer) {
        self.inner.index.core.observe(observer);
    }

    /// Stops in good order: waits for what is under way, leaves a clean index and lets go of the lock. Later calls
    /// fail with [`StoreError::Closed`]. A store that is dropped without this loses nothing; its index is built anew.
    ///
    /// # Errors
    /// That the clean mark could not be written.
    pub fn close(&self) -> Result<(), StoreError> {
        if self.inner.closed.swap(true, Ordering::AcqRel) {
            return Ok(());
        }
        self.inner.shared.queued.notify_all();
        let whole = self.inner.stop();
        let mark = {
            let core = self.inner.shared.lock();
            Mark {
                seq: core.ledger.last_seq,
                head: core.head,
            }
        };
        let mut result = Ok(());
        if whole && self.inner.damage.is_none() {
            let disk = self.inner.options.disk.as_ref();
            result = self
                .inner
                .index
                .mark_clean(disk, mark)
                .map_err(|error| StoreError::io("marking the index clean", error));
        }
        self.inner
            .lock
            .lock()
            .unwrap_or_else(PoisonError::into_inner)
            .take();
        result
    }
}

impl Inner {
    /// Ends both threads; returns whether everything ended well.
    fn stop(&self) -> bool {
        let mut good = true;
        if let Some(writer) = &self.writer {
            writer.stop();
            good = writer.poisoned().is_none();
        }
        self.index.stop() && good
    }

    fn disk(&self) -> &dyn Disk {
        self.options.disk.as_ref()
    }

    /// Fails unless changes are taken.
    fn writable(&self) -> Result<&Writer, StoreError> {
        if self.closed.load(Ordering::Acquire) {
            return Err(StoreError::Closed);
        }
        if let Some(damage) = &self.damage {
            return Err(StoreError::ReadOnly(damage.clone()));
        }
        let writer = self.writer.as_ref().ok_or(StoreError::Closed)?;
        match writer.poisoned() {
            Some(why) => Err(StoreError::Poisoned(why)),
            None => Ok(writer),
        }
    }

    /// Makes a change durable.
    fn commit(&self, actor: &Actor, event: Event) -> Result<u64, StoreError> {
        let answer = self.writable()?.commit(Proposal {
            time_ms: (self.options.clock)(),
            principal: actor.principal.clone(),
            policy_digest: actor.policy_digest,
            program_version: self.options.program_version.clone(),
            event,
        });
        answer.map_err(|error| match error {
            CommitError::NoSpace => StoreError::NoSpace,
            CommitError::Io(error) => StoreError::Io {
                doing: "writing the trail",
                source: std::io::Error::new(error.kind(), error.to_string()),
            },
            CommitError::Poisoned(why) => StoreError::Poisoned(why),
            CommitError::Closed => StoreError::Closed,
        })
    }

    /// Stores bytes as an object; a failed sync poisons the store.
    fn put(&self, bytes: &[u8]) -> Result<ObjectRef, StoreError> {
        self.writable()?;
        self.objects.put(bytes).map_err(|error| self.refused(error))
    }

    fn refused(&self, error: PutError) -> StoreError {
        match error {
            PutError::Refused(doing, error) => StoreError::io(doing, error),
            PutError::Sync(doing, error) => self.poisoned_by(doing, &error),
        }
    }

    fn poisoned_by(&self, doing: &str, error: &std::io::Error) -> StoreError {
        let why = format!("{doing}: {error}");
        tracing::error!(%why, "a sync failed; no more changes are taken");
        if let Some(writer) = &self.writer {
            writer.poison(&why);
        }
        StoreError::Poisoned(why)
    }

    /// What the ledger knows of a submission.
    fn entry(&self, id: SubmissionId) -> Result<Entry, StoreError> {
        let core = self.shared.lock();
        core.ledger
            .entry(id)
            .cloned()
            .ok_or(StoreError::NotFound(id))
    }

    fn state(&self, id: SubmissionId) -> Result<State, StoreError> {
        let core = self.shared.lock();
        let entry = core.ledger.entry(id).ok_or(StoreError::NotFound(id))?;
        Ok(entry.state)
    }
}

impl Drop for Inner {
    fn drop(&mut self) {
        self.stop();
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::trail::writer::Committed;
    use crate::view::NewSubmission;

    fn new(number: u8) -> NewSubmission {
        NewSubmission {
            request_id: number.to_string(),
            package_digest: [number; 32],
            manifest: vec![number],
            arrays: Vec::new(),
            compound: "velnaric acid".to_owned(),
            form: "I".to_owned(),
            formula: "C4 H6 O2".to_owned(),
            contributor_key: None,
        }
    }

    #[test]
    fn a_failed_index_stops_reads_not_answers_and_can_be_rebuilt() {
        let folder = tempfile::tempdir().unwrap();
        let store = Store::open(folder.path(), Options::default()).unwrap();
        let actor = Actor::new("mira");
        let first = store.create_submission(&actor, new(1)).unwrap().id;
        store.get_submission(first).unwrap();
        // A change that cannot be applied: the trail has never made one.
        let bogus = Committed {
            seq: 2,
            head: [0; 32],
            time_ms: 0,
            principal: String::new(),
            policy_digest: None,
            program_version: String::new(),
            event: Event::Sealed(SubmissionId::random()),
        };
        store.inner.index.core.take_in(vec![(bogus, Vec::new())]);
        let second = store.create_submission(&actor, new(2)).unwrap().id;
        let unread = store.get_submission(second);
        assert!(matches!(unread, Err(StoreError::IndexUnavailable { .. })));
        store.rebuild_index().unwrap();
        assert_eq!(store.get_submission(second).unwrap().state, State::Draft);
        assert_eq!(store.get_submission(first).unwrap().state, State::Draft);
        let third = store.create_submission(&actor, new(3)).unwrap().id;
        assert_eq!(store.get_submission(third).unwrap().state, State::Draft);
        assert_eq!(
            store.index_fingerprint().unwrap(),
            store.rebuilt_index_fingerprint().unwrap()
        );
        store.close().unwrap();
        drop(store);
        let store = Store::open(folder.path(), Options::default()).unwrap();
        assert!(!store.index_was_rebuilt());
    }
}
