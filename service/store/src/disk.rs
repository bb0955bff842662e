//! The one door through which this crate touches files.
//!
//! Trail, objects, partial uploads, the anchor and the clean mark go through [`Disk`], so that a test can fail any call
//! or drop whatever was not synced. The only files behind its back are those inside the index folder, which belong to
//! the embedded database and are trusted only after their digests were compared.

use std::fmt::Debug;
use std::fs;
use std::io::{self, Read, Seek, SeekFrom, Write};
use std::path::Path;

/// How a file is opened.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum OpenMode {
    /// Existing, for reading only.
    Read,
    /// For reading and writing; made if missing, kept if there.
    Keep,
    /// For reading and writing; made if missing, emptied if there.
    Fresh,
}

/// One name in a folder.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Entry {
    /// Name without the folder.
    pub name: String,
    /// Whether it is a folder.
    pub is_dir: bool,
    /// Length of a file, bytes.
    pub size: u64,
}

/// A held lock; dropping it lets go.
pub trait Held: Debug + Send + Sync {}

/// Everything the store asks of a file system.
pub trait Disk: Debug + Send + Sync {
    /// Opens a file.
    ///
    /// # Errors
    /// Those of the file system.
    fn open(&self, path: &Path, mode: OpenMode) -> io::Result<Box<dyn DiskFile>>;
    /// Gives a file a new name, replacing what had it.
    ///
    /// # Errors
    /// Those of the file system.
    fn rename(&self, from: &Path, to: &Path) -> io::Result<()>;
    /// Removes a file.
    ///
    /// # Errors
    /// Those of the file system.
    fn remove_file(&self, path: &Path) -> io::Result<()>;
    /// Makes a folder; one that exists is fine.
    ///
    /// # Errors
    /// Those of the file system.
    fn create_dir(&self, path: &Path) -> io::Result<()>;
    /// Removes a folder and everything in it.
    ///
    /// # Errors
    /// Those of the file system.
    fn remove_dir_all(&self, path: &Path) -> io::Result<()>;
    /// Makes the names inside a folder durable.
    ///
    /// # Errors
    /// Those of the file system.
    fn sync_dir(&self, path: &Path) -> io::Result<()>;
    /// Names inside a folder, sorted.
    ///
    /// # Errors
    /// Those of the file system.
    fn list(&self, path: &Path) -> io::Result<Vec<Entry>>;
    /// Length of a file in bytes; none if it does not exist.
    ///
    /// # Errors
    /// Those of the file system.
    fn size(&self, path: &Path) -> io::Result<Option<u64>>;
    /// Takes an exclusive lock on a file, which is made if missing.
    ///
    /// # Errors
    /// `WouldBlock` where another holder has it; else those of the file system.
    fn lock(&self, path: &Path) -> io::Result<Box<dyn Held>>;
}

/// An open file.
pub trait DiskFile: Debug + Send {
    /// Reads at a byte offset; 0 at the end.
    ///
    /// # Errors
    /// Those of the file system.
    fn read_at(&mut self, offset: u64, into: &mut [u8]) -> io::Result<usize>;
    /// Writes at a byte offset, perhaps less than everything.
    ///
    /// # Errors
    /// Those of the file system.
    fn write_at(&mut self, offset: u64, bytes: &[u8]) -> io::Result<usize>;
    /// Makes content and length durable.
    ///
    /// # Errors
    /// Those of the file system.
    fn sync(&mut self) -> io::Result<()>;
    /// Cuts or extends the file.
    ///
    /// # Errors
    /// Those of the file system.
    fn set_len(&mut self, length: u64) -> io::Result<()>;
    /// Length in bytes.
    ///
    /// # Errors
    /// Those of the file system.
    fn length(&mut self) -> io::Result<u64>;
}

/// The real file system.
#[derive(Debug, Clone, Copy, Default)]
pub struct RealDisk;

#[derive(Debug)]
struct RealFile(fs::File);

#[derive(Debug)]
struct RealLock(#[expect(dead_code, reason = "the open file holds the lock")] fs::File);

impl Held for RealLock {}

impl Disk for RealDisk {
    fn open(&self, path: &Path, mode: OpenMode) -> io::Result<Box<dyn DiskFile>> {
        let mut options = fs::OpenOptions::new();
        options.read(true);
        match mode {
            OpenMode::Read => {}
            OpenMode::Keep => {
                options.write(true).create(true).truncate(false);
            }
            OpenMode::Fresh => {
                options.write(true).create(true).truncate(true);
            }
        }
        Ok(Box::new(RealFile(options.open(path)?)))
    }

    fn rename(&self, from: &Path, to: &Path) -> io::Result<()> {
        fs::rename(from, to)
    }

    fn remove_file(&self, path: &Path) -> io::Result<()> {
        fs::remove_file(path)
    }

    fn create_dir(&self, path: &Path) -> io::Result<()> {
        match fs::create_dir(path) {
            Err(error) if error.kind() == io::ErrorKind::AlreadyExists && path.is_dir() => Ok(()),
            other => other,
        }
    }

    fn remove_dir_all(&self, path: &Path) -> io::Result<()> {
        fs::remove_dir_all(path)
    }

    fn sync_dir(&self, path: &Path) -> io::Result<()> {
        fs::File::open(path)?.sync_all()
    }

    fn list(&self, path: &Path) -> io::Result<Vec<Entry>> {
        let mut entries = Vec::new();
        for entry in fs::read_dir(path)? {
            let entry = entry?;
            let about = entry.metadata()?;
            entries.push(Entry {
                name: entry.file_name().to_string_lossy().into_owned(),
                is_dir: about.is_dir(),
                size: about.len(),
            });
        }
        entries.sort_by(|a, b| a.name.cmp(&b.name));
        Ok(entries)
    }

    fn size(&self, path: &Path) -> io::Result<Option<u64>> {
        match fs::metadata(path) {
            Ok(about) => Ok(Some(about.len())),
            Err(error) if error.kind() == io::ErrorKind::NotFound => Ok(None),
            Err(error) => Err(error),
        }
    }

    fn lock(&self, path: &Path) -> io::Result<Box<dyn Held>> {
        let file = fs::OpenOptions::new()
            .read(true)
            .write(true)
            .create(true)
            .truncate(false)
            .open(path)?;
        match file.try_lock() {
            Ok(()) => Ok(Box::new(RealLock(file))),
            Err(fs::TryLockError::WouldBlock) => Err(io::ErrorKind::WouldBlock.into()),
            Err(fs::TryLockError::Error(error)) => Err(error),
        }
    }
}

impl DiskFile for RealFile {
    fn read_at(&mut self, offset: u64, into: &mut [u8]) -> io::Result<usize> {
        self.0.seek(SeekFrom::Start(offset))?;
        self.0.read(into)
    }

    fn write_at(&mut self, offset: u64, bytes: &[u8]) -> io::Result<usize> {
        self.0.seek(SeekFrom::Start(offset))?;
        self.0.write(bytes)
    }

    fn sync(&mut self) -> io::Result<()> {
        self.0.sync_data()
    }

    fn set_len(&mut self, length: u64) -> io::Result<()> {
        self.0.set_len(length)
    }

    fn length(&mut self) -> io::Result<u64> {
        Ok(self.0.metadata()?.len())
    }
}

/// Writes everything at an offset.
pub(crate) fn write_all(
    file: &mut dyn DiskFile,
    mut offset: u64,
    mut bytes: &[u8],
) -> io::Result<()> {
    while !bytes.is_empty() {
        match file.write_at(offset, bytes) {
            Ok(0) => return Err(io::ErrorKind::WriteZero.into()),
            Ok(count) => {
                bytes = bytes.get(count..).unwrap_or_default();
                offset += count as u64;
            }
            Err(error) if error.kind() == io::ErrorKind::Interrupted => {}
            Err(error) => return Err(error),
        }
    }
    Ok(())
}

/// Fills the buffer from an offset as far as the file goes; returns the count.
pub(crate) fn read_full(
    file: &mut dyn DiskFile,
    offset: u64,
    into: &mut [u8],
) -> io::Result<usize> {
    let mut done = 0;
    while done < into.len() {
        let Some(rest) = into.get_mut(done..) else {
            break;
        };
        match file.read_at(offset + done as u64, rest) {
            Ok(0) => break,
            Ok(count) => done += count,
            Err(error) if error.kind() == io::ErrorKind::Interrupted => {}
            Err(error) => return Err(error),
        }
    }
    Ok(done)
}

/// Reads a whole file of at most `limit` bytes.
pub(crate) fn read_file(disk: &dyn Disk, path: &Path, limit: u64) -> io::Result<Vec<u8>> {
    let mut file = disk.open(path, OpenMode::Read)?;
    let length = file.length()?;
    if length > limit {
        return Err(io::Error::new(
            io::ErrorKind::InvalidData,
            format!("{} is longer than {limit} bytes", path.display()),
        ));
    }
    let length = usize::try_from(length).map_err(io::Error::other)?;
    let mut bytes = vec![0; length];
    let count = read_full(file.as_mut(), 0, &mut bytes)?;
    bytes.truncate(count);
    Ok(bytes)
}

/// Whether an error says that space has run out.
pub(crate) fn is_no_space(error: &io::Error) -> bool {
    matches!(
        error.kind(),
        io::ErrorKind::StorageFull | io::ErrorKind::QuotaExceeded
    )
}
