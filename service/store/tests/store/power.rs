//! Power cuts: what was not synced is gone, what was answered for is not.

use std::sync::Arc;

use tarehouse_store::{Health, Store};

use crate::faults::{Journal, calls_of_a_day, day};
use crate::sim_disk::{Fault, Leave, SimDisk};
use crate::support::{assert_index_is_right, options_on, scratch};

#[test]
fn a_power_cut_at_every_call_loses_nothing() {
    let calls = calls_of_a_day();
    for leave in [Leave::Nothing, Leave::Half] {
        for call in 1..=calls {
            let folder = scratch();
            let root = folder.path().join("store");
            let disk = SimDisk::new(&root);
            disk.fail_at(call, Fault::Kill);
            let mut journal = Journal::default();
            day(&root, &disk, &mut journal);
            disk.power_cut(leave);
            let store = Store::open(&root, options_on(Arc::new(disk.clone())))
                .unwrap_or_else(|error| panic!("cut at call {call}, {leave:?}: {error}"));
            let missing = journal.missing_from(&store);
            assert!(
                missing.is_empty(),
                "cut at call {call}, {leave:?}: {missing:?}"
            );
            assert_eq!(store.health(), Health::Good);
            if call % 16 == 0 {
                assert_index_is_right(&store);
            }
        }
    }
}

/// The negative control: with syncs that do nothing the same test sees losses.
#[test]
fn without_syncs_a_power_cut_is_seen_to_lose() {
    let folder = scratch();
    let root = folder.path().join("store");
    let disk = SimDisk::new(&root);
    disk.ignore_sync();
    let mut journal = Journal::default();
    day(&root, &disk, &mut journal);
    assert_eq!(journal.answers, 19);
    disk.power_cut(Leave::Nothing);
    let lost = match Store::open(&root, options_on(Arc::new(disk))) {
        Ok(store) => !journal.missing_from(&store).is_empty(),
        Err(_) => true,
    };
    assert!(lost);
}

/// A clean stop makes the index durable too, although its database does not.
#[test]
fn after_a_clean_stop_and_a_power_cut_the_index_is_trusted() {
    let folder = scratch();
    let root = folder.path().join("store");
    let disk = SimDisk::new(&root);
    let open = || Store::open(&root, options_on(Arc::new(disk.clone()))).unwrap();
    let store = open();
    let id = crate::support::queued(&store, 1, None);
    store.close().unwrap();
    drop(store);
    disk.power_cut(Leave::Nothing);
    let store = open();
    assert!(!store.index_was_rebuilt());
    assert_eq!(store.get_submission(id).unwrap().id, id);
    assert_index_is_right(&store);
}
