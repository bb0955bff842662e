//! Partial uploads: arrays on their way in, resumable over connections and restarts.
//!
//! One file per array. Bytes are hashed as they come; after a restart the hash is taken anew from the file. Nothing
//! here is promised to anyone until it was synced, and nothing is an array until its digest was compared.

use std::collections::HashMap;
use std::io;
use std::path::{Path, PathBuf};
use std::sync::{Arc, Mutex, PoisonError};

use tarehouse_assay::submission::Digest;

use crate::disk::{self, Disk, DiskFile, OpenMode};
use crate::id::SubmissionId;
use crate::limits::COPY_BYTES;

type Key = (SubmissionId, String);

/// All partial uploads.
#[derive(Debug)]
pub(crate) struct Uploads {
    disk: Arc<dyn Disk>,
    folder: PathBuf,
    open: Mutex<HashMap<Key, Arc<Mutex<Upload>>>>,
}

/// One partial upload.
#[derive(Debug)]
pub(crate) struct Upload {
    disk: Arc<dyn Disk>,
    folder: PathBuf,
    path: PathBuf,
    /// The open file; none before the first byte.
    file: Option<Box<dyn DiskFile>>,
    /// Bytes written.
    length: u64,
    /// Bytes known to be durable.
    synced: Option<u64>,
    /// Hash of the first `length` bytes, if it was kept up.
    hasher: Option<blake3::Hasher>,
    /// It was renamed to an object, but the trail does not say so yet.
    pub(crate) adopted: bool,
    /// It is over; a handle that still points here is stale.
    pub(crate) done: bool,
}

/// Name of a partial file.
fn file_name(id: SubmissionId, name: &str) -> String {
    format!("{id}.{name}")
}

/// Submission and array of a partial file.
pub(crate) fn parse_file_name(text: &str) -> Option<(SubmissionId, &str)> {
    let (id, name) = text.split_once('.')?;
    Some((id.parse().ok()?, name))
}

impl Uploads {
    pub(crate) fn new(disk: Arc<dyn Disk>, root: &Path) -> Self {
        Self {
            disk,
            folder: folder(root),
            open: Mutex::default(),
        }
    }

    /// The upload of an array, picked up where it was left.
    pub(crate) fn get(&self, id: SubmissionId, name: &str) -> io::Result<Arc<Mutex<Upload>>> {
        let mut open = self.open.lock().unwrap_or_else(PoisonError::into_inner);
        if let Some(upload) = open.get(&(id, name.to_owned())) {
            return Ok(Arc::clone(upload));
        }
        let path = self.folder.join(file_name(id, name));
        let length = self.disk.size(&path)?.unwrap_or(0);
        let upload = Arc::new(Mutex::new(Upload {
            disk: Arc::clone(&self.disk),
            folder: self.folder.clone(),
            path,
            file: None,
            length,
            synced: None,
            hasher: (length == 0).then(blake3::Hasher::new),
            adopted: false,
            done: false,
        }));
        open.insert((id, name.to_owned()), Arc::clone(&upload));
        Ok(upload)
    }

    /// Forgets an upload, whose file is gone.
    pub(crate) fn forget(&self, id: SubmissionId, name: &str) {
        self.open
            .lock()
            .unwrap_or_else(PoisonError::into_inner)
            .remove(&(id, name.to_owned()));
    }
}

pub(crate) fn folder(root: &Path) -> PathBuf {
    root.join("partial")
}

impl Upload {
    /// Bytes written so far.
    pub(crate) fn length(&self) -> u64 {
        self.length
    }

    /// Where it is.
    pub(crate) fn path(&self) -> &Path {
        &self.path
    }

    fn file(&mut self) -> io::Result<&mut Box<dyn DiskFile>> {
        if self.file.is_none() {
            self.file = Some(self.disk.open(&self.path, OpenMode::Keep)?);
        }
        self.file
            .as_mut()
            .ok_or_else(|| io::Error::other("the file was not kept open"))
    }

    /// Appends bytes; on failure the file is cut back.
    pub(crate) fn append(&mut self, bytes: &[u8]) -> io::Result<()> {
        let length = self.length;
        let file = self.file()?;
        if let Err(error) = disk::write_all(file.as_mut(), length, bytes) {
            if file.set_len(length).is_err() {
                // What the file holds is not known now: take its hash anew before it counts.
                self.hasher = None;
            }
            return Err(error);
        }
        if let Some(hasher) = &mut self.hasher {
            hasher.update(bytes);
        }
        self.length += bytes.len() as u64;
        Ok(())
    }

    /// Makes what was written durable; returns its length.
    pub(crate) fn sync(&mut self) -> io::Result<u64> {
        if self.length == 0 && self.file.is_none() {
            return Ok(0);
        }
        let length = self.length;
        if self.synced != Some(length) {
            let first = self.synced.is_none();
            self.file()?.sync()?;
            if first {
                self.disk.sync_dir(&self.folder)?;
            }
            self.synced = Some(length);
        }
        Ok(length)
    }

    /// Lets go of the open file, so that an abandoned upload holds none.
    pub(crate) fn rest(&mut self) {
        self.file = None;
    }

    /// BLAKE3 of what was written; from the file if it was not kept up.
    pub(crate) fn digest(&mut self) -> io::Result<Digest> {
        if self.hasher.is_none() {
            let mut hasher = blake3::Hasher::new();
            let mut buffer = vec![0; COPY_BYTES];
            let mut offset = 0;
            let length = self.length;
            let file = self.file()?;
            while offset < length {
                let count = disk::read_full(file.as_mut(), offset, &mut buffer)?;
                let part = buffer.get(..count).unwrap_or_default();
                let left = usize::try_from(length - offset).unwrap_or(usize::MAX);
                hasher.update(part.get(..left.min(count)).unwrap_or_default());
                if count == 0 {
                    return Err(io::ErrorKind::UnexpectedEof.into());
                }
                offset += count as u64;
            }
            self.hasher = Some(hasher);
        }
        let hasher = self.hasher.as_ref().map(blake3::Hasher::finalize);
        hasher
            .map(|hash| *hash.as_bytes())
            .ok_or_else(|| io::Error::other("the hash was not kept"))
    }

    /// Makes sure that the file is exactly as long as what was written, and exists even if that is nothing.
    pub(crate) fn settle(&mut self) -> io::Result<()> {
        let length = self.length;
        let file = self.file()?;
        if file.length()? != length {
            file.set_len(length)?;
            self.synced = None;
        }
        Ok(())
    }

    /// Drops everything received.
    pub(crate) fn discard(&mut self) -> io::Result<()> {
        self.file = None;
        self.synced = None;
        if self.disk.size(&self.path)?.is_some() {
            self.disk.remove_file(&self.path)?;
        }
        self.length = 0;
        self.hasher = Some(blake3::Hasher::new());
        Ok(())
    }
}
