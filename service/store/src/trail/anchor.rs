//! The anchor: a small file that says how far the trail reached.
//!
//! A trail cut short at a frame border, or with its last frame damaged, looks like a torn write; only the anchor tells
//! them apart. It has two slots on separate pages, written in turn after the frames they speak of are durable, so
//! one slot is always whole and an anchor is never ahead of the trail. Writing is not synced each time: after a power
//! cut the anchor may lag, which is safe; it is synced when a segment is sealed, at every `SYNC_EVERY`th write, and at close.

use std::io;
use std::path::{Path, PathBuf};

use tarehouse_assay::submission::Digest;

use crate::disk::{self, Disk, DiskFile, OpenMode};

const MAGIC: [u8; 8] = *b"tareanch";
const FORMAT: u32 = 1;
const SLOT_BYTES: usize = 8 + 4 + 8 + 8 + 32 + 32;
const SLOT_STRIDE: u64 = 4096;
const SYNC_EVERY: u64 = 32;

/// How far the trail reached.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(crate) struct Mark {
    pub(crate) seq: u64,
    pub(crate) head: Digest,
}

/// What stands in an anchor file.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(crate) enum Reading {
    /// There is no file.
    Missing,
    /// Neither slot is valid.
    Damaged,
    /// The newer of the valid slots.
    Mark(Mark, u64),
}

/// The open anchor file.
#[derive(Debug)]
pub(crate) struct Anchor {
    file: Box<dyn DiskFile>,
    counter: u64,
}

fn slot(counter: u64, mark: &Mark) -> Vec<u8> {
    let mut bytes = Vec::with_capacity(SLOT_BYTES);
    bytes.extend_from_slice(&MAGIC);
    bytes.extend_from_slice(&FORMAT.to_le_bytes());
    bytes.extend_from_slice(&counter.to_le_bytes());
    bytes.extend_from_slice(&mark.seq.to_le_bytes());
    bytes.extend_from_slice(&mark.head);
    let check = blake3::hash(&bytes);
    bytes.extend_from_slice(check.as_bytes());
    bytes
}

fn read_slot(bytes: &[u8]) -> Option<(u64, Mark)> {
    let (body, check) = bytes.split_at_checked(SLOT_BYTES - 32)?;
    if blake3::hash(body).as_bytes() != check.get(..32)?
        || body.get(..8)? != MAGIC
        || body.get(8..12)? != FORMAT.to_le_bytes()
    {
        return None;
    }
    let number = |at: usize| Some(u64::from_le_bytes(body.get(at..at + 8)?.try_into().ok()?));
    let mark = Mark {
        seq: number(20)?,
        head: body.get(28..60)?.try_into().ok()?,
    };
    Some((number(12)?, mark))
}

pub(crate) fn path(root: &Path) -> PathBuf {
    root.join("anchor")
}

/// Reads the anchor of a store.
pub(crate) fn read(disk: &dyn Disk, root: &Path) -> io::Result<Reading> {
    let path = path(root);
    if disk.size(&path)?.is_none() {
        return Ok(Reading::Missing);
    }
    let mut file = disk.open(&path, OpenMode::Read)?;
    let mut best: Option<(u64, Mark)> = None;
    for index in 0..2 {
        let mut bytes = [0; SLOT_BYTES];
        let count = disk::read_full(file.as_mut(), index * SLOT_STRIDE, &mut bytes)?;
        if let Some(found) = bytes.get(..count).and_then(read_slot) {
            best = match best {
                Some(known) if known.0 > found.0 => Some(known),
                _ => Some(found),
            };
        } else if count == SLOT_BYTES {
            tracing::warn!(slot = index, "a slot of the anchor is damaged");
        }
    }
    Ok(best.map_or(Reading::Damaged, |(counter, mark)| {
        Reading::Mark(mark, counter)
    }))
}

impl Anchor {
    /// Opens the anchor for writing, with both slots set to `mark` and synced.
    pub(crate) fn open(
        disk: &dyn Disk,
        root: &Path,
        counter: u64,
        mark: &Mark,
    ) -> io::Result<Self> {
        let mut file = disk.open(&path(root), OpenMode::Keep)?;
        for step in 1..=2 {
            // Slot by slot, each synced: a power cut in between leaves the other one whole.
            write_slot(file.as_mut(), counter + step, mark)?;
            file.sync()?;
        }
        disk.sync_dir(root)?;
        Ok(Self {
            file,
            counter: counter + 2,
        })
    }

    /// Notes how far the trail is durable; returns whether a sync is due.
    pub(crate) fn advance(&mut self, mark: &Mark) -> io::Result<bool> {
        write_slot(self.file.as_mut(), self.counter + 1, mark)?;
        self.counter += 1;
        Ok(self.counter.is_multiple_of(SYNC_EVERY))
    }

    /// Makes the anchor durable.
    pub(crate) fn sync(&mut self) -> io::Result<()> {
        self.file.sync()
    }
}

fn write_slot(file: &mut dyn DiskFile, counter: u64, mark: &Mark) -> io::Result<()> {
    disk::write_all(file, (counter % 2) * SLOT_STRIDE, &slot(counter, mark))
}
