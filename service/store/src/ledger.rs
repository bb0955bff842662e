//! The ledger: in memory, what the decisions need to know, folded from the trail.
//!
//! Decisions never ask the index, which is a cache and may be wrong or late; they ask this, which is the trail itself.
//! It is changed only by durable events, in their order.

use std::collections::{BTreeMap, HashMap};
use std::sync::Arc;

use tarehouse_assay::submission::Digest;

use crate::event::{Created, Event, Examined, RequestBound, Withdrawn};
use crate::id::SubmissionId;
use crate::state::{State, Verb};
use crate::view::{DeclaredArray, ObjectRef};

/// What decisions need to know of one submission.
#[derive(Debug, Clone)]
pub(crate) struct Entry {
    pub(crate) state: State,
    pub(crate) contributor: Arc<str>,
    pub(crate) contributor_key: Option<String>,
    pub(crate) package_digest: Digest,
    pub(crate) manifest: ObjectRef,
    pub(crate) arrays: Vec<(DeclaredArray, bool)>,
    pub(crate) report: Option<ObjectRef>,
    pub(crate) projected: Option<ObjectRef>,
    pub(crate) crashed_attempts: u32,
    pub(crate) created_seq: u64,
    /// Number of the event that last changed it.
    pub(crate) revision: u64,
    /// Place in the queue while queued.
    pub(crate) queue_seq: Option<u64>,
}

/// All submissions.
#[derive(Debug, Default)]
pub(crate) struct Ledger {
    pub(crate) last_seq: u64,
    entries: HashMap<SubmissionId, Entry>,
    requests: HashMap<(Arc<str>, String), SubmissionId>,
    packages: HashMap<(Arc<str>, Digest), SubmissionId>,
    /// Newest accepted submission of each contributor key.
    accepted_keys: HashMap<(Arc<str>, String), SubmissionId>,
    queue: BTreeMap<u64, SubmissionId>,
}

impl Ledger {
    pub(crate) fn entry(&self, id: SubmissionId) -> Option<&Entry> {
        self.entries.get(&id)
    }

    /// Submission that a request opened or found.
    pub(crate) fn by_request(&self, contributor: &str, request_id: &str) -> Option<SubmissionId> {
        self.requests
            .get(&(contributor.into(), request_id.to_owned()))
            .copied()
    }

    /// Submission of a package that was not withdrawn.
    pub(crate) fn by_package(&self, contributor: &str, digest: &Digest) -> Option<SubmissionId> {
        self.packages.get(&(contributor.into(), *digest)).copied()
    }

    /// Accepted submission of a contributor key.
    pub(crate) fn accepted_by_key(&self, contributor: &str, key: &str) -> Option<SubmissionId> {
        self.accepted_keys
            .get(&(contributor.into(), key.to_owned()))
            .copied()
    }

    /// Queued submissions, first come first served.
    pub(crate) fn queue(&self) -> impl Iterator<Item = SubmissionId> + '_ {
        self.queue.values().copied()
    }

    /// Number of queued submissions.
    pub(crate) fn queue_length(&self) -> usize {
        self.queue.len()
    }

    /// Folds in one durable event; returns the submissions whose state it set.
    pub(crate) fn apply(
        &mut self,
        seq: u64,
        event: &Event,
    ) -> Result<Vec<(SubmissionId, State)>, String> {
        if seq != self.last_seq + 1 {
            return Err(format!("frame {seq} after frame {}", self.last_seq));
        }
        let changed = match event {
            Event::Created(event) => self.created(seq, event)?,
            Event::ArrayStored(event) => {
                let entry = self.known(event.id)?;
                let slot = entry
                    .arrays
                    .iter_mut()
                    .find(|(array, _)| array.name == event.name)
                    .ok_or_else(|| format!("array \"{}\" was not declared", event.name))?;
                slot.1 = true;
                Vec::new()
            }
            Event::Sealed(id) => vec![self.step(seq, *id, Verb::Seal)?],
            Event::Crashed(event) => {
                let last = event.state == State::Held;
                let changed = self.step(seq, event.id, Verb::Crash { last })?;
                let entry = self.known(event.id)?;
                entry.crashed_attempts = event.attempt;
                entry.report = event.report.or(entry.report);
                vec![changed]
            }
            Event::Examined(event) => self.examined(seq, event)?,
            Event::Withdrawn(event) => vec![self.withdrawn(seq, event)?],
            Event::Retired(id) => vec![self.step(seq, *id, Verb::Retire)?],
            Event::RequestBound(event) => {
                self.request_bound(event)?;
                Vec::new()
            }
        };
        if event.changes_submission() {
            self.known(event.id())?.revision = seq;
        }
        self.last_seq = seq;
        Ok(changed)
    }

    fn known(&mut self, id: SubmissionId) -> Result<&mut Entry, String> {
        self.entries
            .get_mut(&id)
            .ok_or_else(|| format!("submission {id} was never opened"))
    }

    fn created(&mut self, seq: u64, event: &Created) -> Result<Vec<(SubmissionId, State)>, String> {
        if self.entries.contains_key(&event.id) {
            return Err(format!("submission {} is opened twice", event.id));
        }
        let contributor: Arc<str> = event.contributor.as_str().into();
        self.requests.insert(
            (Arc::clone(&contributor), event.request_id.clone()),
            event.id,
        );
        self.packages
            .insert((Arc::clone(&contributor), event.package_digest), event.id);
        let entry = Entry {
            state: State::Draft,
            contributor,
            contributor_key: event.contributor_key.clone(),
            package_digest: event.package_digest,
            manifest: event.manifest,
            arrays: event.arrays.iter().map(|a| (a.clone(), false)).collect(),
            report: None,
            projected: None,
            crashed_attempts: 0,
            created_seq: seq,
            revision: seq,
            queue_seq: None,
        };
        self.entries.insert(event.id, entry);
        Ok(vec![(event.id, State::Draft)])
    }

    fn withdrawn(&mut self, seq: u64, event: &Withdrawn) -> Result<(SubmissionId, State), String> {
        let changed = self.step(seq, event.id, Verb::Withdraw)?;
        let entry = self.known(event.id)?;
        let key = (Arc::clone(&entry.contributor), entry.package_digest);
        if self.packages.get(&key) == Some(&event.id) {
            self.packages.remove(&key);
        }
        Ok(changed)
    }

    fn request_bound(&mut self, event: &RequestBound) -> Result<(), String> {
        let contributor = Arc::clone(&self.known(event.id)?.contributor);
        let key = (contributor, event.request_id.clone());
        let earlier = self.requests.insert(key, event.id);
        match earlier.filter(|earlier| *earlier != event.id) {
            None => Ok(()),
            Some(earlier) => Err(format!(
                "request id {} stands for submission {earlier} and for {}",
                event.request_id, event.id
            )),
        }
    }

    fn examined(
        &mut self,
        seq: u64,
        event: &Examined,
    ) -> Result<Vec<(SubmissionId, State)>, String> {
        let mut changed = Vec::new();
        if let Some(old) = event.supersedes {
            changed.push(self.step(seq, old, Verb::Retire)?);
        }
        let mut now = self.step(seq, event.id, Verb::Conclude(event.verdict))?;
        if event.superseded_by.is_some() {
            now = self.step(seq, event.id, Verb::Retire)?;
        }
        if now.1 != event.state {
            return Err(format!(
                "the verdict leads to {}, not {}",
                now.1, event.state
            ));
        }
        changed.push(now);
        let entry = self.known(event.id)?;
        entry.report = Some(event.report);
        entry.projected = event.projected;
        if now.1 == State::Accepted
            && let Some(key) = entry.contributor_key.clone()
        {
            let key = (Arc::clone(&entry.contributor), key);
            self.accepted_keys.insert(key, event.id);
        }
        Ok(changed)
    }

    fn step(
        &mut self,
        seq: u64,
        id: SubmissionId,
        verb: Verb,
    ) -> Result<(SubmissionId, State), String> {
        let entry = self.known(id)?;
        let state = entry.state.after(verb).map_err(|error| error.to_string())?;
        entry.state = state;
        entry.revision = seq;
        let left = entry.queue_seq.take();
        if state == State::Queued {
            entry.queue_seq = Some(seq);
        }
        let retired_key = match (state, &entry.contributor_key) {
            (State::Retired, Some(key)) => Some((Arc::clone(&entry.contributor), key.clone())),
            _ => None,
        };
        if let Some(left) = left {
            self.queue.remove(&left);
        }
        if state == State::Queued {
            self.queue.insert(seq, id);
        }
        if let Some(key) = retired_key
            && self.accepted_keys.get(&key) == Some(&id)
        {
            self.accepted_keys.remove(&key);
        }
        Ok((id, state))
    }
}
