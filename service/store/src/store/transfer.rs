//! Arrays on their way in.

use std::sync::{Arc, Mutex, MutexGuard, PoisonError};

use tarehouse_assay::submission::Digest;

use super::{Inner, Store};
use crate::error::StoreError;
use crate::event::{ArrayStored, Event};
use crate::id::SubmissionId;
use crate::keylock;
use crate::ledger::Entry;
use crate::state::State;
use crate::upload::Upload;
use crate::view::{Actor, DeclaredArray, ObjectRef};

/// How far an array has come.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct ArrayStatus {
    /// Bytes that are durable; the next part starts here.
    pub committed_bytes: u64,
    /// Bytes declared.
    pub declared_bytes: u64,
    /// Whether the array is whole and stored.
    pub stored: bool,
}

impl Store {
    /// Appends a part at `offset`, which must be where the last one ended; returns where the next one starts. The part
    /// is durable only after [`Store::array_status`] or [`Store::finish_array`].
    ///
    /// # Errors
    /// [`StoreError::WrongOffset`], [`StoreError::TooLong`], [`StoreError::NotADraft`], [`StoreError::AlreadyStored`],
    /// [`StoreError::NoSuchArray`], [`StoreError::NotFound`], and what the disk says.
    pub fn append_array_part(
        &self,
        id: SubmissionId,
        name: &str,
        offset: u64,
        bytes: &[u8],
    ) -> Result<u64, StoreError> {
        let inner = &self.inner;
        inner.writable()?;
        let declared = inner.expected(id, name)?;
        let upload = inner.upload(id, name)?;
        let mut upload = hold(&upload);
        // It may have been finished while this call waited.
        inner.expected(id, name)?;
        alive(&upload, id, name)?;
        let end = offset.saturating_add(bytes.len() as u64);
        if offset != upload.length() {
            return Err(StoreError::WrongOffset {
                name: name.to_owned(),
                offset,
                expected: upload.length(),
            });
        }
        if end > declared.size {
            return Err(StoreError::TooLong {
                name: name.to_owned(),
                declared: declared.size,
                end,
            });
        }
        upload
            .append(bytes)
            .map_err(|error| StoreError::io("writing an array", error))?;
        Ok(end)
    }

    /// How far an array has come; what has arrived is made durable first.
    ///
    /// # Errors
    /// [`StoreError::NoSuchArray`], [`StoreError::NotFound`], and what the disk says.
    pub fn array_status(&self, id: SubmissionId, name: &str) -> Result<ArrayStatus, StoreError> {
        let inner = &self.inner;
        let (entry, declared, stored) = inner.declared(id, name)?;
        let status = |committed_bytes, stored| ArrayStatus {
            committed_bytes,
            declared_bytes: declared.size,
            stored,
        };
        if stored || entry.state != State::Draft {
            return Ok(status(if stored { declared.size } else { 0 }, stored));
        }
        inner.writable()?;
        let upload = inner.upload(id, name)?;
        let mut upload = hold(&upload);
        if upload.done || upload.adopted {
            let (_, declared, stored) = inner.declared(id, name)?;
            return Ok(status(declared.size, stored));
        }
        let committed = inner.sync_upload(&mut upload)?;
        upload.rest();
        Ok(status(committed, false))
    }

    /// Ends an upload: the client's size and digest must be those declared, and those of what arrived. The array is
    /// durable when this returns. A repeated call is harmless. Content with another digest is dropped.
    ///
    /// # Errors
    /// [`StoreError::TooShort`], [`StoreError::DigestMismatch`], [`StoreError::NotADraft`],
    /// [`StoreError::NoSuchArray`], [`StoreError::NotFound`], and what the disk says.
    pub fn finish_array(
        &self,
        actor: &Actor,
        id: SubmissionId,
        name: &str,
        size: u64,
        digest: &Digest,
    ) -> Result<ObjectRef, StoreError> {
        let inner = &self.inner;
        inner.writable()?;
        let _held = inner.keys.take(vec![keylock::submission(id)]);
        let (entry, declared, stored) = inner.declared(id, name)?;
        let object = ObjectRef {
            digest: declared.digest,
            size: declared.size,
        };
        if *digest != declared.digest || size != declared.size {
            // The end of the stream speaks of another file than the manifest.
            return Err(StoreError::DigestMismatch {
                name: name.to_owned(),
            });
        }
        if stored {
            return Ok(object);
        }
        if entry.state != State::Draft {
            return Err(StoreError::NotADraft {
                id,
                state: entry.state,
            });
        }
        let upload = inner.upload(id, name)?;
        let mut upload = hold(&upload);
        if !upload.adopted {
            inner.promote(&mut upload, &declared)?;
        }
        inner.commit(
            actor,
            Event::ArrayStored(ArrayStored {
                id,
                name: name.to_owned(),
                object,
            }),
        )?;
        upload.done = true;
        inner.uploads.forget(id, name);
        Ok(object)
    }

    /// Drops what has arrived of an array, so that it can be sent from the start.
    ///
    /// # Errors
    /// As [`Store::append_array_part`].
    pub fn restart_array(&self, id: SubmissionId, name: &str) -> Result<(), StoreError> {
        let inner = &self.inner;
        inner.writable()?;
        inner.expected(id, name)?;
        let upload = inner.upload(id, name)?;
        let mut upload = hold(&upload);
        alive(&upload, id, name)?;
        upload
            .discard()
            .map_err(|error| StoreError::io("dropping a partial array", error))
    }
}

fn hold(upload: &Arc<Mutex<Upload>>) -> MutexGuard<'_, Upload> {
    upload.lock().unwrap_or_else(PoisonError::into_inner)
}

/// Fails if an upload is over.
fn alive(upload: &Upload, id: SubmissionId, name: &str) -> Result<(), StoreError> {
    if upload.done || upload.adopted {
        return Err(StoreError::AlreadyStored {
            id,
            name: name.to_owned(),
        });
    }
    Ok(())
}

impl Inner {
    /// A declared array of a submission, and whether it is stored.
    fn declared(
        &self,
        id: SubmissionId,
        name: &str,
    ) -> Result<(Entry, DeclaredArray, bool), StoreError> {
        let entry = self.entry(id)?;
        let found = entry.arrays.iter().find(|(array, _)| array.name == name);
        let Some((declared, stored)) = found.cloned() else {
            return Err(StoreError::NoSuchArray {
                id,
                name: name.to_owned(),
            });
        };
        Ok((entry, declared, stored))
    }

    /// A declared array that may still be sent.
    fn expected(&self, id: SubmissionId, name: &str) -> Result<DeclaredArray, StoreError> {
        let (entry, declared, stored) = self.declared(id, name)?;
        if entry.state != State::Draft {
            return Err(StoreError::NotADraft {
                id,
                state: entry.state,
            });
        }
        if stored {
            return Err(StoreError::AlreadyStored {
                id,
                name: name.to_owned(),
            });
        }
        Ok(declared)
    }

    fn upload(&self, id: SubmissionId, name: &str) -> Result<Arc<Mutex<Upload>>, StoreError> {
        self.uploads
            .get(id, name)
            .map_err(|error| StoreError::io("opening a partial array", error))
    }

    /// Compares what arrived with what was declared and makes it an object.
    fn promote(&self, upload: &mut Upload, declared: &DeclaredArray) -> Result<(), StoreError> {
        let name = || declared.name.clone();
        if upload.length() < declared.size {
            return Err(StoreError::TooShort {
                name: name(),
                declared: declared.size,
                received: upload.length(),
            });
        }
        let reading = |error| StoreError::io("reading a partial array", error);
        upload.settle().map_err(reading)?;
        self.sync_upload(upload)?;
        if upload.length() > declared.size || upload.digest().map_err(reading)? != declared.digest {
            upload
                .discard()
                .map_err(|error| StoreError::io("dropping a partial array", error))?;
            return Err(StoreError::DigestMismatch { name: name() });
        }
        self.objects
            .adopt(upload.path(), &declared.digest)
            .map_err(|error| self.refused(error))?;
        upload.adopted = true;
        Ok(())
    }

    /// Makes what arrived durable. After a failure nobody knows what of it is on the disk, so all of it is dropped: a
    /// later sync, even in a new process, might succeed without writing it.
    fn sync_upload(&self, upload: &mut Upload) -> Result<u64, StoreError> {
        upload.sync().map_err(|error| {
            let _ = upload.discard();
            self.poisoned_by("syncing an array", &error)
        })
    }

    /// Drops a partial upload for good; what cannot be removed now is removed at the next start.
    pub(super) fn drop_upload(&self, id: SubmissionId, name: &str) {
        let Ok(upload) = self.uploads.get(id, name) else {
            return;
        };
        let mut upload = hold(&upload);
        if !upload.adopted {
            let _ = upload.discard();
        }
        upload.done = true;
        self.uploads.forget(id, name);
    }
}
