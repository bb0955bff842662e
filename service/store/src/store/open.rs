//! Start-up, in the order that storage needs: lock, chain, anchor, objects, index, clearing up.

use std::collections::HashMap;
use std::io;
use std::path::{Path, PathBuf};
use std::sync::atomic::AtomicBool;
use std::sync::mpsc::SyncSender;
use std::sync::{Arc, Mutex};

use tarehouse_assay::submission::Digest;

use super::{Core, Inner, Options, Shared, Store};
use crate::disk::{Disk, Held, OpenMode};
use crate::error::OpenError;
use crate::event::Event;
use crate::index::{self, Change, Opening, clean};
use crate::keylock::KeyLocks;
use crate::ledger::Ledger;
use crate::object::Objects;
use crate::state::State;
use crate::trail::anchor::{self, Anchor, Mark};
use crate::trail::frame::Frame;
use crate::trail::scan::{self, Ending, Scan};
use crate::trail::segment;
use crate::trail::writer::{Committed, Sink, Tail, Writer};
use crate::upload::{self, Uploads};
use crate::view::ObjectRef;

/// What walking the trail yields.
struct Walked {
    scan: Scan,
    ledger: Ledger,
    /// Every object referred to, with the last frame that does.
    objects: HashMap<Digest, (ObjectRef, u64)>,
    hash_at_anchor: Option<Digest>,
}

pub(super) fn open(root: PathBuf, options: Options) -> Result<Store, OpenError> {
    let disk = Arc::clone(&options.disk);
    let lock = prepare(disk.as_ref(), &root)?;
    let failed = |doing: &'static str| {
        let path = root.clone();
        move |source: io::Error| OpenError::Io {
            doing,
            path,
            source,
        }
    };
    let reading = anchor::read(disk.as_ref(), &root).map_err(failed("reading the anchor"))?;
    let mut walked = walk(disk.as_ref(), &root, &reading)?;
    let counter = scan::compare_with_anchor(reading, &walked.scan, walked.hash_at_anchor)?;
    let damage = match &walked.scan.ending {
        Ending::Damaged(damage) => Some(damage.clone()),
        Ending::Whole | Ending::Torn { .. } => None,
    };
    scan::cut_tail(disk.as_ref(), &root, &mut walked.scan)?;
    let mark = Mark {
        seq: walked.scan.last_seq,
        head: walked.scan.head,
    };
    let clean = match &damage {
        Some(_) => None,
        None => clean::take(disk.as_ref(), &index::folder(&root))
            .map_err(failed("reading the clean mark"))?,
    };
    let objects = Objects::new(Arc::clone(&disk), &root);
    let clean_stop = clean.as_ref().is_some_and(|clean| clean.mark == mark);
    let missing = check_objects(&objects, &walked, clean_stop, &options)
        .map_err(failed("looking for objects"))?;
    if !missing.is_empty() && !options.tolerate_missing_objects {
        return Err(OpenError::ObjectsMissing { missing });
    }
    let opening = Opening {
        disk: disk.as_ref(),
        root: &root,
        trail: mark,
        open_limit: options.index_open_limit,
        cache_bytes: options.index_cache_bytes,
    };
    let (index, changes) = opening.open(clean, &|take| replay(disk.as_ref(), &root, take))?;
    if damage.is_none() {
        clear(disk.as_ref(), &root, &walked.ledger).map_err(failed("clearing up"))?;
    }
    let shared = Arc::new(Shared {
        core: Mutex::new(Core {
            ledger: walked.ledger,
            head: mark.head,
            ..Core::default()
        }),
        ..Shared::default()
    });
    let writer = match &damage {
        Some(damage) => {
            tracing::error!(?damage, "the trail is damaged; the store is read-only");
            None
        }
        None => {
            let anchor = Anchor::open(disk.as_ref(), &root, counter, &mark)
                .map_err(failed("writing the anchor"))?;
            let tail = tail(disk.as_ref(), &root, &walked.scan, &options)?;
            let sink = sink(Arc::clone(&shared), changes);
            let started = Writer::start(Arc::clone(&disk), tail, anchor, sink);
            Some(started.map_err(failed("starting the trail"))?)
        }
    };
    let inner = Inner {
        uploads: Uploads::new(Arc::clone(&disk), &root),
        root,
        options,
        shared,
        objects,
        keys: KeyLocks::default(),
        writer,
        index,
        damage,
        missing,
        closed: AtomicBool::new(false),
        lock: Mutex::new(Some(lock)),
    };
    Ok(Store {
        inner: Arc::new(inner),
    })
}

/// Makes the folders and takes the lock.
fn prepare(disk: &dyn Disk, root: &Path) -> Result<Box<dyn Held>, OpenError> {
    let failed = |source| OpenError::Io {
        doing: "preparing the folder",
        path: root.to_path_buf(),
        source,
    };
    disk.create_dir(root).map_err(failed)?;
    let lock = disk.lock(&root.join("lock")).map_err(|source| {
        if source.kind() == io::ErrorKind::WouldBlock {
            OpenError::Locked {
                path: root.to_path_buf(),
            }
        } else {
            failed(source)
        }
    })?;
    for folder in [
        segment::folder(root),
        root.join("objects"),
        root.join("temp"),
        upload::folder(root),
        index::folder(root),
    ] {
        disk.create_dir(&folder).map_err(failed)?;
    }
    disk.sync_dir(root).map_err(failed)?;
    if let Some(parent) = root.parent() {
        let parent = if parent.as_os_str().is_empty() {
            Path::new(".")
        } else {
            parent
        };
        disk.sync_dir(parent).map_err(failed)?;
    }
    Ok(lock)
}

fn walk(disk: &dyn Disk, root: &Path, reading: &anchor::Reading) -> Result<Walked, OpenError> {
    let anchor_seq = match reading {
        anchor::Reading::Mark(mark, _) => Some(mark.seq),
        anchor::Reading::Missing | anchor::Reading::Damaged => None,
    };
    let mut hash_at_anchor = (anchor_seq == Some(0)).then(crate::trail::genesis);
    let mut ledger = Ledger::default();
    let mut objects = HashMap::new();
    let scan = scan::scan(disk, root, &mut |frame, hash| {
        let seq = frame.seq;
        let failed = |detail: String| OpenError::Frame { seq, detail };
        let event = Event::decode(frame.kind, frame.version, &frame.payload)
            .map_err(|error| failed(error.to_string()))?;
        for object in event.objects() {
            objects.insert(object.digest, (object, seq));
        }
        ledger.apply(seq, &event).map_err(failed)?;
        if anchor_seq == Some(seq) {
            hash_at_anchor = Some(hash);
        }
        Ok(())
    })?;
    Ok(Walked {
        scan,
        ledger,
        objects,
        hash_at_anchor,
    })
}

/// Says which objects are missing; after a clean stop only those of the segment that was being written.
fn check_objects(
    objects: &Objects,
    walked: &Walked,
    clean_stop: bool,
    options: &Options,
) -> io::Result<Vec<String>> {
    let from = if clean_stop && !options.tolerate_missing_objects {
        walked.scan.active_first_seq
    } else {
        0
    };
    let mut missing = Vec::new();
    for (object, seq) in walked.objects.values() {
        if *seq >= from
            && let Err(why) = objects.check_size(object)?
        {
            missing.push(why);
        }
    }
    missing.sort();
    Ok(missing)
}

/// Hands over every change of the trail.
pub(super) fn replay(
    disk: &dyn Disk,
    root: &Path,
    take: &mut dyn FnMut(Committed) -> Result<(), OpenError>,
) -> Result<(), OpenError> {
    scan::scan(disk, root, &mut |frame: Frame, head| {
        let event = Event::decode(frame.kind, frame.version, &frame.payload).map_err(|error| {
            OpenError::Frame {
                seq: frame.seq,
                detail: error.to_string(),
            }
        })?;
        take(Committed {
            seq: frame.seq,
            head,
            time_ms: frame.time_ms,
            principal: frame.principal,
            policy_digest: frame.policy_digest,
            program_version: frame.program_version,
            event,
        })
    })?;
    Ok(())
}

fn tail(disk: &dyn Disk, root: &Path, scan: &Scan, options: &Options) -> Result<Tail, OpenError> {
    let active = match &scan.active {
        None => None,
        Some((path, length)) => {
            let file = disk
                .open(path, OpenMode::Keep)
                .map_err(|source| OpenError::Io {
                    doing: "opening the last segment",
                    path: path.clone(),
                    source,
                })?;
            Some((file, *length))
        }
    };
    Ok(Tail {
        folder: segment::folder(root),
        last_seq: scan.last_seq,
        head: scan.head,
        active,
        segment_bytes_max: options.segment_bytes_max,
    })
}

/// What happens to a durable change: into the ledger, then to the index.
fn sink(shared: Arc<Shared>, changes: SyncSender<Change>) -> Sink {
    Box::new(move |committed| {
        let states = {
            let mut core = shared.lock();
            match core.ledger.apply(committed.seq, &committed.event) {
                Ok(states) => {
                    core.head = committed.head;
                    states
                }
                Err(why) => {
                    tracing::error!(%why, "a decided change does not follow from the trail");
                    core.astray.get_or_insert(why);
                    Vec::new()
                }
            }
        };
        if states.iter().any(|(_, state)| *state == State::Queued) {
            shared.queued.notify_all();
        }
        // A closed channel means that the index thread is gone; the trail goes on.
        let _ = changes.send((committed, states));
    })
}

/// Removes temporary files, and partial uploads that nobody can finish any more.
fn clear(disk: &dyn Disk, root: &Path, ledger: &Ledger) -> io::Result<()> {
    let temp = root.join("temp");
    for entry in disk.list(&temp)? {
        disk.remove_file(&temp.join(entry.name))?;
    }
    let partial = upload::folder(root);
    for entry in disk.list(&partial)? {
        let wanted = upload::parse_file_name(&entry.name).is_some_and(|(id, name)| {
            ledger.entry(id).is_some_and(|known| {
                known.state == State::Draft
                    && known
                        .arrays
                        .iter()
                        .any(|(array, stored)| array.name == name && !stored)
            })
        });
        if !wanted {
            disk.remove_file(&partial.join(entry.name))?;
        }
    }
    Ok(())
}

/// Digest of an index built from the trail just now, in a folder that is removed again.
pub(super) fn fresh_fingerprint(inner: &Inner) -> Result<Digest, OpenError> {
    let failed = |detail: String| OpenError::Index { detail };
    let db = sled::Config::new()
        .temporary(true)
        .flush_every_ms(None)
        .open()
        .map_err(|error| failed(error.to_string()))?;
    index::fill(&db, &|take| replay(inner.disk(), &inner.root, take))?;
    index::query::fingerprint(&db).map_err(failed)
}
