//! Objects: files named by the BLAKE3 of their content.
//!
//! Written under a temporary name, synced, renamed, and the folder synced; so an object that has its name is whole.
//! Every full read is verified.

use std::collections::HashSet;
use std::io;
use std::path::{Path, PathBuf};
use std::sync::atomic::{AtomicU64, Ordering};
use std::sync::{Arc, Mutex, PoisonError};

use tarehouse_assay::submission::Digest;

use crate::disk::{self, Disk, DiskFile, OpenMode};
use crate::error::StoreError;
use crate::id::hex;
use crate::limits::COPY_BYTES;
use crate::view::ObjectRef;

/// The object folder.
#[derive(Debug)]
pub(crate) struct Objects {
    disk: Arc<dyn Disk>,
    folder: PathBuf,
    temp: PathBuf,
    counter: AtomicU64,
    /// Sub-folders known to be durable.
    known: Mutex<HashSet<u8>>,
}

/// Why an object was not stored.
#[derive(Debug)]
pub(crate) enum PutError {
    /// The file system refused; nothing is left.
    Refused(&'static str, io::Error),
    /// A sync failed.
    Sync(&'static str, io::Error),
}

impl Objects {
    pub(crate) fn new(disk: Arc<dyn Disk>, root: &Path) -> Self {
        Self {
            disk,
            folder: root.join("objects"),
            temp: root.join("temp"),
            counter: AtomicU64::new(0),
            known: Mutex::default(),
        }
    }

    fn folder_of(&self, digest: &Digest) -> PathBuf {
        let [first, ..] = digest;
        self.folder.join(format!("{first:02x}"))
    }

    fn path(&self, digest: &Digest) -> PathBuf {
        self.folder_of(digest).join(hex(digest))
    }

    /// Stores bytes durably.
    pub(crate) fn put(&self, bytes: &[u8]) -> Result<ObjectRef, PutError> {
        let object = ObjectRef {
            digest: *blake3::hash(bytes).as_bytes(),
            size: bytes.len() as u64,
        };
        let number = self.counter.fetch_add(1, Ordering::Relaxed);
        let temp = self.temp.join(format!("{number:08}"));
        let stored = self.write_temp(&temp, bytes).and_then(|()| {
            self.adopt(&temp, &object.digest)?;
            Ok(object)
        });
        if stored.is_err() {
            // Best effort: the start-up clears what is left.
            let _ = self.disk.remove_file(&temp);
        }
        stored
    }

    fn write_temp(&self, temp: &Path, bytes: &[u8]) -> Result<(), PutError> {
        let refused = |error| PutError::Refused("writing an object", error);
        let mut file = self.disk.open(temp, OpenMode::Fresh).map_err(refused)?;
        disk::write_all(file.as_mut(), 0, bytes).map_err(refused)?;
        file.sync()
            .map_err(|error| PutError::Sync("syncing an object", error))
    }

    /// Gives a synced file, whose content was hashed, its final name.
    pub(crate) fn adopt(&self, from: &Path, digest: &Digest) -> Result<(), PutError> {
        let folder = self.folder_of(digest);
        let [first, ..] = *digest;
        let known = |set: &Mutex<HashSet<u8>>| {
            set.lock()
                .unwrap_or_else(PoisonError::into_inner)
                .contains(&first)
        };
        if !known(&self.known) {
            self.disk
                .create_dir(&folder)
                .map_err(|error| PutError::Refused("making an object folder", error))?;
            self.disk
                .sync_dir(&self.folder)
                .map_err(|error| PutError::Sync("syncing the object folder", error))?;
            self.known
                .lock()
                .unwrap_or_else(PoisonError::into_inner)
                .insert(first);
        }
        self.disk
            .rename(from, &self.path(digest))
            .map_err(|error| PutError::Refused("naming an object", error))?;
        self.disk
            .sync_dir(&folder)
            .map_err(|error| PutError::Sync("syncing an object folder", error))
    }

    /// Whether an object is there with the right size; else what is wrong.
    pub(crate) fn check_size(&self, object: &ObjectRef) -> io::Result<Result<(), String>> {
        Ok(match self.disk.size(&self.path(&object.digest))? {
            Some(size) if size == object.size => Ok(()),
            Some(size) => Err(format!(
                "{}: {size} bytes instead of {}",
                hex(&object.digest),
                object.size
            )),
            None => Err(format!("{}: missing", hex(&object.digest))),
        })
    }

    /// Opens an object for reading in parts.
    pub(crate) fn open(&self, object: ObjectRef) -> Result<ObjectReader, StoreError> {
        let damaged = |detail: &str| StoreError::ObjectDamaged {
            digest: hex(&object.digest),
            detail: detail.to_owned(),
        };
        let opened = self.disk.open(&self.path(&object.digest), OpenMode::Read);
        let mut file = match opened {
            Ok(file) => file,
            Err(error) if error.kind() == io::ErrorKind::NotFound => {
                return Err(damaged("the file is missing"));
            }
            Err(error) => return Err(StoreError::io("opening an object", error)),
        };
        let length = file
            .length()
            .map_err(|error| StoreError::io("opening an object", error))?;
        if length != object.size {
            return Err(damaged("its length is wrong"));
        }
        Ok(ObjectReader {
            file,
            object,
            offset: 0,
            hasher: blake3::Hasher::new(),
        })
    }

    /// Reads a whole object, verified.
    pub(crate) fn read(&self, object: ObjectRef) -> Result<Vec<u8>, StoreError> {
        let mut reader = self.open(object)?;
        let mut bytes = Vec::new();
        while let Some(part) = reader.next_part(COPY_BYTES)? {
            bytes.extend_from_slice(&part);
        }
        Ok(bytes)
    }
}

/// Reads a stored object part by part. The last part is handed out only if the whole content has its digest, so who
/// has received all bytes has received the right ones.
#[derive(Debug)]
pub struct ObjectReader {
    file: Box<dyn DiskFile>,
    object: ObjectRef,
    offset: u64,
    hasher: blake3::Hasher,
}

impl ObjectReader {
    /// What is read.
    pub fn object(&self) -> ObjectRef {
        self.object
    }

    /// The next part of at most `bytes_max` bytes; none at the end.
    ///
    /// # Errors
    /// [`StoreError::ObjectDamaged`] instead of the last part, if the content is not what was stored; or that the file
    /// system refused.
    pub fn next_part(&mut self, bytes_max: usize) -> Result<Option<Vec<u8>>, StoreError> {
        let left = self.object.size.saturating_sub(self.offset);
        if left == 0 && self.offset > 0 {
            return Ok(None);
        }
        let wanted = usize::try_from(left)
            .unwrap_or(usize::MAX)
            .min(bytes_max.max(1));
        let mut part = vec![0; wanted];
        let count = disk::read_full(self.file.as_mut(), self.offset, &mut part)
            .map_err(|error| StoreError::io("reading an object", error))?;
        self.hasher.update(&part);
        self.offset += wanted as u64;
        let ended = self.offset >= self.object.size;
        if count < wanted || (ended && self.hasher.finalize().as_bytes() != &self.object.digest) {
            return Err(StoreError::ObjectDamaged {
                digest: hex(&self.object.digest),
                detail: "its content does not have its digest".to_owned(),
            });
        }
        Ok(if wanted == 0 { None } else { Some(part) })
    }
}
