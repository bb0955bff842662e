//! The queue of examinations, and what comes of them.
//!
//! A lease is volatile: it lives in memory and ends when it is dropped; after a restart whatever was queued is queued
//! still. The first verdict of a submission counts.

use std::sync::{Arc, PoisonError};
use std::time::{Duration, Instant};

use prost::Message;
use tarehouse_assay::report::Verdict;

use super::{Inner, Shared, Store};
use crate::error::{StoreError, Violation};
use crate::event::wire::SummaryWire;
use crate::event::{Crashed, Event, Examined};
use crate::id::SubmissionId;
use crate::keylock;
use crate::ledger::Entry;
use crate::limits::{CRASHED_ATTEMPTS_MAX, REPORT_BYTES_MAX, SUMMARY_BYTES_MAX, TEXT_BYTES_MAX};
use crate::state::{State, Verb};
use crate::view::{Actor, Completion, CrashOutcome, Outcome};

/// The right to examine one submission. Dropping it puts the submission back.
#[derive(Debug)]
pub struct Lease {
    id: SubmissionId,
    number: u64,
    attempt: u32,
    shared: Arc<Shared>,
}

impl Lease {
    /// Submission to examine.
    pub fn id(&self) -> SubmissionId {
        self.id
    }

    /// Which attempt this is, from 1.
    pub fn attempt(&self) -> u32 {
        self.attempt
    }
}

impl Drop for Lease {
    fn drop(&mut self) {
        let mut core = self.shared.lock();
        if core.leases.get(&self.id) == Some(&self.number) {
            core.leases.remove(&self.id);
        }
        drop(core);
        self.shared.queued.notify_all();
    }
}

impl Store {
    /// Takes the submission that has waited longest; none if nothing waits.
    pub fn claim_job(&self) -> Option<Lease> {
        self.wait_for_job(Duration::ZERO)
    }

    /// Takes the submission that has waited longest, waiting for one if need be.
    pub fn wait_for_job(&self, limit: Duration) -> Option<Lease> {
        let deadline = Instant::now() + limit;
        let shared = &self.inner.shared;
        let mut core = shared.lock();
        loop {
            // A closed, damaged or poisoned store could not keep the verdict.
            self.inner.writable().ok()?;
            let free = core.ledger.queue().find(|id| !core.leases.contains_key(id));
            if let Some(id) = free {
                let attempt = core.ledger.entry(id)?.crashed_attempts + 1;
                core.lease_count += 1;
                let number = core.lease_count;
                core.leases.insert(id, number);
                return Some(Lease {
                    id,
                    number,
                    attempt,
                    shared: Arc::clone(shared),
                });
            }
            let left = deadline.saturating_duration_since(Instant::now());
            if left.is_zero() {
                return None;
            }
            core = shared
                .queued
                .wait_timeout(core, left)
                .unwrap_or_else(PoisonError::into_inner)
                .0;
        }
    }

    /// Submissions that wait for or are under examination.
    pub fn queue_length(&self) -> usize {
        self.inner.shared.lock().ledger.queue_length()
    }

    /// Whether somebody is examining a submission just now.
    pub fn is_under_examination(&self, id: SubmissionId) -> bool {
        self.inner.shared.lock().leases.contains_key(&id)
    }

    /// Stores a verdict, its report and, if accepted, the record. If the submission has left the queue meanwhile,
    /// nothing is stored and the answer says so. The actor should name the policy of the examination.
    ///
    /// An accepted submission retires the one accepted before with the same contributor key; if that one is newer, it
    /// is retired itself.
    ///
    /// # Errors
    /// [`StoreError::Invalid`] if something is too long or an acceptance lacks its summary; what the disk says. The
    /// lease stays valid, so that it can be tried again.
    pub fn complete_examination(
        &self,
        actor: &Actor,
        lease: &Lease,
        outcome: Outcome,
    ) -> Result<Completion, StoreError> {
        let inner = &self.inner;
        inner.writable()?;
        let violations = violations(&outcome);
        if !violations.is_empty() {
            return Err(StoreError::Invalid(violations));
        }
        let id = lease.id;
        let entry = inner.entry(id)?;
        let mut names = vec![keylock::submission(id)];
        if let Some(key) = &entry.contributor_key {
            names.push(keylock::contributor_key(&entry.contributor, key));
        }
        let _held = inner.keys.take(names);
        let from = inner.state(id)?;
        let Ok(state) = from.after(Verb::Conclude(outcome.verdict)) else {
            return Ok(Completion {
                state: from,
                counted: false,
            });
        };
        let rival = inner.rival(&entry, outcome.verdict);
        // The older one's holders never wait for anything else, so this cannot go round in a circle.
        let _held_rival = rival.map(|rival| inner.keys.take(vec![keylock::submission(rival)]));
        let rival = rival.and_then(|_| inner.rival(&entry, outcome.verdict));
        let newer = rival.filter(|rival| inner.is_newer(*rival, &entry));
        let state = if newer.is_some() {
            State::Retired
        } else {
            state
        };
        let report = inner.put(&outcome.report)?;
        let projected = outcome
            .projected
            .as_deref()
            .map(|bytes| inner.put(bytes))
            .transpose()?;
        let event = Examined {
            id,
            report,
            projected,
            verdict: outcome.verdict,
            state,
            summary: outcome.summary,
            supersedes: rival.filter(|rival| newer != Some(*rival)),
            superseded_by: newer,
        };
        inner.commit(actor, Event::Examined(Box::new(event)))?;
        Ok(Completion {
            state,
            counted: true,
        })
    }

    /// Notes that an examination crashed. The submission is queued again at the end, or held after the last attempt
    /// with `last_report`, the encoded report that says so.
    ///
    /// # Errors
    /// [`StoreError::Forbidden`] if it has left the queue; what the disk says.
    pub fn crash_examination(
        &self,
        actor: &Actor,
        lease: &Lease,
        detail: &str,
        last_report: Option<&[u8]>,
    ) -> Result<CrashOutcome, StoreError> {
        let inner = &self.inner;
        let id = lease.id;
        let _held = inner.keys.take(vec![keylock::submission(id)]);
        let entry = inner.entry(id)?;
        let attempt = entry.crashed_attempts + 1;
        let last = attempt >= CRASHED_ATTEMPTS_MAX;
        let state = super::intake::forbid(id, entry.state, Verb::Crash { last })?;
        let report = match last_report {
            Some(bytes) if last => Some(inner.put(bytes)?),
            _ => None,
        };
        let end = detail.floor_char_boundary(TEXT_BYTES_MAX);
        let event = Crashed {
            id,
            attempt,
            detail: detail.get(..end).unwrap_or_default().to_owned(),
            state,
            report,
        };
        inner.commit(actor, Event::Crashed(event))?;
        Ok(CrashOutcome {
            state,
            crashed_attempts: attempt,
        })
    }
}

impl Inner {
    /// The accepted submission with the same contributor key, if this verdict accepts.
    fn rival(&self, entry: &Entry, verdict: Verdict) -> Option<SubmissionId> {
        if verdict != Verdict::Accept {
            return None;
        }
        let core = self.shared.lock();
        core.ledger
            .accepted_by_key(&entry.contributor, entry.contributor_key.as_deref()?)
    }

    fn is_newer(&self, id: SubmissionId, than: &Entry) -> bool {
        let core = self.shared.lock();
        core.ledger
            .entry(id)
            .is_some_and(|entry| entry.created_seq > than.created_seq)
    }
}

fn violations(outcome: &Outcome) -> Vec<Violation> {
    let mut found = Vec::new();
    let mut add = |field: &str, message: String| {
        found.push(Violation {
            field: field.to_owned(),
            message,
        });
    };
    if outcome.report.len() > REPORT_BYTES_MAX {
        add("report", format!("is longer than {REPORT_BYTES_MAX} bytes"));
    }
    match &outcome.summary {
        None if outcome.verdict == Verdict::Accept => {
            add("summary", "is needed to accept".to_owned());
        }
        None => {}
        Some(summary) => {
            let length = SummaryWire::from(summary).encoded_len();
            if length > SUMMARY_BYTES_MAX {
                let message = format!("has {length} bytes, more than {SUMMARY_BYTES_MAX}");
                add("summary", message);
            }
            if !summary.lattice_energy_kj_per_mol.is_finite() {
                add(
                    "summary.lattice_energy_kj_per_mol",
                    "is not finite".to_owned(),
                );
            }
        }
    }
    found
}
