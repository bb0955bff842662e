//! Stores of earlier versions must open. `tests/fixtures/store-v1` was written by `examples/write_fixture.rs` of the
//! version that it is named after; it is never written again.

use std::collections::BTreeMap;
use std::path::{Path, PathBuf};

use tarehouse_assay::report::Verdict;
use tarehouse_store::{
    Health, PageRequest, RecordFilter, State, Store, StoreError, SubmissionFilter, SubmissionView,
};

use crate::support::{ARRAY, assert_index_is_right, content, mira, options, sample, send};

fn fixture() -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/fixtures/store-v1")
}

fn copy(from: &Path, to: &Path) {
    std::fs::create_dir(to).unwrap();
    for entry in std::fs::read_dir(from).unwrap() {
        let entry = entry.unwrap();
        let target = to.join(entry.file_name());
        if entry.file_type().unwrap().is_dir() {
            copy(&entry.path(), &target);
        } else {
            std::fs::copy(entry.path(), target).unwrap();
        }
    }
}

/// The samples by their number, which is the first byte of the package digest.
fn all(store: &Store) -> BTreeMap<u8, SubmissionView> {
    let filter = SubmissionFilter::default();
    let page = store
        .list_submissions(&filter, &PageRequest::default())
        .unwrap();
    page.entries
        .into_iter()
        .map(|view| (view.package_digest[0], view))
        .collect()
}

fn check_submissions(store: &Store, samples: &BTreeMap<u8, SubmissionView>) {
    let states: Vec<(u8, State)> = samples.iter().map(|(n, view)| (*n, view.state)).collect();
    let expected = [
        (1, State::Retired),
        (2, State::Accepted),
        (3, State::Retired),
        (4, State::Held),
        (5, State::Rejected),
        (6, State::Held),
        (7, State::Withdrawn),
        (8, State::Draft),
        (9, State::Queued),
    ];
    assert_eq!(states, expected);
    for (number, view) in samples {
        assert_eq!(view.contributor, "mira");
        assert_eq!(view.compound, "Velnaric acid");
        assert!(view.created_ms >= 1_796_083_200_000);
        let manifest = store.read_manifest(view.id).unwrap();
        assert_eq!(manifest, format!("number = {number}\n").into_bytes());
        if view.arrays[0].stored {
            assert_eq!(store.read_array(view.id, ARRAY).unwrap(), content(*number));
        }
    }
    assert_eq!(samples[&1].superseded_by, Some(samples[&2].id));
    assert_eq!(samples[&2].supersedes, Some(samples[&1].id));
    assert_eq!(samples[&3].updated_by, "curator");
    assert_eq!(samples[&6].crashed_attempts, 3);
    let reason = samples[&7].withdrawal_reason.as_deref();
    assert_eq!(reason, Some("a better one follows"));
}

fn check_reports(store: &Store, samples: &BTreeMap<u8, SubmissionView>) {
    let reports: [(u8, &[u8], bool); 6] = [
        (1, b"report Accept -50.5", true),
        (2, b"report Accept -51.25", true),
        (3, b"report Accept -40", true),
        (4, b"report Hold 0", true),
        (5, b"report Reject 0", false),
        (6, b"it crashed", false),
    ];
    for (number, report, projected) in reports {
        let view = &samples[&number];
        assert_eq!(store.read_report(view.id).unwrap(), report);
        assert_eq!(view.policy_digest, Some([5; 32]));
        assert_eq!(view.program_version.as_deref(), Some("0.1.0"));
        let found = store.open_projected(view.id);
        assert_eq!(found.is_ok(), projected, "{number}");
        if let Ok(mut reader) = found {
            assert_eq!(reader.next_part(1000).unwrap(), Some(vec![7; 50]));
        }
    }
    let filter = RecordFilter {
        include_retired: true,
        ..RecordFilter::default()
    };
    let records = store
        .list_records(&filter, &PageRequest::default())
        .unwrap();
    let found: Vec<_> = records
        .entries
        .iter()
        .map(|record| {
            let energy = record.summary.lattice_energy_kj_per_mol;
            (record.package_digest[0], record.retired, energy.to_bits())
        })
        .collect();
    let expected = [(3, true, -40.0_f64), (2, false, -51.25), (1, true, -50.5)];
    assert_eq!(
        found,
        expected.map(|(n, retired, e)| (n, retired, e.to_bits()))
    );
    assert_eq!(
        records.entries[1].summary.energy_level,
        "pbe0 / d4 / plane waves / undeclared"
    );
}

#[test]
fn a_store_of_the_first_format_opens_and_goes_on() {
    let folder = tempfile::tempdir().unwrap();
    let root = folder.path().join("store");
    copy(&fixture(), &root);
    assert!(!root.join("index").exists());
    let store = Store::open(&root, options()).unwrap();
    assert_eq!(store.health(), Health::Good);
    assert!(store.index_was_rebuilt());
    assert_eq!(store.last_seq(), 34);
    let samples = all(&store);
    check_submissions(&store, &samples);
    check_reports(&store, &samples);
    assert_index_is_right(&store);

    // Both requests of the draft stand for it, and its upload goes on from where it was.
    let draft = samples[&8].id;
    for request in ["request 8", "another request 8"] {
        let taken = store.create_submission(&mira(), sample(1, request));
        assert!(matches!(taken, Err(StoreError::RequestConflict { id, .. }) if id == draft));
    }
    assert_eq!(
        store.array_status(draft, ARRAY).unwrap().committed_bytes,
        100
    );
    send(&store, draft, 8).unwrap();
    assert_eq!(store.seal(&mira(), draft).unwrap(), State::Queued);
    let (first, done) = crate::support::examine(&store, Verdict::Reject, 0.0);
    assert_eq!((first, done.state), (samples[&9].id, State::Rejected));
    store.close().unwrap();
    drop(store);
    let store = Store::open(&root, options()).unwrap();
    assert!(!store.index_was_rebuilt());
    assert_eq!(store.get_submission(draft).unwrap().state, State::Queued);
}
