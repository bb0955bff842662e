//! The index: a projection of the trail into the embedded database, for lists and look-ups.
//!
//! It is a cache. It is trusted at start-up only if it was closed in good order, none of its bytes has changed since,
//! and it stands exactly where the trail ends; else a new generation is built from the trail and the old one removed.
//! One thread applies changes, each with all its keys and the applied number in one transaction. It is never waited
//! for when a change is answered, except by a bound on how far it may lag.

pub(crate) mod apply;
pub(crate) mod clean;
pub(crate) mod keys;
pub(crate) mod query;
pub(crate) mod rows;

use std::fmt;
use std::panic::{AssertUnwindSafe, catch_unwind};
use std::path::{Path, PathBuf};
use std::sync::mpsc::{Receiver, RecvTimeoutError, SyncSender, sync_channel};
use std::sync::{Arc, Condvar, Mutex, PoisonError, RwLock};
use std::thread::JoinHandle;
use std::time::{Duration, Instant};

use crate::disk::Disk;
use crate::error::{OpenError, StoreError};
use crate::id::SubmissionId;
use crate::limits::BACKLOG_MAX;
use crate::state::State;
use crate::trail::anchor::Mark;
use crate::trail::writer::Committed;

/// Called after a change is durable and in the index.
pub type Observer = Box<dyn Fn(&SubmissionId, State) + Send + Sync>;

/// A durable change with the states that it set.
pub(crate) type Change = (Committed, Vec<(SubmissionId, State)>);

/// Changes applied in one transaction.
const CHUNK: usize = 256;
/// How long the database's threads may go on after it was let go.
const RELEASE_LIMIT: Duration = Duration::from_secs(10);

/// Reads the trail from its start and hands over every change.
pub(crate) type Replay<'a> =
    &'a dyn Fn(&mut dyn FnMut(Committed) -> Result<(), OpenError>) -> Result<(), OpenError>;

#[derive(Debug, Default)]
struct Applied {
    seq: u64,
    broken: Option<String>,
}

pub(crate) struct Core {
    db: RwLock<Option<sled::Db>>,
    applied: Mutex<Applied>,
    moved: Condvar,
    observers: RwLock<Vec<Observer>>,
}

impl fmt::Debug for Core {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.debug_struct("Core").finish_non_exhaustive()
    }
}

/// The open index with its applier.
#[derive(Debug)]
pub(crate) struct Index {
    pub(crate) core: Arc<Core>,
    folder: PathBuf,
    generation: Mutex<u64>,
    thread: Mutex<Option<JoinHandle<()>>>,
    rebuilt: bool,
}

/// What opening an index needs.
#[derive(Debug)]
pub(crate) struct Opening<'a> {
    pub(crate) disk: &'a dyn Disk,
    pub(crate) root: &'a Path,
    /// Where the trail ends.
    pub(crate) trail: Mark,
    /// How long the database may take to open.
    pub(crate) open_limit: Duration,
    pub(crate) cache_bytes: u64,
}

pub(crate) fn folder(root: &Path) -> PathBuf {
    root.join("index")
}

fn generation_name(generation: u64) -> String {
    format!("generation-{generation:08}")
}

impl Opening<'_> {
    /// Opens the index, or builds a new one.
    pub(crate) fn open(
        &self,
        clean: Option<clean::CleanMark>,
        replay: Replay<'_>,
    ) -> Result<(Index, SyncSender<Change>), OpenError> {
        let folder = folder(self.root);
        let io = |source| OpenError::Io {
            doing: "listing the index",
            path: folder.clone(),
            source,
        };
        let names: Vec<String> = self
            .disk
            .list(&folder)
            .map_err(io)?
            .into_iter()
            .filter(|entry| entry.is_dir)
            .map(|entry| entry.name)
            .collect();
        let newest = names
            .iter()
            .filter_map(|name| name.strip_prefix("generation-")?.parse::<u64>().ok())
            .max()
            .unwrap_or(0);
        let trusted = clean.and_then(|mark| self.trusted(&mark).map(|db| (db, mark.generation)));
        let rebuilt = trusted.is_none();
        let (db, generation) = match trusted {
            Some(found) => found,
            None => (self.build(newest + 1, replay)?, newest + 1),
        };
        for name in names {
            if name != generation_name(generation) {
                // Best effort: an old generation is never read again.
                let _ = self.disk.remove_dir_all(&folder.join(name));
            }
        }
        let core = Arc::new(Core {
            db: RwLock::new(Some(db)),
            applied: Mutex::new(Applied {
                seq: self.trail.seq,
                broken: None,
            }),
            moved: Condvar::new(),
            observers: RwLock::default(),
        });
        let (sender, receiver) = sync_channel(BACKLOG_MAX);
        let for_thread = Arc::clone(&core);
        let thread = std::thread::Builder::new()
            .name("index".to_owned())
            .spawn(move || run(&for_thread, &receiver))
            .map_err(|error| OpenError::Index {
                detail: error.to_string(),
            })?;
        let index = Index {
            core,
            folder,
            generation: Mutex::new(generation),
            thread: Mutex::new(Some(thread)),
            rebuilt,
        };
        Ok((index, sender))
    }

    /// The database of a clean mark, if everything fits.
    fn trusted(&self, mark: &clean::CleanMark) -> Option<sled::Db> {
        if mark.mark != self.trail {
            tracing::info!("the index does not stand where the trail ends; building a new one");
            return None;
        }
        let path = folder(self.root).join(generation_name(mark.generation));
        if let Err(why) = clean::compare(self.disk, &path, mark) {
            tracing::warn!(%why, "the index has changed since it was closed; building a new one");
            return None;
        }
        let db = self
            .guarded(&path)
            .map_err(|why| tracing::warn!(%why, "the index does not open; building a new one"))
            .ok()?;
        match apply::applied(&db) {
            Ok(Some(applied)) if applied == self.trail => Some(db),
            Ok(None) if self.trail.seq == 0 => Some(db),
            _ => None,
        }
    }

    /// Opens the database in a thread of its own: on damage it may panic or never come back.
    fn guarded(&self, path: &Path) -> Result<sled::Db, String> {
        let (sender, receiver) = sync_channel(1);
        let path = path.to_path_buf();
        let cache_bytes = self.cache_bytes;
        std::thread::Builder::new()
            .name("index-open".to_owned())
            .spawn(move || {
                let opened = catch_unwind(|| {
                    sled::Config::new()
                        .path(path)
                        .cache_capacity(cache_bytes)
                        .flush_every_ms(None)
                        .open()
                });
                let opened = match opened {
                    Ok(Ok(db)) => Ok(db),
                    Ok(Err(error)) => Err(error.to_string()),
                    Err(_) => Err("the database panicked".to_owned()),
                };
                let _ = sender.send(opened);
            })
            .map_err(|error| error.to_string())?;
        match receiver.recv_timeout(self.open_limit) {
            Ok(opened) => opened,
            Err(RecvTimeoutError::Timeout) => Err("the database took too long".to_owned()),
            Err(RecvTimeoutError::Disconnected) => Err("the database did not answer".to_owned()),
        }
    }

    /// Builds a generation from the trail.
    fn build(&self, generation: u64, replay: Replay<'_>) -> Result<sled::Db, OpenError> {
        let path = folder(self.root).join(generation_name(generation));
        let failed = |detail: String| OpenError::Index { detail };
        self.disk
            .create_dir(&path)
            .map_err(|error| failed(error.to_string()))?;
        let db = self.guarded(&path).map_err(failed)?;
        fill(&db, replay)?;
        Ok(db)
    }
}

/// Waits until nobody holds the database's file: its own threads may write on for a moment after it was let go.
fn wait_until_released(disk: &dyn Disk, file: &Path) -> std::io::Result<()> {
    let deadline = Instant::now() + RELEASE_LIMIT;
    loop {
        match disk.lock(file) {
            Err(error)
                if error.kind() == std::io::ErrorKind::WouldBlock && Instant::now() < deadline =>
            {
                std::thread::sleep(Duration::from_millis(1));
            }
            other => return other.map(drop),
        }
    }
}

/// Applies the whole trail to an empty database.
pub(crate) fn fill(db: &sled::Db, replay: Replay<'_>) -> Result<(), OpenError> {
    let failed = |detail: String| OpenError::Index { detail };
    let mut chunk = Vec::with_capacity(CHUNK);
    replay(&mut |committed| {
        chunk.push(committed);
        if chunk.len() == CHUNK {
            apply_guarded(db, &chunk).map_err(failed)?;
            chunk.clear();
        }
        Ok(())
    })?;
    apply_guarded(db, &chunk).map_err(failed)
}

fn apply_guarded(db: &sled::Db, chunk: &[Committed]) -> Result<(), String> {
    if chunk.is_empty() {
        return Ok(());
    }
    catch_unwind(AssertUnwindSafe(|| apply::apply(db, chunk)))
        .unwrap_or_else(|_| Err("the database panicked".to_owned()))
}

fn run(core: &Core, receiver: &Receiver<Change>) {
    while let Ok(first) = receiver.recv() {
        let mut changes = vec![first];
        while changes.len() < CHUNK
            && let Ok(next) = receiver.try_recv()
        {
            changes.push(next);
        }
        core.take_in(changes);
    }
}

impl Core {
    /// Applies changes, says how far the index is now, and tells the observers.
    pub(crate) fn take_in(&self, changes: Vec<Change>) {
        let (chunk, states): (Vec<_>, Vec<_>) = changes.into_iter().unzip();
        {
            // Held until the number is set, so that a rebuild sees both or neither.
            let db = self.db.read().unwrap_or_else(PoisonError::into_inner);
            let (known, broken) = self.standing();
            // A rebuild may have been ahead of this thread.
            let new = chunk.iter().position(|change| change.seq > known);
            let new = new.and_then(|at| chunk.get(at..)).unwrap_or_default();
            let applied = match (db.as_ref(), broken) {
                (_, true) => Ok(known),
                (Some(db), false) => {
                    apply_guarded(db, new).map(|()| new.last().map_or(known, |change| change.seq))
                }
                (None, false) => Err("the index is closed".to_owned()),
            };
            let mut state = self.applied.lock().unwrap_or_else(PoisonError::into_inner);
            match applied {
                Ok(seq) => state.seq = seq,
                Err(why) => {
                    tracing::error!(%why, "the index has failed and must be rebuilt");
                    state.broken.get_or_insert(why);
                }
            }
        }
        self.moved.notify_all();
        let observers = self
            .observers
            .read()
            .unwrap_or_else(PoisonError::into_inner);
        for (id, state) in states.into_iter().flatten() {
            for observer in observers.iter() {
                if catch_unwind(AssertUnwindSafe(|| observer(&id, state))).is_err() {
                    tracing::error!(%id, "an observer has panicked");
                }
            }
        }
    }

    /// Last change applied, and whether the index has failed.
    fn standing(&self) -> (u64, bool) {
        let state = self.applied.lock().unwrap_or_else(PoisonError::into_inner);
        (state.seq, state.broken.is_some())
    }

    pub(crate) fn observe(&self, observer: Observer) {
        self.observers
            .write()
            .unwrap_or_else(PoisonError::into_inner)
            .push(observer);
    }

    /// Waits until a change is in the index.
    pub(crate) fn wait_for(&self, seq: u64, limit: Duration) -> Result<(), StoreError> {
        let deadline = Instant::now() + limit;
        let mut state = self.applied.lock().unwrap_or_else(PoisonError::into_inner);
        loop {
            if let Some(why) = &state.broken {
                return Err(StoreError::IndexUnavailable {
                    detail: why.clone(),
                });
            }
            if state.seq >= seq {
                return Ok(());
            }
            let left = deadline.saturating_duration_since(Instant::now());
            if left.is_zero() {
                return Err(StoreError::IndexUnavailable {
                    detail: format!("it is at change {} and not yet at {seq}", state.seq),
                });
            }
            state = self
                .moved
                .wait_timeout(state, left)
                .unwrap_or_else(PoisonError::into_inner)
                .0;
        }
    }

    /// Asks the database something, guarded.
    pub(crate) fn ask<T>(
        &self,
        question: impl FnOnce(&sled::Db) -> Result<T, String>,
    ) -> Result<T, StoreError> {
        let db = self.db.read().unwrap_or_else(PoisonError::into_inner);
        let Some(db) = db.as_ref() else {
            return Err(StoreError::Closed);
        };
        catch_unwind(AssertUnwindSafe(|| question(db)))
            .unwrap_or_else(|_| Err("the database panicked".to_owned()))
            .map_err(|detail| StoreError::IndexUnavailable { detail })
    }
}

impl Index {
    /// Whether this start had to build it.
    pub(crate) fn rebuilt(&self) -> bool {
        self.rebuilt
    }

    /// Waits for the applier, whose sender must be gone, and lets go of the database.
    pub(crate) fn stop(&self) -> bool {
        let thread = self
            .thread
            .lock()
            .unwrap_or_else(PoisonError::into_inner)
            .take();
        let ended = thread.is_none_or(|thread| thread.join().is_ok());
        let db = self
            .core
            .db
            .write()
            .unwrap_or_else(PoisonError::into_inner)
            .take();
        let flushed = db.is_none_or(|db| {
            catch_unwind(AssertUnwindSafe(|| db.flush().is_ok())).unwrap_or(false)
        });
        ended && flushed && !self.core.standing().1
    }

    /// Says durably that the stopped index is whole.
    pub(crate) fn mark_clean(&self, disk: &dyn Disk, trail: Mark) -> std::io::Result<()> {
        let generation = *self
            .generation
            .lock()
            .unwrap_or_else(PoisonError::into_inner);
        let path = self.folder.join(generation_name(generation));
        wait_until_released(disk, &path.join("db"))?;
        clean::write(disk, &self.folder, &path, generation, trail)
    }

    /// Builds a new generation up to `up_to` and swaps it in; readers and the applier wait meanwhile.
    pub(crate) fn rebuild(
        &self,
        opening: &Opening<'_>,
        up_to: u64,
        replay: Replay<'_>,
    ) -> Result<(), OpenError> {
        let mut generation = self
            .generation
            .lock()
            .unwrap_or_else(PoisonError::into_inner);
        let mut db = self.core.db.write().unwrap_or_else(PoisonError::into_inner);
        let fresh = opening.build(*generation + 1, replay)?;
        // A panic inside the old one as it closes must not keep the new one out.
        let old = db.replace(fresh);
        let _ = catch_unwind(AssertUnwindSafe(|| drop(old)));
        let path = self.folder.join(generation_name(*generation));
        let _ = opening.disk.remove_dir_all(&path);
        *generation += 1;
        {
            let mut state = self
                .core
                .applied
                .lock()
                .unwrap_or_else(PoisonError::into_inner);
            state.seq = up_to;
            state.broken = None;
        }
        drop(db);
        self.core.moved.notify_all();
        Ok(())
    }
}
