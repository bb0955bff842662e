//! The way of a submission, duplicates, leases, locks and observers.

use std::sync::{Arc, Barrier, Mutex};
use std::time::Duration;

use tarehouse_assay::report::Verdict;
use tarehouse_store::{
    Actor, Health, OpenError, PageRequest, State, Store, StoreError, SubmissionFilter, SubmissionId,
};

use crate::support::{
    ARRAY, assert_index_is_right, content, examine, mira, open, options, outcome, queued, sample,
    send, state, worker,
};

#[test]
fn every_step_survives_a_reopen() {
    let folder = tempfile::tempdir().unwrap();
    let root = folder.path().join("store");
    for clean in [true, false] {
        let number = u8::from(clean);
        let again = |store: Store| {
            if clean {
                store.close().unwrap();
            }
            drop(store);
            let store = open(&root);
            assert_eq!(store.index_was_rebuilt(), !clean);
            assert_index_is_right(&store);
            store
        };
        let store = open(&root);
        let request = format!("r{number}");
        let id = store
            .create_submission(&mira(), sample(number, &request))
            .unwrap()
            .id;
        let store = again(store);
        let view = store.get_submission(id).unwrap();
        assert_eq!(view.state, State::Draft);
        assert_eq!(view.compound, "Velnaric acid");
        assert_eq!(view.contributor, "mira");
        assert!(!view.arrays[0].stored);
        assert_eq!(
            store.read_manifest(id).unwrap(),
            format!("number = {number}\n").into_bytes()
        );
        store
            .append_array_part(id, ARRAY, 0, &content(number)[..60])
            .unwrap();
        assert_eq!(store.array_status(id, ARRAY).unwrap().committed_bytes, 60);
        let store = again(store);
        assert_eq!(store.array_status(id, ARRAY).unwrap().committed_bytes, 60);
        send(&store, id, number).unwrap();
        let store = again(store);
        assert!(store.array_status(id, ARRAY).unwrap().stored);
        assert_eq!(store.read_array(id, ARRAY).unwrap(), content(number));
        store.seal(&mira(), id).unwrap();
        let lease = store.claim_job().unwrap();
        drop(lease);
        let store = again(store);
        assert_eq!(state(&store, id), State::Queued);
        let (examined, done) = examine(&store, Verdict::Accept, -50.0);
        assert_eq!(
            (examined, done.state, done.counted),
            (id, State::Accepted, true)
        );
        let store = again(store);
        let view = store.get_submission(id).unwrap();
        assert_eq!(view.verdict, Some(Verdict::Accept));
        assert_eq!(view.policy_digest, Some([5; 32]));
        assert_eq!(view.program_version.as_deref(), Some("0.0.1-test"));
        assert_eq!(view.updated_by, "worker");
        assert_eq!(store.read_report(id).unwrap(), b"report Accept -50");
        let projected = store.open_projected(id).unwrap().next_part(1000).unwrap();
        assert_eq!(projected, Some(vec![7; 50]));
        assert_eq!(
            store.get_record(id).unwrap().summary,
            crate::support::summary(-50.0)
        );
        store.retire(&Actor::new("curator"), id).unwrap();
        let store = again(store);
        assert_eq!(state(&store, id), State::Retired);
        assert!(store.get_record(id).unwrap().retired);
        store.close().unwrap();
    }
}

#[test]
fn thirty_two_equal_requests_make_one_submission() {
    let folder = tempfile::tempdir().unwrap();
    let store = open(folder.path());
    for same_request in [true, false] {
        let barrier = Arc::new(Barrier::new(32));
        let threads: Vec<_> = (0..32)
            .map(|k| {
                let store = store.clone();
                let barrier = Arc::clone(&barrier);
                let number = if same_request { 1 } else { 2 };
                let request = if same_request { 0 } else { k };
                std::thread::spawn(move || {
                    barrier.wait();
                    let new = sample(number, &format!("{same_request} {request}"));
                    store.create_submission(&mira(), new).unwrap()
                })
            })
            .collect();
        let receipts: Vec<_> = threads.into_iter().map(|t| t.join().unwrap()).collect();
        assert_eq!(receipts.iter().filter(|r| r.created).count(), 1);
        assert!(receipts.iter().all(|r| r.id == receipts[0].id));
    }
    let all = store
        .list_submissions(&SubmissionFilter::default(), &PageRequest::default())
        .unwrap();
    assert_eq!(all.entries.len(), 2);
}

#[test]
fn many_writers_share_syncs_and_all_are_kept() {
    let folder = tempfile::tempdir().unwrap();
    let store = open(folder.path());
    let threads: Vec<_> = (0..8_u8)
        .map(|thread| {
            let store = store.clone();
            std::thread::spawn(move || {
                (0..10_u8)
                    .map(|k| {
                        let number = thread * 10 + k;
                        let new = sample(number, &number.to_string());
                        store.create_submission(&mira(), new).unwrap().id
                    })
                    .collect::<Vec<_>>()
            })
        })
        .collect();
    let ids: Vec<SubmissionId> = threads
        .into_iter()
        .flat_map(|t| t.join().unwrap())
        .collect();
    drop(store);
    let store = open(folder.path());
    for id in &ids {
        assert_eq!(state(&store, *id), State::Draft);
    }
    assert_eq!(store.last_seq(), 80);
}

#[test]
fn request_ids_and_packages_are_known_again() {
    let folder = tempfile::tempdir().unwrap();
    let store = open(folder.path());
    let first = store.create_submission(&mira(), sample(1, "a")).unwrap();
    let error = store
        .create_submission(&mira(), sample(2, "a"))
        .unwrap_err();
    assert!(matches!(error, StoreError::RequestConflict { id, .. } if id == first.id));
    let other = store.create_submission(&mira(), sample(1, "b")).unwrap();
    assert_eq!((other.id, other.created), (first.id, false));
    let somebody = Actor::new("teodor");
    assert!(
        store
            .create_submission(&somebody, sample(1, "a"))
            .unwrap()
            .created
    );
    store.withdraw(&mira(), first.id, "", None).unwrap();
    let same = store.create_submission(&mira(), sample(1, "a")).unwrap();
    assert_eq!(
        (same.id, same.created, same.state),
        (first.id, false, State::Withdrawn)
    );
    let anew = store.create_submission(&mira(), sample(1, "c")).unwrap();
    assert!(anew.created && anew.id != first.id);
}

#[test]
fn everything_wrong_with_a_request_is_said_at_once() {
    let folder = tempfile::tempdir().unwrap();
    let store = open(folder.path());
    let mut bad = sample(1, "");
    bad.compound = "a\u{0}b".to_owned();
    bad.manifest.clear();
    bad.arrays.push(bad.arrays[0].clone());
    bad.arrays.push(bad.arrays[0].clone());
    bad.arrays[2].name = "../lock".to_owned();
    bad.arrays[2].size = 0;
    let StoreError::Invalid(found) = store.create_submission(&mira(), bad).unwrap_err() else {
        panic!("not Invalid");
    };
    let fields: Vec<_> = found.iter().map(|v| v.field.as_str()).collect();
    assert_eq!(
        fields,
        [
            "request_id",
            "compound",
            "manifest",
            "arrays[1].name",
            "arrays[2].name",
            "arrays[2].size"
        ]
    );
    assert_eq!(store.last_seq(), 0);
}

#[test]
fn the_first_verdict_counts_and_leases_are_volatile() {
    let folder = tempfile::tempdir().unwrap();
    let store = open(folder.path());
    let first = queued(&store, 1, None);
    let second = queued(&store, 2, None);
    let lease = store.claim_job().unwrap();
    assert_eq!((lease.id(), lease.attempt()), (first, 1));
    assert!(store.is_under_examination(first));
    let other = store.claim_job().unwrap();
    assert_eq!(other.id(), second);
    assert!(store.claim_job().is_none());
    drop(lease);
    let lease = store.claim_job().unwrap();
    assert_eq!(lease.id(), first);
    let done = store
        .complete_examination(&worker(), &lease, outcome(Verdict::Hold, 0.0))
        .unwrap();
    assert_eq!((done.state, done.counted), (State::Held, true));
    let late = store
        .complete_examination(&worker(), &lease, outcome(Verdict::Reject, 0.0))
        .unwrap();
    assert_eq!((late.state, late.counted), (State::Held, false));
    assert_eq!(store.read_report(first).unwrap(), b"report Hold 0");
    store.withdraw(&mira(), second, "", None).unwrap();
    let gone = store
        .complete_examination(&worker(), &other, outcome(Verdict::Accept, 0.0))
        .unwrap();
    assert_eq!((gone.state, gone.counted), (State::Withdrawn, false));
    assert!(matches!(
        store.get_record(second),
        Err(StoreError::NotFound(_))
    ));
    drop(other);
    assert!(store.claim_job().is_none());
    let waiting = {
        let store = store.clone();
        std::thread::spawn(move || store.wait_for_job(Duration::from_secs(20)).unwrap().id())
    };
    let third = queued(&store, 3, None);
    assert_eq!(waiting.join().unwrap(), third);
}

#[test]
fn three_crashes_hold_a_submission() {
    let folder = tempfile::tempdir().unwrap();
    let mut store = open(folder.path());
    let id = queued(&store, 1, None);
    let next = queued(&store, 2, None);
    for attempt in 1..=3 {
        let mut lease = store.claim_job().unwrap();
        if lease.id() == next {
            lease = store.claim_job().unwrap();
        }
        assert_eq!((lease.id(), lease.attempt()), (id, attempt));
        let crash = store
            .crash_examination(&worker(), &lease, "out of memory", Some(b"it crashed"))
            .unwrap();
        assert_eq!(crash.crashed_attempts, attempt);
        let expected = if attempt == 3 {
            State::Held
        } else {
            State::Queued
        };
        assert_eq!(crash.state, expected);
        drop(lease);
        drop(store);
        store = open(folder.path());
        assert_eq!(state(&store, id), expected);
        assert_eq!(store.read_report(id).is_ok(), attempt == 3);
    }
    assert_eq!(store.queue_length(), 1);
    assert_index_is_right(&store);
}

#[test]
fn a_newer_accepted_submission_retires_the_older() {
    let folder = tempfile::tempdir().unwrap();
    let store = open(folder.path());
    let old = queued(&store, 1, Some("k"));
    examine(&store, Verdict::Accept, -1.0);
    let new = queued(&store, 2, Some("k"));
    assert_eq!(state(&store, old), State::Accepted);
    examine(&store, Verdict::Accept, -2.0);
    let (old_view, new_view) = (
        store.get_submission(old).unwrap(),
        store.get_submission(new).unwrap(),
    );
    assert_eq!(
        (old_view.state, old_view.superseded_by),
        (State::Retired, Some(new))
    );
    assert_eq!(
        (new_view.state, new_view.supersedes),
        (State::Accepted, Some(old))
    );
    assert_eq!(store.records_of_compound("velnaric ACID").unwrap().len(), 1);
    // A rejected one retires nothing; one opened earlier but accepted later is retired itself.
    let early = queued(&store, 3, Some("k"));
    let lease = store.claim_job().unwrap();
    let late = queued(&store, 4, Some("k"));
    assert_eq!(examine(&store, Verdict::Accept, -3.0).0, late);
    let done = store
        .complete_examination(&worker(), &lease, outcome(Verdict::Accept, -4.0))
        .unwrap();
    assert_eq!((lease.id(), done.state), (early, State::Retired));
    assert_eq!(
        store.get_submission(early).unwrap().superseded_by,
        Some(late)
    );
    assert_eq!(state(&store, late), State::Accepted);
    queued(&store, 5, Some("k"));
    drop(lease);
    examine(&store, Verdict::Reject, 0.0);
    assert_eq!(state(&store, late), State::Accepted);
    assert_index_is_right(&store);
}

#[test]
fn one_folder_has_one_store() {
    let folder = tempfile::tempdir().unwrap();
    let store = open(folder.path());
    let second = Store::open(folder.path(), options());
    assert!(matches!(second, Err(OpenError::Locked { .. })));
    store.close().unwrap();
    assert_eq!(store.health(), Health::Closed);
    let late = store.create_submission(&mira(), sample(1, "a"));
    assert!(matches!(late, Err(StoreError::Closed)));
    assert!(store.claim_job().is_none());
    open(folder.path());
}

#[test]
fn observers_see_every_state_in_order_and_can_be_read_by_then() {
    let folder = tempfile::tempdir().unwrap();
    let store = open(folder.path());
    let seen = Arc::new(Mutex::new(Vec::new()));
    let for_observer = Arc::clone(&seen);
    store.on_change(Box::new(move |_, _| panic!("a bad observer")));
    store.on_change(Box::new(move |id, state| {
        for_observer.lock().unwrap().push((*id, state));
    }));
    let id = queued(&store, 1, None);
    examine(&store, Verdict::Reject, 0.0);
    store.withdraw(&mira(), id, "", None).unwrap();
    store.close().unwrap();
    let states = [
        State::Draft,
        State::Queued,
        State::Rejected,
        State::Withdrawn,
    ];
    assert_eq!(*seen.lock().unwrap(), states.map(|state| (id, state)));
}

#[test]
fn the_index_can_be_rebuilt_under_writers() {
    let folder = tempfile::tempdir().unwrap();
    let store = open(folder.path());
    let writers: Vec<_> = (0..2_u8)
        .map(|thread| {
            let store = store.clone();
            std::thread::spawn(move || {
                for k in 0..40_u8 {
                    let number = thread * 40 + k;
                    let new = sample(number, &number.to_string());
                    let id = store.create_submission(&mira(), new).unwrap().id;
                    assert_eq!(state(&store, id), State::Draft);
                }
            })
        })
        .collect();
    for _ in 0..4 {
        store.rebuild_index().unwrap();
    }
    for writer in writers {
        writer.join().unwrap();
    }
    assert_eq!(store.last_seq(), 80);
    assert_index_is_right(&store);
}
