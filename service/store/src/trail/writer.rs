//! The one thread that writes the trail. Many waiting changes share one sync (group commit).

use std::collections::VecDeque;
use std::io;
use std::path::PathBuf;
use std::sync::mpsc::{SyncSender, sync_channel};
use std::sync::{Arc, Condvar, Mutex, PoisonError};
use std::thread::JoinHandle;

use tarehouse_assay::submission::Digest;

use super::anchor::{Anchor, Mark};
use super::frame::Frame;
use super::segment::{self, CreateError, Header};
use crate::disk::{self, Disk, DiskFile};
use crate::event::Event;
use crate::limits::{BATCH_BYTES_MAX, BATCH_FRAMES_MAX, PAYLOAD_BYTES_MAX};

/// A change that wants to be durable; its number is given by the writer.
#[derive(Debug)]
pub(crate) struct Proposal {
    pub(crate) time_ms: u64,
    pub(crate) principal: String,
    pub(crate) policy_digest: Option<Digest>,
    pub(crate) program_version: String,
    pub(crate) event: Event,
}

/// A change that is durable.
#[derive(Debug, Clone)]
pub(crate) struct Committed {
    pub(crate) seq: u64,
    pub(crate) head: Digest,
    pub(crate) time_ms: u64,
    pub(crate) principal: String,
    pub(crate) policy_digest: Option<Digest>,
    pub(crate) program_version: String,
    pub(crate) event: Event,
}

/// Why a change is not durable.
#[derive(Debug, Clone)]
pub(crate) enum CommitError {
    /// No space; the trail is as before.
    NoSpace,
    /// The file system refused; the trail is as before.
    Io(Arc<io::Error>),
    /// A sync failed; nothing more is written.
    Poisoned(String),
    /// The writer has stopped.
    Closed,
}

/// Called with changes in order, after they are durable and before they are answered for. An error says that a change
/// does not follow from those before it, and stops the trail.
pub(crate) type Sink = Box<dyn FnMut(Committed) -> Result<(), String> + Send>;

/// Where the writer goes on.
#[derive(Debug)]
pub(crate) struct Tail {
    pub(crate) folder: PathBuf,
    pub(crate) last_seq: u64,
    pub(crate) head: Digest,
    /// Open segment with its length; none before the first frame.
    pub(crate) active: Option<(Box<dyn DiskFile>, u64)>,
    pub(crate) segment_bytes_max: u64,
}

/// A proposal and where its answer goes.
type Waiting = (Proposal, SyncSender<Result<u64, CommitError>>);

#[derive(Debug, Default)]
struct Queue {
    waiting: VecDeque<Waiting>,
    closed: bool,
    poisoned: Option<String>,
}

#[derive(Debug, Default)]
struct Shared {
    queue: Mutex<Queue>,
    wake: Condvar,
}

/// Handle of the writer thread.
#[derive(Debug)]
pub(crate) struct Writer {
    shared: Arc<Shared>,
    thread: Mutex<Option<JoinHandle<()>>>,
}

struct Pen {
    disk: Arc<dyn Disk>,
    tail: Tail,
    anchor: Anchor,
    sink: Sink,
}

fn lock<T>(mutex: &Mutex<T>) -> std::sync::MutexGuard<'_, T> {
    mutex.lock().unwrap_or_else(PoisonError::into_inner)
}

fn poison(shared: &Shared, why: &str) {
    lock(&shared.queue)
        .poisoned
        .get_or_insert_with(|| why.to_owned());
}

impl Writer {
    /// Starts the thread.
    pub(crate) fn start(
        disk: Arc<dyn Disk>,
        tail: Tail,
        anchor: Anchor,
        sink: Sink,
    ) -> io::Result<Self> {
        let shared = Arc::new(Shared::default());
        let pen = Pen {
            disk,
            tail,
            anchor,
            sink,
        };
        let for_thread = Arc::clone(&shared);
        let thread = std::thread::Builder::new()
            .name("trail".to_owned())
            .spawn(move || run(&for_thread, pen))?;
        Ok(Self {
            shared,
            thread: Mutex::new(Some(thread)),
        })
    }

    /// Makes a change durable and returns its number; blocks.
    pub(crate) fn commit(&self, proposal: Proposal) -> Result<u64, CommitError> {
        let (reply, answer) = sync_channel(1);
        {
            let mut queue = lock(&self.shared.queue);
            if let Some(why) = &queue.poisoned {
                return Err(CommitError::Poisoned(why.clone()));
            }
            if queue.closed {
                return Err(CommitError::Closed);
            }
            queue.waiting.push_back((proposal, reply));
        }
        self.shared.wake.notify_one();
        answer.recv().unwrap_or(Err(CommitError::Closed))
    }

    /// Takes no more changes, for a reason found elsewhere.
    pub(crate) fn poison(&self, why: &str) {
        poison(&self.shared, why);
    }

    /// Why no more changes are taken.
    pub(crate) fn poisoned(&self) -> Option<String> {
        lock(&self.shared.queue).poisoned.clone()
    }

    /// Finishes what waits, syncs the anchor and ends the thread.
    pub(crate) fn stop(&self) {
        lock(&self.shared.queue).closed = true;
        self.shared.wake.notify_all();
        if let Some(thread) = lock(&self.thread).take()
            && thread.join().is_err()
        {
            self.poison("the trail's thread has panicked");
        }
    }
}

impl Drop for Writer {
    fn drop(&mut self) {
        self.stop();
    }
}

/// Answers everybody who still waits if the thread ends early.
struct LastWill<'a>(&'a Shared);

impl Drop for LastWill<'_> {
    fn drop(&mut self) {
        let mut queue = lock(&self.0.queue);
        queue.closed = true;
        queue.waiting.clear();
    }
}

fn run(shared: &Shared, mut pen: Pen) {
    let _will = LastWill(shared);
    loop {
        let batch = {
            let mut queue = lock(&shared.queue);
            while queue.waiting.is_empty() && !queue.closed {
                queue = shared
                    .wake
                    .wait(queue)
                    .unwrap_or_else(PoisonError::into_inner);
            }
            if queue.waiting.is_empty() {
                break;
            }
            if let Some(why) = queue.poisoned.clone() {
                for (_, reply) in queue.waiting.drain(..) {
                    let _ = reply.send(Err(CommitError::Poisoned(why.clone())));
                }
                continue;
            }
            let count = queue.waiting.len().min(BATCH_FRAMES_MAX);
            queue.waiting.drain(..count).collect::<Vec<_>>()
        };
        let mut batch = VecDeque::from(batch);
        while !batch.is_empty() {
            pen.round(shared, &mut batch);
        }
    }
    if lock(&shared.queue).poisoned.is_none()
        && let Err(error) = pen.anchor.sync()
    {
        poison(shared, &format!("syncing the anchor: {error}"));
    }
}

impl Pen {
    /// Writes as much of the batch as fits one sync, and answers.
    fn round(&mut self, shared: &Shared, batch: &mut VecDeque<Waiting>) {
        let mut bytes = Vec::new();
        let mut written = Vec::new();
        let mut head = self.tail.head;
        let mut seq = self.tail.last_seq;
        while let Some((proposal, reply)) = batch.pop_front() {
            let (kind, version, payload) = proposal.event.encode();
            if payload.len() > PAYLOAD_BYTES_MAX {
                let error = io::Error::new(io::ErrorKind::InvalidInput, "the payload is too long");
                let _ = reply.send(Err(CommitError::Io(Arc::new(error))));
                continue;
            }
            seq += 1;
            let frame = Frame {
                seq,
                time_ms: proposal.time_ms,
                principal: proposal.principal.clone(),
                policy_digest: proposal.policy_digest,
                program_version: proposal.program_version.clone(),
                kind,
                version,
                payload,
            };
            let (encoded, hash) = frame.encode(&head);
            bytes.extend_from_slice(&encoded);
            head = hash;
            written.push((seq, hash, (proposal, reply)));
            if bytes.len() > BATCH_BYTES_MAX {
                break;
            }
        }
        if written.is_empty() {
            return;
        }
        match self.append(&bytes) {
            Ok(()) => self.answer(shared, written, seq, head),
            Err(error) => {
                if let CommitError::Poisoned(why) = &error {
                    tracing::error!(%why, "the trail takes no more changes");
                    poison(shared, why);
                }
                let late = batch.drain(..).map(|(_, reply)| reply);
                for reply in written
                    .into_iter()
                    .map(|(_, _, (_, reply))| reply)
                    .chain(late)
                {
                    let _ = reply.send(Err(error.clone()));
                }
            }
        }
    }

    fn answer(
        &mut self,
        shared: &Shared,
        written: Vec<(u64, Digest, Waiting)>,
        seq: u64,
        head: Digest,
    ) {
        self.tail.last_seq = seq;
        self.tail.head = head;
        let due = self.anchor.advance(&Mark { seq, head });
        let mut replies = Vec::with_capacity(written.len());
        for (seq, head, (proposal, reply)) in written {
            let taken = (self.sink)(Committed {
                seq,
                head,
                time_ms: proposal.time_ms,
                principal: proposal.principal,
                policy_digest: proposal.policy_digest,
                program_version: proposal.program_version,
                event: proposal.event,
            });
            if let Err(why) = &taken {
                tracing::error!(%why, "a decided change does not follow from the trail");
                poison(shared, why);
            }
            replies.push((reply, taken.map(|()| seq).map_err(CommitError::Poisoned)));
        }
        for (reply, answer) in replies {
            let _ = reply.send(answer);
        }
        match due {
            Ok(false) => {}
            Ok(true) => {
                if let Err(error) = self.anchor.sync() {
                    poison(shared, &format!("syncing the anchor: {error}"));
                }
            }
            // The anchor lags, which is safe; the next write tries again.
            Err(error) => tracing::warn!(%error, "the anchor could not be written"),
        }
    }

    /// Appends and syncs; on failure the trail is as before, or poisoned.
    fn append(&mut self, bytes: &[u8]) -> Result<(), CommitError> {
        self.rotate_if_full()?;
        let Some((file, length)) = &mut self.tail.active else {
            return Err(CommitError::Closed);
        };
        if let Err(error) = disk::write_all(file.as_mut(), *length, bytes) {
            // Cut and sync, so that nothing unanswered can come back after a power cut.
            if let Err(cut) = file.set_len(*length).and_then(|()| file.sync()) {
                return Err(CommitError::Poisoned(format!(
                    "cutting back after \"{error}\": {cut}"
                )));
            }
            return Err(refused(error));
        }
        if let Err(error) = file.sync() {
            return Err(CommitError::Poisoned(format!("syncing the trail: {error}")));
        }
        *length += bytes.len() as u64;
        Ok(())
    }

    fn rotate_if_full(&mut self) -> Result<(), CommitError> {
        match &self.tail.active {
            Some((_, length)) if *length < self.tail.segment_bytes_max => return Ok(()),
            Some(_) => {
                if let Err(error) = self.anchor.sync() {
                    return Err(CommitError::Poisoned(format!(
                        "syncing the anchor: {error}"
                    )));
                }
            }
            None => {}
        }
        let header = Header {
            first_seq: self.tail.last_seq + 1,
            previous: self.tail.head,
        };
        match segment::create(self.disk.as_ref(), &self.tail.folder, &header) {
            Ok(file) => {
                self.tail.active = Some((file, segment::HEADER as u64));
                Ok(())
            }
            Err(CreateError::Undone(error)) => Err(refused(error)),
            Err(CreateError::Unknown(error)) => {
                Err(CommitError::Poisoned(format!("making a segment: {error}")))
            }
        }
    }
}

fn refused(error: io::Error) -> CommitError {
    if disk::is_no_space(&error) {
        CommitError::NoSpace
    } else {
        CommitError::Io(Arc::new(error))
    }
}
