//! Reading: submissions, arrays, reports, records and lists.
//!
//! Every read sees all changes that were answered before it began: it waits, within a bound, for the index to get there.

use tarehouse_assay::submission::Digest;

use super::{Inner, Store};
use crate::error::{OpenError, StoreError};
use crate::id::SubmissionId;
use crate::index::{keys, query};
use crate::object::ObjectReader;
use crate::page;
use crate::view::{
    CompoundView, ObjectRef, Page, PageRequest, RecordFilter, RecordView, SubmissionFilter,
    SubmissionView,
};

impl Store {
    /// A submission with its history.
    ///
    /// # Errors
    /// [`StoreError::NotFound`], [`StoreError::IndexUnavailable`].
    pub fn get_submission(&self, id: SubmissionId) -> Result<SubmissionView, StoreError> {
        self.inner
            .ask(|db| query::submission(db, id))?
            .ok_or(StoreError::NotFound(id))
    }

    /// Submissions, newest first.
    ///
    /// # Errors
    /// [`StoreError::PageToken`], [`StoreError::PageTokenFilter`], [`StoreError::IndexUnavailable`].
    pub fn list_submissions(
        &self,
        filter: &SubmissionFilter,
        request: &PageRequest,
    ) -> Result<Page<SubmissionView>, StoreError> {
        let window = page::window("submissions", filter, request)?;
        let slice = self
            .inner
            .ask(|db| query::submissions(db, filter, &window))?;
        Ok(page::page("submissions", filter, slice))
    }

    /// Bytes of `package.toml`, verified.
    ///
    /// # Errors
    /// [`StoreError::NotFound`], [`StoreError::ObjectDamaged`], and what the disk says.
    pub fn read_manifest(&self, id: SubmissionId) -> Result<Vec<u8>, StoreError> {
        let entry = self.inner.entry(id)?;
        self.inner.objects.read(entry.manifest)
    }

    /// An array as contributed, verified.
    ///
    /// # Errors
    /// [`StoreError::NotThereYet`], [`StoreError::NoSuchArray`], [`StoreError::NotFound`],
    /// [`StoreError::ObjectDamaged`], and what the disk says.
    pub fn read_array(&self, id: SubmissionId, name: &str) -> Result<Vec<u8>, StoreError> {
        self.inner.objects.read(self.inner.stored_array(id, name)?)
    }

    /// An array as contributed, to be read in parts.
    ///
    /// # Errors
    /// As [`Store::read_array`].
    pub fn open_array(&self, id: SubmissionId, name: &str) -> Result<ObjectReader, StoreError> {
        self.inner.objects.open(self.inner.stored_array(id, name)?)
    }

    /// The encoded report, verified.
    ///
    /// # Errors
    /// [`StoreError::NotThereYet`], [`StoreError::NotFound`], [`StoreError::ObjectDamaged`], and what the disk says.
    pub fn read_report(&self, id: SubmissionId) -> Result<Vec<u8>, StoreError> {
        let report = self.inner.entry(id)?.report;
        let report = report.ok_or_else(|| not_there(id, "the report"))?;
        self.inner.objects.read(report)
    }

    /// The projected constants, to be read in parts.
    ///
    /// # Errors
    /// As [`Store::read_report`].
    pub fn open_projected(&self, id: SubmissionId) -> Result<ObjectReader, StoreError> {
        let projected = self.inner.entry(id)?.projected;
        let projected = projected.ok_or_else(|| not_there(id, "the projected array"))?;
        self.inner.objects.open(projected)
    }

    /// A record, retired or not.
    ///
    /// # Errors
    /// [`StoreError::NotFound`], [`StoreError::IndexUnavailable`].
    pub fn get_record(&self, id: SubmissionId) -> Result<RecordView, StoreError> {
        self.inner
            .ask(|db| query::record(db, id))?
            .ok_or(StoreError::NotFound(id))
    }

    /// Records in the order that the filter asks for. The order by lattice energy needs a compound.
    ///
    /// # Errors
    /// [`StoreError::PageToken`], [`StoreError::PageTokenFilter`], [`StoreError::IndexUnavailable`].
    pub fn list_records(
        &self,
        filter: &RecordFilter,
        request: &PageRequest,
    ) -> Result<Page<RecordView>, StoreError> {
        let window = page::window("records", filter, request)?;
        let slice = self.inner.ask(|db| query::records(db, filter, &window))?;
        Ok(page::page("records", filter, slice))
    }

    /// Compounds with at least one record that is not retired, by name.
    ///
    /// # Errors
    /// [`StoreError::PageToken`], [`StoreError::PageTokenFilter`], [`StoreError::IndexUnavailable`].
    pub fn list_compounds(&self, request: &PageRequest) -> Result<Page<CompoundView>, StoreError> {
        let window = page::window("compounds", &(), request)?;
        let slice = self.inner.ask(|db| query::compounds(db, &window))?;
        Ok(page::page("compounds", &(), slice))
    }

    /// All records of a compound that are not retired, newest first.
    ///
    /// # Errors
    /// [`StoreError::IndexUnavailable`].
    pub fn records_of_compound(&self, compound: &str) -> Result<Vec<RecordView>, StoreError> {
        let filter = RecordFilter {
            compound: Some(keys::compound_key(compound)),
            ..RecordFilter::default()
        };
        let mut window = query::Window {
            after: None,
            size: crate::limits::PAGE_SIZE_MAX,
        };
        let mut records = Vec::new();
        loop {
            let slice = self.inner.ask(|db| query::records(db, &filter, &window))?;
            records.extend(slice.entries);
            window.after = slice.last_key;
            if window.after.is_none() {
                return Ok(records);
            }
        }
    }

    /// Builds the index anew from the trail, for when it has failed while the trail goes on (a full disk does that).
    /// Reads wait meanwhile.
    ///
    /// # Errors
    /// [`OpenError::Index`], or what is wrong with the trail; the index is as before.
    pub fn rebuild_index(&self) -> Result<(), OpenError> {
        super::open::rebuild_index(&self.inner)
    }

    /// One digest over everything in the index; two indexes with the same content have the same.
    ///
    /// # Errors
    /// [`StoreError::IndexUnavailable`].
    pub fn index_fingerprint(&self) -> Result<Digest, StoreError> {
        self.inner.ask(query::fingerprint)
    }

    /// The digest that [`Store::index_fingerprint`] has if the index says what the trail says: an index is built from
    /// the trail beside the real one and thrown away. Changes must not run meanwhile.
    ///
    /// # Errors
    /// [`OpenError::Index`], or what is wrong with the trail.
    pub fn rebuilt_index_fingerprint(&self) -> Result<Digest, OpenError> {
        super::open::fresh_fingerprint(&self.inner)
    }
}

fn not_there(id: SubmissionId, what: &str) -> StoreError {
    StoreError::NotThereYet {
        id,
        what: what.to_owned(),
    }
}

impl Inner {
    /// Asks the index once it knows everything that was answered for.
    fn ask<T>(
        &self,
        question: impl FnOnce(&sled::Db) -> Result<T, String>,
    ) -> Result<T, StoreError> {
        let seq = self.shared.lock().ledger.last_seq;
        let core = &self.index.core;
        core.wait_for(seq, self.options.read_wait)?;
        core.ask(question)
    }

    fn stored_array(&self, id: SubmissionId, name: &str) -> Result<ObjectRef, StoreError> {
        let entry = self.entry(id)?;
        let found = entry.arrays.iter().find(|(array, _)| array.name == name);
        match found {
            None => Err(StoreError::NoSuchArray {
                id,
                name: name.to_owned(),
            }),
            Some((_, false)) => Err(not_there(id, &format!("array \"{name}\""))),
            Some((array, true)) => Ok(ObjectRef {
                digest: array.digest,
                size: array.size,
            }),
        }
    }
}
