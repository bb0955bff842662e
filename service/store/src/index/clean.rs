//! The clean mark: written when the index was closed in good order, removed before it is opened again.
//!
//! It holds the digest of every file of the index. The database notices some damage by panicking and some not at all,
//! so not a byte of it is trusted that is not the byte that was left.

use std::io;
use std::path::{Path, PathBuf};

use prost::Message;

use crate::disk::{self, Disk, OpenMode};
use crate::limits::COPY_BYTES;
use crate::trail::anchor::Mark;

const MARK_BYTES_MAX: u64 = 16 << 20;

#[derive(Clone, PartialEq, Eq, Message)]
struct FileWire {
    #[prost(string, tag = "1")]
    name: String,
    #[prost(bytes = "vec", tag = "2")]
    digest: Vec<u8>,
}

#[derive(Clone, PartialEq, Eq, Message)]
struct MarkWire {
    #[prost(uint64, tag = "1")]
    generation: u64,
    #[prost(uint64, tag = "2")]
    seq: u64,
    #[prost(bytes = "vec", tag = "3")]
    head: Vec<u8>,
    #[prost(message, repeated, tag = "4")]
    files: Vec<FileWire>,
    /// Shape of the rows; an index of another shape is built anew.
    #[prost(uint32, tag = "5")]
    shape: u32,
}

/// Shape of keys and rows in the index. Raise it whenever they change.
const SHAPE: u32 = 2;

/// A clean mark that was read.
#[derive(Debug, Clone, PartialEq, Eq)]
pub(crate) struct CleanMark {
    pub(crate) generation: u64,
    pub(crate) mark: Mark,
    files: Vec<FileWire>,
}

fn path(folder: &Path) -> PathBuf {
    folder.join("clean")
}

/// Reads and removes the clean mark; none if there is none or it is damaged.
pub(crate) fn take(disk: &dyn Disk, folder: &Path) -> io::Result<Option<CleanMark>> {
    let path = path(folder);
    if disk.size(&path)?.is_none() {
        return Ok(None);
    }
    let bytes = disk::read_file(disk, &path, MARK_BYTES_MAX)?;
    disk.remove_file(&path)?;
    disk.sync_dir(folder)?;
    Ok(decode(&bytes))
}

fn decode(bytes: &[u8]) -> Option<CleanMark> {
    let (check, body) = bytes.split_at_checked(32)?;
    if blake3::hash(body).as_bytes() != check {
        return None;
    }
    let wire = MarkWire::decode(body).ok()?;
    if wire.shape != SHAPE {
        return None;
    }
    Some(CleanMark {
        generation: wire.generation,
        mark: Mark {
            seq: wire.seq,
            head: wire.head.try_into().ok()?,
        },
        files: wire.files,
    })
}

/// Syncs every file of a closed generation and writes the mark.
pub(crate) fn write(
    disk: &dyn Disk,
    folder: &Path,
    generation_path: &Path,
    generation: u64,
    mark: Mark,
) -> io::Result<()> {
    let files = digests(disk, generation_path, true)?;
    disk.sync_dir(folder)?;
    let body = MarkWire {
        generation,
        seq: mark.seq,
        head: mark.head.to_vec(),
        files,
        shape: SHAPE,
    }
    .encode_to_vec();
    let mut bytes = blake3::hash(&body).as_bytes().to_vec();
    bytes.extend_from_slice(&body);
    let temp = folder.join("clean.new");
    let mut file = disk.open(&temp, OpenMode::Fresh)?;
    disk::write_all(file.as_mut(), 0, &bytes)?;
    file.sync()?;
    disk.rename(&temp, &path(folder))?;
    disk.sync_dir(folder)
}

/// Compares a generation with its mark.
pub(crate) fn compare(
    disk: &dyn Disk,
    generation_path: &Path,
    mark: &CleanMark,
) -> Result<(), String> {
    let found = digests(disk, generation_path, false).map_err(|error| error.to_string())?;
    if found == mark.files {
        return Ok(());
    }
    let odd = found
        .iter()
        .find(|file| !mark.files.contains(file))
        .or_else(|| mark.files.iter().find(|file| !found.contains(file)));
    Err(odd.map_or_else(String::new, |file| {
        format!("file {} is not as it was left", file.name)
    }))
}

/// Digests of all files below a folder, by relative name.
fn digests(disk: &dyn Disk, root: &Path, sync: bool) -> io::Result<Vec<FileWire>> {
    let mut files = Vec::new();
    let mut folders = vec![(root.to_path_buf(), String::new())];
    while let Some((folder, prefix)) = folders.pop() {
        for entry in disk.list(&folder)? {
            let path = folder.join(&entry.name);
            let name = format!("{prefix}{}", entry.name);
            if entry.is_dir {
                folders.push((path, format!("{name}/")));
                continue;
            }
            let mode = if sync { OpenMode::Keep } else { OpenMode::Read };
            let mut file = disk.open(&path, mode)?;
            if sync {
                file.sync()?;
            }
            let mut hasher = blake3::Hasher::new();
            let mut buffer = vec![0; COPY_BYTES];
            let mut offset = 0;
            loop {
                let count = disk::read_full(file.as_mut(), offset, &mut buffer)?;
                hasher.update(buffer.get(..count).unwrap_or_default());
                offset += count as u64;
                if count < buffer.len() {
                    break;
                }
            }
            let digest = hasher.finalize().as_bytes().to_vec();
            files.push(FileWire { name, digest });
        }
        if sync {
            disk.sync_dir(&folder)?;
        }
    }
    Ok(files)
}
