//! A fault at every file-system call of a day: nothing that was answered for is lost.

use std::collections::HashMap;
use std::path::Path;
use std::sync::Arc;

use tarehouse_assay::report::Verdict;
use tarehouse_store::{Health, State, Store, StoreError, SubmissionId};

use crate::sim_disk::{Fault, Leave, SimDisk};
use crate::support::{
    ARRAY, assert_index_is_right, content, mira, options_on, outcome, sample, scratch, send, state,
    worker,
};

/// What was answered for, and what may have happened besides.
#[derive(Debug, Default)]
pub(crate) struct Journal {
    /// Last answered state, and states that unanswered calls may have led to.
    states: HashMap<SubmissionId, (State, Vec<State>)>,
    arrays: Vec<(SubmissionId, u8)>,
    reports: Vec<(SubmissionId, Vec<u8>)>,
    /// Answered changes.
    pub(crate) answers: usize,
}

impl Journal {
    fn note(&mut self, id: SubmissionId, wanted: State, result: &Result<State, StoreError>) {
        match result {
            Ok(state) => {
                self.answers += 1;
                self.states.insert(id, (*state, Vec::new()));
            }
            Err(_) => {
                if let Some((_, perhaps)) = self.states.get_mut(&id) {
                    perhaps.push(wanted);
                }
            }
        }
    }

    /// What is missing from a store.
    pub(crate) fn missing_from(&self, store: &Store) -> Vec<String> {
        let mut missing = Vec::new();
        for (id, (last, perhaps)) in &self.states {
            match store.get_submission(*id) {
                Ok(view) if view.state == *last || perhaps.contains(&view.state) => {}
                other => missing.push(format!("{id} was {last}: {:?}", other.map(|v| v.state))),
            }
        }
        for (id, number) in &self.arrays {
            if store.read_array(*id, ARRAY).ok() != Some(content(*number)) {
                missing.push(format!("array of {id}"));
            }
        }
        for (id, report) in &self.reports {
            if store.read_report(*id).ok().as_ref() != Some(report) {
                missing.push(format!("report of {id}"));
            }
        }
        missing
    }
}

fn submit(store: &Store, journal: &mut Journal, number: u8) -> Option<SubmissionId> {
    let mut new = sample(number, &number.to_string());
    new.contributor_key = (number < 3).then(|| "k".to_owned());
    let receipt = store.create_submission(&mira(), new).ok()?;
    journal.note(receipt.id, State::Draft, &Ok(State::Draft));
    if send(store, receipt.id, number).is_ok() {
        journal.answers += 1;
        journal.arrays.push((receipt.id, number));
    }
    let sealed = store.seal(&mira(), receipt.id);
    journal.note(receipt.id, State::Queued, &sealed);
    Some(receipt.id)
}

fn judge(store: &Store, journal: &mut Journal, verdict: Verdict, rival: Option<SubmissionId>) {
    let Some(lease) = store.claim_job() else {
        return;
    };
    let wanted = State::Queued
        .after(tarehouse_store::Verb::Conclude(verdict))
        .unwrap();
    let outcome = outcome(verdict, -1.0);
    let report = outcome.report.clone();
    let done = store.complete_examination(&worker(), &lease, outcome);
    if let Some((_, perhaps)) = rival.and_then(|rival| journal.states.get_mut(&rival)) {
        perhaps.push(State::Retired);
    }
    if done.is_ok() {
        journal.reports.push((lease.id(), report));
    }
    journal.note(lease.id(), wanted, &done.map(|done| done.state));
}

/// A day of the store, with a night in between.
pub(crate) fn day(root: &Path, disk: &SimDisk, journal: &mut Journal) {
    let Ok(store) = Store::open(root, options_on(Arc::new(disk.clone()))) else {
        return;
    };
    let first = submit(&store, journal, 1);
    judge(&store, journal, Verdict::Accept, None);
    submit(&store, journal, 2);
    judge(&store, journal, Verdict::Accept, first);
    let third = submit(&store, journal, 3);
    let _ = store.close();
    drop(store);
    let Ok(store) = Store::open(root, options_on(Arc::new(disk.clone()))) else {
        return;
    };
    judge(&store, journal, Verdict::Reject, None);
    if let Some(id) = third {
        journal.note(id, State::Withdrawn, &store.withdraw(&mira(), id, "", None));
    }
    submit(&store, journal, 4);
    for _ in 0..3 {
        if let Some(lease) = store.claim_job() {
            let crash = store.crash_examination(&worker(), &lease, "why", Some(b"last"));
            journal.note(lease.id(), State::Held, &crash.map(|crash| crash.state));
        }
    }
    if matches!(store.health(), Health::Good) {
        let _ = store.create_submission(&mira(), sample(5, "5"));
    }
}

/// Calls of a day without faults.
pub(crate) fn calls_of_a_day() -> u64 {
    let folder = scratch();
    let root = folder.path().join("store");
    let disk = SimDisk::new(&root);
    let mut journal = Journal::default();
    day(&root, &disk, &mut journal);
    assert_eq!(journal.answers, 19, "the day does what it should");
    disk.calls()
}

#[test]
fn a_fault_at_every_call_loses_nothing() {
    let calls = calls_of_a_day();
    assert!(calls > 200, "{calls}");
    let mut answered = 0;
    for fault in [Fault::Error, Fault::NoSpace, Fault::Short] {
        for call in 1..=calls {
            let folder = scratch();
            let root = folder.path().join("store");
            let disk = SimDisk::new(&root);
            disk.fail_at(call, fault);
            let mut journal = Journal::default();
            day(&root, &disk, &mut journal);
            answered += journal.answers;
            disk.revive();
            if call % 2 == 0 {
                disk.power_cut(Leave::Half);
            }
            let store = Store::open(&root, options_on(Arc::new(disk.clone())))
                .unwrap_or_else(|error| panic!("{fault:?} at call {call}: {error}"));
            let missing = journal.missing_from(&store);
            assert!(missing.is_empty(), "{fault:?} at call {call}: {missing:?}");
            assert_eq!(store.health(), Health::Good);
            if call % 16 == 0 {
                assert_index_is_right(&store);
            }
        }
    }
    // A fault does not end the day, as a rule.
    assert!(answered as u64 > calls * 3 * 8, "{answered}");
}

#[test]
fn a_failed_sync_of_the_trail_stops_all_answers() {
    let folder = scratch();
    let root = folder.path().join("store");
    let disk = SimDisk::new(&root);
    let store = Store::open(&root, options_on(Arc::new(disk.clone()))).unwrap();
    let id = store.create_submission(&mira(), sample(1, "1")).unwrap().id;
    // A withdrawal writes a frame, then syncs it: the second call from here.
    disk.fail_at(disk.calls() + 2, Fault::Error);
    let failed = store.withdraw(&mira(), id, "", None);
    assert!(matches!(failed, Err(StoreError::Poisoned(_))), "{failed:?}");
    assert!(matches!(store.health(), Health::Poisoned(_)));
    let later = store.create_submission(&mira(), sample(2, "2"));
    assert!(matches!(later, Err(StoreError::Poisoned(_))));
    assert_eq!(state(&store, id), State::Draft);
}

#[test]
fn no_space_changes_nothing_and_passes() {
    let folder = scratch();
    let root = folder.path().join("store");
    let disk = SimDisk::new(&root);
    let store = Store::open(&root, options_on(Arc::new(disk.clone()))).unwrap();
    let id = store.create_submission(&mira(), sample(1, "1")).unwrap().id;
    store
        .append_array_part(id, ARRAY, 0, &content(1)[..10])
        .unwrap();
    for fault in [Fault::NoSpace, Fault::Short] {
        disk.fail_at(disk.calls() + 1, fault);
        let failed = store.withdraw(&mira(), id, "", None);
        assert!(matches!(failed, Err(StoreError::NoSpace)), "{failed:?}");
        assert_eq!(store.health(), Health::Good);
        assert_eq!(state(&store, id), State::Draft);
        disk.fail_at(disk.calls() + 1, fault);
        let part = store.append_array_part(id, ARRAY, 10, &content(1)[10..74]);
        assert!(matches!(part, Err(StoreError::NoSpace)), "{part:?}");
    }
    send(&store, id, 1).unwrap();
    store.withdraw(&mira(), id, "", None).unwrap();
    drop(store);
    disk.power_cut(Leave::Nothing);
    let store = Store::open(&root, options_on(Arc::new(disk))).unwrap();
    assert_eq!(state(&store, id), State::Withdrawn);
    assert_eq!(store.read_array(id, ARRAY).unwrap(), content(1));
}
