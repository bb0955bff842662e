//! Locks by name, held from a decision until it is durable.
//!
//! All names of one call are taken at once, so two calls cannot wait for each other in a circle. Whoever takes a second
//! set while holding one may do so only for names whose holders never wait for more.

use std::collections::HashSet;
use std::sync::{Condvar, Mutex, PoisonError};

use crate::id::{SubmissionId, hex};

/// The set of names that are held.
#[derive(Debug, Default)]
pub(crate) struct KeyLocks {
    held: Mutex<HashSet<String>>,
    freed: Condvar,
}

/// Names held until this is dropped.
#[derive(Debug)]
pub(crate) struct Holding<'a> {
    locks: &'a KeyLocks,
    names: Vec<String>,
}

impl KeyLocks {
    /// Waits until none of the names is held, and takes them all.
    pub(crate) fn take(&self, mut names: Vec<String>) -> Holding<'_> {
        names.sort();
        names.dedup();
        let mut held = self.held.lock().unwrap_or_else(PoisonError::into_inner);
        while names.iter().any(|name| held.contains(name)) {
            held = self
                .freed
                .wait(held)
                .unwrap_or_else(PoisonError::into_inner);
        }
        held.extend(names.iter().cloned());
        drop(held);
        Holding { locks: self, names }
    }
}

impl Drop for Holding<'_> {
    fn drop(&mut self) {
        let mut held = self
            .locks
            .held
            .lock()
            .unwrap_or_else(PoisonError::into_inner);
        for name in &self.names {
            held.remove(name);
        }
        drop(held);
        self.locks.freed.notify_all();
    }
}

/// Lock name of a submission.
pub(crate) fn submission(id: SubmissionId) -> String {
    format!("submission {id}")
}

/// Lock name of a request id.
pub(crate) fn request(contributor: &str, request_id: &str) -> String {
    format!("request {contributor}\0{request_id}")
}

/// Lock name of a package.
pub(crate) fn package(contributor: &str, digest: &[u8; 32]) -> String {
    format!("package {contributor}\0{}", hex(digest))
}

/// Lock name of a contributor key.
pub(crate) fn contributor_key(contributor: &str, key: &str) -> String {
    format!("key {contributor}\0{key}")
}
