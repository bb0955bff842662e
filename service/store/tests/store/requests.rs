//! Request ids: each stands for one package, whether it opened the submission or found it.

use std::sync::{Arc, Barrier};

use tarehouse_store::{Actor, Receipt, State, Store, StoreError};

use crate::support::{assert_index_is_right, mira, open, sample};

fn ask(store: &Store, number: u8, request: &str) -> Result<Receipt, StoreError> {
    store.create_submission(&mira(), sample(number, request))
}

fn assert_bound(store: &Store, first: Receipt) {
    for request in ["a", "b"] {
        let again = ask(store, 1, request).unwrap();
        assert_eq!((again.id, again.created), (first.id, false));
        let other = ask(store, 2, request).unwrap_err();
        assert!(
            matches!(&other, StoreError::RequestConflict { id, .. } if *id == first.id),
            "{other:?}"
        );
    }
}

#[test]
fn a_request_that_finds_a_package_stands_for_it_from_then_on() {
    let folder = tempfile::tempdir().unwrap();
    let mut store = open(folder.path());
    let first = ask(&store, 1, "a").unwrap();
    let revision = store.get_submission(first.id).unwrap().revision;
    let found = ask(&store, 1, "b").unwrap();
    assert_eq!((found.id, found.created), (first.id, false));
    assert_eq!(store.last_seq(), 2);
    assert_bound(&store, first);
    // What is bound already needs no further frame, and the submission itself is as it was.
    assert_eq!(store.last_seq(), 2);
    assert_eq!(store.get_submission(first.id).unwrap().revision, revision);
    for clean in [true, false] {
        if clean {
            store.close().unwrap();
        }
        drop(store);
        store = open(folder.path());
        assert_eq!(store.index_was_rebuilt(), !clean);
        assert_bound(&store, first);
        assert_index_is_right(&store);
    }
    store.rebuild_index().unwrap();
    assert_bound(&store, first);
    assert_index_is_right(&store);
    // The id of another contributor is another id.
    let teodor = Actor::new("teodor");
    let his = store.create_submission(&teodor, sample(2, "b")).unwrap();
    assert!(his.created);
    // A package that was withdrawn is opened anew, but not under the ids that stand for the old one.
    store.withdraw(&mira(), first.id, "", None).unwrap();
    let old = ask(&store, 1, "b").unwrap();
    assert_eq!(
        (old.id, old.created, old.state),
        (first.id, false, State::Withdrawn)
    );
    assert!(ask(&store, 1, "c").unwrap().created);
}

#[test]
fn looking_for_a_submission_binds_nothing() {
    let folder = tempfile::tempdir().unwrap();
    let store = open(folder.path());
    let first = ask(&store, 1, "a").unwrap();
    let find = |request: &str, number: u8| store.find_submission("mira", request, &[number; 32]);
    for request in ["a", "b"] {
        let found = find(request, 1).unwrap().unwrap();
        assert_eq!((found.id, found.created), (first.id, false));
    }
    assert!(matches!(
        find("a", 2),
        Err(StoreError::RequestConflict { .. })
    ));
    assert_eq!(find("b", 2).unwrap(), None);
    let his = store.find_submission("teodor", "a", &[1; 32]).unwrap();
    assert_eq!(his, None);
    assert_eq!(store.last_seq(), 1);
    assert!(ask(&store, 2, "b").unwrap().created);
}

#[test]
fn of_two_packages_that_want_a_new_request_id_at_once_one_gets_it() {
    let folder = tempfile::tempdir().unwrap();
    let store = open(folder.path());
    ask(&store, 1, "one").unwrap();
    ask(&store, 2, "two").unwrap();
    for round in 0..8 {
        let barrier = Arc::new(Barrier::new(8));
        let threads: Vec<_> = (0..8_u8)
            .map(|k| {
                let (store, barrier) = (store.clone(), Arc::clone(&barrier));
                std::thread::spawn(move || {
                    barrier.wait();
                    let number = 1 + k % 2;
                    (number, ask(&store, number, &format!("round {round}")))
                })
            })
            .collect();
        let answers: Vec<_> = threads.into_iter().map(|t| t.join().unwrap()).collect();
        let winners: Vec<u8> = answers
            .iter()
            .filter(|(_, answer)| answer.is_ok())
            .map(|(number, _)| *number)
            .collect();
        assert_eq!(winners.len(), 4);
        assert!(winners.iter().all(|number| *number == winners[0]));
    }
    // One frame per submission and one per round.
    assert_eq!(store.last_seq(), 10);
}
