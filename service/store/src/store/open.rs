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
use crate::error::{OpenError, TrailDamage};
use crate::event::Event;
use crate::index::clean::{self, CleanMark};
use crate::index::{self, Change, Opening};
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

/// The trail, checked against its anchor and settled.
struct Checked {
    walked: Walked,
    mark: Mark,
    damage: Option<TrailDamage>,
    anchor_counter: u64,
    clean: Option<CleanMark>,
    clean_stop: bool,
}

/// Says what failed in a store.
fn failure(root: &Path, doing: &'static str) -> impl FnOnce(io::Error) -> OpenError {
    let path = root.to_path_buf();
    move |source| OpenError::Io {
        doing,
        path,
        source,
    }
}

pub(super) fn open(root: PathBuf, options: Options) -> Result<Store, OpenError> {
    let disk = Arc::clone(&options.disk);
    let lock = prepare(disk.as_ref(), &root)?;
    let mut checked = check_trail(disk.as_ref(), &root)?;
    let mark = checked.mark;
    let objects = Objects::new(Arc::clone(&disk), &root);
    let missing = check_objects(&objects, &checked, &options)
        .map_err(failure(&root, "looking for objects"))?;
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
    let clean = checked.clean.take();
    let (index, changes) = opening.open(clean, &|take| replay(disk.as_ref(), &root, take))?;
    if checked.damage.is_none() {
        clear(disk.as_ref(), &root, &checked.walked.ledger)
            .map_err(failure(&root, "clearing up"))?;
    }
    let shared = Arc::new(Shared {
        core: Mutex::new(Core {
            ledger: std::mem::take(&mut checked.walked.ledger),
            head: mark.head,
            ..Core::default()
        }),
        ..Shared::default()
    });
    let writer = if let Some(damage) = &checked.damage {
        tracing::error!(?damage, "the trail is damaged; the store is read-only");
        None
    } else {
        let sink = sink(Arc::clone(&shared), changes);
        Some(start_writer(&root, &checked, &options, sink)?)
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
        damage: checked.damage,
        missing,
        closed: AtomicBool::new(false),
        lock: Mutex::new(Some(lock)),
    };
    Ok(Store {
        inner: Arc::new(inner),
    })
}

/// Walks the trail, compares it with its anchor and settles its end.
fn check_trail(disk: &dyn Disk, root: &Path) -> Result<Checked, OpenError> {
    let reading = anchor::read(disk, root).map_err(failure(root, "reading the anchor"))?;
    let mut walked = walk(disk, root, &reading)?;
    let anchor_counter = scan::compare_with_anchor(reading, &walked.scan, walked.hash_at_anchor)?;
    let mark = Mark {
        seq: walked.scan.last_seq,
        head: walked.scan.head,
    };
    let damage = match &walked.scan.ending {
        Ending::Damaged(damage) => Some(damage.clone()),
        Ending::Whole | Ending::Torn { .. } => None,
    };
    let clean = match &damage {
        Some(_) => None,
        None => clean::take(disk, &index::folder(root))
            .map_err(failure(root, "reading the clean mark"))?,
    };
    let clean_stop = clean.as_ref().is_some_and(|clean| clean.mark == mark);
    if damage.is_none() {
        scan::settle_tail(disk, root, &mut walked.scan, clean_stop)?;
    }
    Ok(Checked {
        walked,
        mark,
        damage,
        anchor_counter,
        clean,
        clean_stop,
    })
}

/// Starts the thread that writes the trail.
fn start_writer(
    root: &Path,
    checked: &Checked,
    options: &Options,
    sink: Sink,
) -> Result<Writer, OpenError> {
    let disk = &options.disk;
    let anchor = Anchor::open(disk.as_ref(), root, checked.anchor_counter, &checked.mark)
        .map_err(failure(root, "writing the anchor"))?;
    let tail = tail(disk.as_ref(), root, &checked.walked.scan, options)?;
    Writer::start(Arc::clone(disk), tail, anchor, sink).map_err(failure(root, "starting the trail"))
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
    checked: &Checked,
    options: &Options,
) -> io::Result<Vec<String>> {
    let walked = &checked.walked;
    let from = if checked.clean_stop && !options.tolerate_missing_objects {
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
            let states = core.ledger.apply(committed.seq, &committed.event)?;
            core.head = committed.head;
            states
        };
        if states.iter().any(|(_, state)| *state == State::Queued) {
            shared.queued.notify_all();
        }
        // A closed channel means that the index thread is gone; the trail goes on.
        let _ = changes.send((committed, states));
        Ok(())
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

/// Builds the index anew from the trail while the store runs.
pub(super) fn rebuild_index(inner: &Inner) -> Result<(), OpenError> {
    let trail = {
        let core = inner.shared.lock();
        Mark {
            seq: core.ledger.last_seq,
            head: core.head,
        }
    };
    let opening = Opening {
        disk: inner.disk(),
        root: &inner.root,
        trail,
        open_limit: inner.options.index_open_limit,
        cache_bytes: inner.options.index_cache_bytes,
    };
    // Frames behind the last durable one may be cut again: they come through the applier, if at all.
    inner.index.rebuild(&opening, trail.seq, &|take| {
        replay(inner.disk(), &inner.root, &mut |change| {
            if change.seq <= trail.seq {
                take(change)
            } else {
                Ok(())
            }
        })
    })
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
