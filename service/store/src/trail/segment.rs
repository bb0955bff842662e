//! Segment files: names and headers.
//!
//! ```text
//! magic 8 | format 4 | first seq 8 | previous hash 32 | BLAKE3 of these 32 | frames…
//! ```

use std::io;
use std::path::{Path, PathBuf};

use tarehouse_assay::submission::Digest;

use crate::disk::{self, Disk, DiskFile, OpenMode};

const MAGIC: [u8; 8] = *b"taretrl\n";
const FORMAT: u32 = 1;
const SUFFIX: &str = ".trail";
/// Bytes before the first frame.
pub(crate) const HEADER: usize = 8 + 4 + 8 + 32 + 32;

/// What a segment's header says.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(crate) struct Header {
    pub(crate) first_seq: u64,
    pub(crate) previous: Digest,
}

impl Header {
    pub(crate) fn encode(&self) -> Vec<u8> {
        let mut bytes = Vec::with_capacity(HEADER);
        bytes.extend_from_slice(&MAGIC);
        bytes.extend_from_slice(&FORMAT.to_le_bytes());
        bytes.extend_from_slice(&self.first_seq.to_le_bytes());
        bytes.extend_from_slice(&self.previous);
        let check = blake3::hash(&bytes);
        bytes.extend_from_slice(check.as_bytes());
        bytes
    }

    pub(crate) fn decode(bytes: &[u8]) -> Option<Self> {
        let (body, check) = bytes.get(..HEADER)?.split_at_checked(HEADER - 32)?;
        if blake3::hash(body).as_bytes() != check
            || body.get(..8)? != MAGIC
            || body.get(8..12)? != FORMAT.to_le_bytes()
        {
            return None;
        }
        Some(Self {
            first_seq: u64::from_le_bytes(body.get(12..20)?.try_into().ok()?),
            previous: body.get(20..52)?.try_into().ok()?,
        })
    }
}

pub(crate) fn folder(root: &Path) -> PathBuf {
    root.join("trail")
}

/// File name of the segment that starts with a frame.
pub(crate) fn name(first_seq: u64) -> String {
    format!("{first_seq:020}{SUFFIX}")
}

/// Names of all segments in order.
pub(crate) fn list(disk: &dyn Disk, folder: &Path) -> io::Result<Vec<String>> {
    let names = disk.list(folder)?.into_iter().map(|entry| entry.name);
    Ok(names.filter(|name| name.ends_with(SUFFIX)).collect())
}

/// Makes a segment durable with its header; on failure nothing of it is left, or the error says that this is unknown.
pub(crate) fn create(
    disk: &dyn Disk,
    folder: &Path,
    header: &Header,
) -> Result<Box<dyn DiskFile>, CreateError> {
    let path = folder.join(name(header.first_seq));
    let written = (|| {
        let mut file = disk.open(&path, OpenMode::Fresh)?;
        disk::write_all(file.as_mut(), 0, &header.encode())?;
        Ok(file)
    })();
    match written {
        Ok(mut file) => {
            file.sync().map_err(CreateError::Unknown)?;
            disk.sync_dir(folder).map_err(CreateError::Unknown)?;
            Ok(file)
        }
        Err(error) => {
            if disk.size(&path).map_err(CreateError::Unknown)?.is_some() {
                disk.remove_file(&path).map_err(CreateError::Unknown)?;
                disk.sync_dir(folder).map_err(CreateError::Unknown)?;
            }
            Err(CreateError::Undone(error))
        }
    }
}

/// Why a segment was not made.
#[derive(Debug)]
pub(crate) enum CreateError {
    /// Nothing is left of it.
    Undone(io::Error),
    /// What is on the disk is not known.
    Unknown(io::Error),
}
