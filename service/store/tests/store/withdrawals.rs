//! Withdrawals: their reason is kept, and a stale revision stops them.

use std::sync::{Arc, Barrier};

use tarehouse_assay::report::Verdict;
use tarehouse_store::limits::REASON_BYTES_MAX;
use tarehouse_store::{State, StoreError};

use crate::support::{
    ARRAY, assert_index_is_right, content, examine, mira, open, queued, sample, send, state,
};

#[test]
fn the_reason_is_in_the_trail() {
    let folder = tempfile::tempdir().unwrap();
    let store = open(folder.path());
    let reason = "wrong cell;\n\ta better one follows";
    let told = store.create_submission(&mira(), sample(1, "1")).unwrap().id;
    let silent = store.create_submission(&mira(), sample(2, "2")).unwrap().id;
    store.withdraw(&mira(), told, reason, None).unwrap();
    store.withdraw(&mira(), silent, "", None).unwrap();
    // Without a clean stop: what is read now can only have come from the trail.
    drop(store);
    let store = open(folder.path());
    assert!(store.index_was_rebuilt());
    let of = |id| store.get_submission(id).unwrap().withdrawal_reason;
    assert_eq!(of(told).as_deref(), Some(reason));
    assert_eq!(of(silent), None);
    assert_index_is_right(&store);
}

#[test]
fn a_reason_has_limits() {
    let folder = tempfile::tempdir().unwrap();
    let store = open(folder.path());
    let id = store.create_submission(&mira(), sample(1, "1")).unwrap().id;
    for bad in ["x".repeat(REASON_BYTES_MAX + 1), "a\u{1b}[2J".to_owned()] {
        let refused = store.withdraw(&mira(), id, &bad, None).unwrap_err();
        assert!(
            matches!(&refused, StoreError::Invalid(found) if found[0].field == "reason"),
            "{refused:?}"
        );
    }
    assert_eq!(state(&store, id), State::Draft);
    let longest = "x".repeat(REASON_BYTES_MAX);
    store.withdraw(&mira(), id, &longest, None).unwrap();
}

#[test]
fn every_change_makes_the_revision_before_it_stale() {
    let folder = tempfile::tempdir().unwrap();
    let mut store = open(folder.path());
    let id = store.create_submission(&mira(), sample(1, "1")).unwrap().id;
    for step in 0..3 {
        let before = store.get_submission(id).unwrap().revision;
        match step {
            0 => send(&store, id, 1).unwrap(),
            1 => drop(store.seal(&mira(), id).unwrap()),
            _ => drop(examine(&store, Verdict::Hold, 0.0)),
        }
        let present_now = store.get_submission(id).unwrap().revision;
        assert!(present_now > before);
        let from = state(&store, id);
        for _ in 0..2 {
            let refused = store.withdraw(&mira(), id, "", Some(before)).unwrap_err();
            assert!(
                matches!(
                    refused,
                    StoreError::RevisionMismatch { expected, present, .. }
                        if (expected, present) == (before, present_now)
                ),
                "{refused:?}"
            );
            assert_eq!(state(&store, id), from);
            drop(store);
            store = open(folder.path());
        }
    }
    let present = store.get_submission(id).unwrap().revision;
    let done = store.withdraw(&mira(), id, "", Some(present)).unwrap();
    assert_eq!(done, State::Withdrawn);
}

#[test]
fn superseding_makes_the_older_ones_revision_stale() {
    let folder = tempfile::tempdir().unwrap();
    let store = open(folder.path());
    let old = queued(&store, 1, Some("k"));
    examine(&store, Verdict::Accept, -1.0);
    let before = store.get_submission(old).unwrap().revision;
    queued(&store, 2, Some("k"));
    examine(&store, Verdict::Accept, -2.0);
    let present_now = store.get_submission(old).unwrap().revision;
    let refused = store.withdraw(&mira(), old, "", Some(before));
    assert!(
        matches!(refused, Err(StoreError::RevisionMismatch { present, .. }) if present == present_now)
    );
}

#[test]
fn a_withdrawal_and_a_seal_of_one_revision_never_both_count() {
    let folder = tempfile::tempdir().unwrap();
    let store = open(folder.path());
    for number in 0..24_u8 {
        let new = sample(number, &number.to_string());
        let id = store.create_submission(&mira(), new).unwrap().id;
        let digest = *blake3::hash(&content(number)).as_bytes();
        store
            .append_array_part(id, ARRAY, 0, &content(number))
            .unwrap();
        store
            .finish_array(&mira(), id, ARRAY, 200, &digest)
            .unwrap();
        let revision = store.get_submission(id).unwrap().revision;
        let barrier = Arc::new(Barrier::new(2));
        let sealing = {
            let (store, barrier) = (store.clone(), Arc::clone(&barrier));
            std::thread::spawn(move || {
                barrier.wait();
                store.seal(&mira(), id)
            })
        };
        barrier.wait();
        let withdrawn = store.withdraw(&mira(), id, "", Some(revision));
        let sealed = sealing.join().unwrap();
        let outcome = (sealed, withdrawn, state(&store, id));
        assert!(
            matches!(
                outcome,
                (
                    Ok(_),
                    Err(StoreError::RevisionMismatch { .. }),
                    State::Queued
                ) | (Err(StoreError::Forbidden { .. }), Ok(_), State::Withdrawn)
            ),
            "{outcome:?}"
        );
    }
}
