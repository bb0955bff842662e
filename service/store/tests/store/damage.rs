//! Damage at rest: truncations and flipped bits are detected, or what can be rebuilt is rebuilt.

use std::fs;
use std::path::{Path, PathBuf};

use tarehouse_assay::report::Verdict;
use tarehouse_store::{Health, OpenError, State, Store, StoreError, SubmissionId};

use crate::support::{
    ARRAY, assert_index_is_right, content, examine, mira, open, options, queued, sample, state,
};

fn segments(root: &Path) -> Vec<PathBuf> {
    let mut found: Vec<_> = fs::read_dir(root.join("trail"))
        .unwrap()
        .map(|entry| entry.unwrap().path())
        .collect();
    found.sort();
    found
}

fn flip(path: &Path, at: usize, bit: u32) {
    let mut bytes = fs::read(path).unwrap();
    bytes[at] ^= 1 << bit;
    fs::write(path, bytes).unwrap();
}

/// A store whose last change is a withdrawal; its last segment as it was before that, and the anchor.
fn with_last_frame(root: &Path) -> (SubmissionId, PathBuf, usize, Vec<u8>) {
    let store = open(root);
    let id = store.create_submission(&mira(), sample(1, "a")).unwrap().id;
    store.close().unwrap();
    let path = segments(root).pop().unwrap();
    let before = fs::read(&path).unwrap().len();
    let anchor = fs::read(root.join("anchor")).unwrap();
    let store = open(root);
    store.withdraw(&mira(), id, "", None).unwrap();
    drop(store);
    (id, path, before, anchor)
}

#[test]
fn a_torn_last_frame_is_cut_and_a_shortened_trail_is_refused() {
    let folder = tempfile::tempdir().unwrap();
    let root = folder.path();
    let (id, path, before, old_anchor) = with_last_frame(root);
    let whole = fs::read(&path).unwrap();
    let anchor = fs::read(root.join("anchor")).unwrap();
    for length in before..whole.len() {
        fs::write(&path, &whole[..length]).unwrap();
        // The anchor says that the frame was durable: acknowledged changes are missing.
        fs::write(root.join("anchor"), &anchor).unwrap();
        let refused = Store::open(root, options());
        assert!(
            matches!(
                refused,
                Err(OpenError::BehindAnchor {
                    trail_seq: 1,
                    anchor_seq: 2,
                    ..
                })
            ),
            "length {length}: {refused:?}"
        );
        assert_eq!(
            fs::read(&path).unwrap(),
            &whole[..length],
            "nothing is touched"
        );
        // The anchor is older: the write was never answered for, and is cut.
        fs::write(root.join("anchor"), &old_anchor).unwrap();
        let store = open(root);
        assert_eq!(state(&store, id), State::Draft);
        assert_eq!(fs::read(&path).unwrap().len(), before);
    }
    fs::write(&path, &whole).unwrap();
    fs::write(root.join("anchor"), &old_anchor).unwrap();
    assert_eq!(state(&open(root), id), State::Withdrawn);
}

#[test]
fn a_flipped_bit_of_the_last_frame_is_detected() {
    let folder = tempfile::tempdir().unwrap();
    let root = folder.path();
    let (_, path, before, _) = with_last_frame(root);
    let whole = fs::read(&path).unwrap();
    for at in before..whole.len() {
        flip(&path, at, u32::try_from(at % 8).unwrap());
        let refused = Store::open(root, options());
        assert!(
            matches!(refused, Err(OpenError::BehindAnchor { .. })),
            "byte {at}"
        );
        fs::write(&path, &whole).unwrap();
    }
    open(root);
}

#[test]
fn a_flipped_bit_inside_the_trail_makes_it_read_only() {
    let folder = tempfile::tempdir().unwrap();
    let root = folder.path();
    let store = open(root);
    let ids: Vec<_> = (0..8).map(|number| queued(&store, number, None)).collect();
    store.close().unwrap();
    let paths = segments(root);
    assert!(paths.len() > 2, "the test needs several segments");
    for (which, path) in paths.iter().enumerate() {
        let whole = fs::read(path).unwrap();
        let last_frame = if which + 1 == paths.len() { 300 } else { 0 };
        for at in (0..whole.len().saturating_sub(last_frame)).step_by(211) {
            flip(path, at, 2);
            let store = open(root);
            let Health::ReadOnly(damage) = store.health() else {
                panic!("segment {which} byte {at}: {:?}", store.health());
            };
            assert_eq!(path.file_name().unwrap().to_str().unwrap(), damage.segment);
            assert!(damage.offset <= at as u64);
            let refused = store.create_submission(&mira(), sample(99, "z"));
            assert!(matches!(refused, Err(StoreError::ReadOnly(_))));
            assert!(store.claim_job().is_none());
            assert_eq!(store.last_seq(), damage.after_seq);
            if damage.after_seq >= 3 {
                assert_eq!(state(&store, ids[0]), State::Queued);
                assert_eq!(store.read_array(ids[0], ARRAY).unwrap(), content(0));
            }
            store.close().unwrap();
            drop(store);
            fs::write(path, &whole).unwrap();
        }
    }
    let store = open(root);
    assert_eq!(store.health(), Health::Good);
    assert_eq!(store.queue_length(), 8);
}

#[test]
fn a_missing_segment_is_detected() {
    let folder = tempfile::tempdir().unwrap();
    let root = folder.path();
    let store = open(root);
    for number in 0..8 {
        queued(&store, number, None);
    }
    store.close().unwrap();
    let paths = segments(root);
    for (which, path) in paths.iter().enumerate() {
        let whole = fs::read(path).unwrap();
        fs::remove_file(path).unwrap();
        let opened = Store::open(root, options());
        if which + 1 == paths.len() {
            assert!(matches!(opened, Err(OpenError::BehindAnchor { .. })));
        } else {
            assert!(matches!(opened.unwrap().health(), Health::ReadOnly(_)));
        }
        fs::write(path, whole).unwrap();
    }
    assert_eq!(open(root).health(), Health::Good);
}

#[test]
fn a_damaged_anchor_is_survived_in_one_slot_and_refused_in_both() {
    let folder = tempfile::tempdir().unwrap();
    let root = folder.path();
    let (id, _, _, _) = with_last_frame(root);
    let path = root.join("anchor");
    let whole = fs::read(&path).unwrap();
    for slot in [0, 4096] {
        for at in (0..92).step_by(7) {
            flip(&path, slot + at, 5);
            assert_eq!(state(&open(root), id), State::Withdrawn);
            fs::write(&path, &whole).unwrap();
        }
    }
    flip(&path, 30, 1);
    flip(&path, 4096 + 30, 1);
    let refused = Store::open(root, options());
    assert!(matches!(
        refused,
        Err(OpenError::AnchorDamaged { trail_seq: 2 })
    ));
    fs::remove_file(&path).unwrap();
    let refused = Store::open(root, options());
    assert!(matches!(
        refused,
        Err(OpenError::AnchorDamaged { trail_seq: 2 })
    ));
    // The anchor of another store.
    let other = tempfile::tempdir().unwrap();
    let store = open(other.path());
    store.create_submission(&mira(), sample(5, "a")).unwrap();
    store.close().unwrap();
    fs::copy(other.path().join("anchor"), &path).unwrap();
    let refused = Store::open(root, options());
    assert!(matches!(refused, Err(OpenError::AnchorMismatch { seq: 1 })));
}

#[test]
fn a_damaged_index_is_built_anew() {
    let folder = tempfile::tempdir().unwrap();
    let root = folder.path();
    let store = open(root);
    for number in 0..4 {
        queued(&store, number, None);
        examine(&store, Verdict::Accept, f64::from(number));
    }
    let right = store.index_fingerprint().unwrap();
    store.close().unwrap();
    drop(store);
    for round in 0..12_usize {
        let mut files = Vec::new();
        let mut folders = vec![root.join("index")];
        while let Some(folder) = folders.pop() {
            for entry in fs::read_dir(folder).unwrap() {
                let path = entry.unwrap().path();
                match path.is_dir() {
                    true => folders.push(path),
                    false if fs::metadata(&path).unwrap().len() > 0 => files.push(path),
                    false => {}
                }
            }
        }
        files.sort();
        let path = &files[round % files.len()];
        let length = fs::read(path).unwrap().len();
        flip(path, (round * 977 + 13) % length, 3);
        let store = open(root);
        assert!(store.index_was_rebuilt(), "{path:?}");
        assert_eq!(store.index_fingerprint().unwrap(), right);
        store.close().unwrap();
    }
    fs::remove_dir_all(root.join("index")).unwrap();
    let store = open(root);
    assert_eq!(store.index_fingerprint().unwrap(), right);
    store.close().unwrap();
    drop(store);
    assert!(!open(root).index_was_rebuilt());
}

#[test]
fn an_index_of_an_older_trail_is_not_trusted() {
    let folder = tempfile::tempdir().unwrap();
    let root = folder.path();
    let store = open(root);
    queued(&store, 1, None);
    store.close().unwrap();
    drop(store);
    let saved = tempfile::tempdir().unwrap();
    let saved = saved.path().join("trail");
    let copy = |from: &Path, to: &Path| {
        let _ = fs::remove_dir_all(to);
        fs::create_dir(to).unwrap();
        for path in fs::read_dir(from).unwrap() {
            let path = path.unwrap().path();
            fs::copy(&path, to.join(path.file_name().unwrap())).unwrap();
        }
    };
    copy(&root.join("trail"), &saved);
    let anchor = fs::read(root.join("anchor")).unwrap();
    let store = open(root);
    let id = store.claim_job().unwrap().id();
    store.withdraw(&mira(), id, "", None).unwrap();
    store.close().unwrap();
    drop(store);
    copy(&saved, &root.join("trail"));
    fs::write(root.join("anchor"), anchor).unwrap();
    let store = open(root);
    assert!(store.index_was_rebuilt());
    assert_eq!(state(&store, id), State::Queued);
}

#[test]
fn damaged_objects_are_noticed() {
    let folder = tempfile::tempdir().unwrap();
    let root = folder.path();
    let store = open(root);
    let id = queued(&store, 1, None);
    drop(store);
    let name = blake3::hash(&content(1)).to_hex().to_string();
    let path = root.join("objects").join(&name[..2]).join(&name);
    let whole = fs::read(&path).unwrap();
    flip(&path, 100, 0);
    let store = open(root);
    assert!(matches!(
        store.read_array(id, ARRAY),
        Err(StoreError::ObjectDamaged { .. })
    ));
    // In parts, the last one is never handed out.
    let mut reader = store.open_array(id, ARRAY).unwrap();
    assert!(reader.next_part(150).unwrap().is_some());
    assert!(matches!(
        reader.next_part(150),
        Err(StoreError::ObjectDamaged { .. })
    ));
    drop(store);
    fs::write(&path, &whole[..199]).unwrap();
    let refused = Store::open(root, options());
    assert!(matches!(&refused, Err(OpenError::ObjectsMissing { missing }) if missing.len() == 1));
    fs::remove_file(&path).unwrap();
    let refused = Store::open(root, options());
    assert!(matches!(&refused, Err(OpenError::ObjectsMissing { missing }) if missing.len() == 1));
    let mut tolerant = options();
    tolerant.tolerate_missing_objects = true;
    let store = Store::open(root, tolerant).unwrap();
    assert_eq!(store.missing_objects(), [format!("{name}: missing")]);
    assert!(matches!(
        store.read_array(id, ARRAY),
        Err(StoreError::ObjectDamaged { .. })
    ));
    drop(store);
    fs::write(&path, &whole).unwrap();
    assert_eq!(open(root).read_array(id, ARRAY).unwrap(), content(1));
}

#[test]
fn temporary_files_are_cleared_and_live_partial_uploads_kept() {
    let folder = tempfile::tempdir().unwrap();
    let root = folder.path();
    let store = open(root);
    let id = store.create_submission(&mira(), sample(1, "a")).unwrap().id;
    let gone = store.create_submission(&mira(), sample(2, "b")).unwrap().id;
    store.append_array_part(id, ARRAY, 0, &[0; 10]).unwrap();
    store.withdraw(&mira(), gone, "", None).unwrap();
    drop(store);
    let strays = [
        root.join("temp/00000007"),
        root.join(format!("partial/{gone}.{ARRAY}")),
        root.join(format!("partial/{id}.other.npy")),
        root.join("partial/rubbish"),
    ];
    for stray in &strays {
        fs::write(stray, b"x").unwrap();
    }
    let store = open(root);
    for stray in &strays {
        assert!(!stray.exists(), "{stray:?}");
    }
    assert_eq!(store.array_status(id, ARRAY).unwrap().committed_bytes, 10);
    assert_index_is_right(&store);
}
