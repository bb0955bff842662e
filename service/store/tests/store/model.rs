//! Random days against a simple model, with stops, crashes and power cuts in between.

use std::collections::BTreeMap;
use std::sync::Arc;

use proptest::prelude::*;
use tarehouse_assay::report::Verdict;
use tarehouse_store::{
    Actor, PageRequest, State, Store, StoreError, SubmissionFilter, SubmissionId,
};

use crate::sim_disk::{Leave, SimDisk};
use crate::support::{
    ARRAY, assert_index_is_right, content, options_on, outcome, sample, scratch, worker,
};

#[derive(Debug, Clone)]
enum Step {
    Create { who: u8, package: u8, request: u8 },
    Send { which: usize },
    Seal { which: usize },
    Judge { verdict: u8 },
    Crash,
    Withdraw { which: usize },
    Retire { which: usize },
    CloseAndOpen,
    DropAndOpen,
    PowerCut,
}

fn step() -> impl Strategy<Value = Step> {
    prop_oneof![
        4 => (0..2_u8, 0..6_u8, 0..6_u8)
            .prop_map(|(who, package, request)| Step::Create { who, package, request }),
        4 => (0..8_usize).prop_map(|which| Step::Send { which }),
        4 => (0..8_usize).prop_map(|which| Step::Seal { which }),
        4 => (0..3_u8).prop_map(|verdict| Step::Judge { verdict }),
        2 => Just(Step::Crash),
        1 => (0..8_usize).prop_map(|which| Step::Withdraw { which }),
        1 => (0..8_usize).prop_map(|which| Step::Retire { which }),
        1 => Just(Step::CloseAndOpen),
        1 => Just(Step::DropAndOpen),
        1 => Just(Step::PowerCut),
    ]
}

#[derive(Debug, Clone)]
struct Known {
    id: SubmissionId,
    who: u8,
    package: u8,
    requests: Vec<u8>,
    stored: bool,
    state: State,
    crashes: u32,
}

#[derive(Debug, Default)]
struct Model {
    all: Vec<Known>,
    queue: Vec<usize>,
}

fn actor(who: u8) -> Actor {
    Actor::new(format!("contributor {who}"))
}

impl Model {
    /// Index of what a request finds, or that it conflicts.
    fn find(&self, who: u8, package: u8, request: u8) -> Result<Option<usize>, ()> {
        let by_request = |k: &Known| k.who == who && k.requests.contains(&request);
        if let Some(at) = self.all.iter().position(by_request) {
            return if self.all[at].package == package {
                Ok(Some(at))
            } else {
                Err(())
            };
        }
        let live = |k: &Known| k.who == who && k.package == package && k.state != State::Withdrawn;
        Ok(self.all.iter().position(live))
    }

    fn create(&mut self, store: &Store, who: u8, package: u8, request: u8) {
        let mut new = sample(package, &format!("request {request}"));
        // Three packages share one key, so that acceptances supersede.
        new.contributor_key = (package < 3).then(|| "k".to_owned());
        let receipt = store.create_submission(&actor(who), new);
        match self.find(who, package, request) {
            Err(()) => assert!(matches!(receipt, Err(StoreError::RequestConflict { .. }))),
            Ok(Some(at)) => {
                let receipt = receipt.unwrap();
                let known = &mut self.all[at];
                known.requests.push(request);
                assert_eq!(
                    (receipt.id, receipt.created, receipt.state),
                    (known.id, false, known.state)
                );
            }
            Ok(None) => {
                let receipt = receipt.unwrap();
                assert!(receipt.created);
                self.all.push(Known {
                    id: receipt.id,
                    who,
                    package,
                    requests: vec![request],
                    stored: false,
                    state: State::Draft,
                    crashes: 0,
                });
            }
        }
    }

    fn send(&mut self, store: &Store, which: usize) {
        let Some(known) = self.all.get_mut(which) else {
            return;
        };
        let bytes = content(known.package);
        let part = store.append_array_part(known.id, ARRAY, 0, &bytes);
        if known.state != State::Draft {
            assert!(matches!(part, Err(StoreError::NotADraft { .. })));
        } else if known.stored {
            assert!(matches!(part, Err(StoreError::AlreadyStored { .. })));
        } else {
            assert_eq!(part.unwrap(), 200);
            let digest = *blake3::hash(&bytes).as_bytes();
            store
                .finish_array(&actor(known.who), known.id, ARRAY, 200, &digest)
                .unwrap();
            known.stored = true;
        }
    }

    fn seal(&mut self, store: &Store, which: usize) {
        let Some(known) = self.all.get_mut(which) else {
            return;
        };
        let sealed = store.seal(&actor(known.who), known.id);
        if known.state != State::Draft {
            assert!(matches!(sealed, Err(StoreError::Forbidden { .. })));
        } else if known.stored {
            assert_eq!(sealed.unwrap(), State::Queued);
            known.state = State::Queued;
            self.queue.push(which);
        } else {
            assert!(matches!(sealed, Err(StoreError::ArraysMissing { .. })));
        }
    }

    fn judge(&mut self, store: &Store, verdict: u8) {
        let lease = store.claim_job();
        assert_eq!(lease.is_some(), !self.queue.is_empty());
        let Some(lease) = lease else { return };
        let at = self.queue.remove(0);
        assert_eq!(lease.id(), self.all[at].id);
        let (verdict, mut state) = match verdict {
            0 => (Verdict::Accept, State::Accepted),
            1 => (Verdict::Hold, State::Held),
            _ => (Verdict::Reject, State::Rejected),
        };
        let done = store
            .complete_examination(&worker(), &lease, outcome(verdict, -1.0))
            .unwrap();
        let (who, package) = (self.all[at].who, self.all[at].package);
        if state == State::Accepted && package < 3 {
            let same = |k: &Known| k.who == who && k.package < 3 && k.state == State::Accepted;
            if let Some(rival) = self.all.iter().position(same) {
                // Later in the list means opened later.
                let loser = rival.min(at);
                if loser == at {
                    state = State::Retired;
                } else {
                    self.all[rival].state = State::Retired;
                }
            }
        }
        self.all[at].state = state;
        assert_eq!((done.state, done.counted), (state, true));
    }

    fn crash(&mut self, store: &Store) {
        let Some(lease) = store.claim_job() else {
            return;
        };
        let at = self.queue.remove(0);
        let known = &mut self.all[at];
        known.crashes += 1;
        if known.crashes == 3 {
            known.state = State::Held;
        } else {
            self.queue.push(at);
        }
        let crash = store
            .crash_examination(&worker(), &lease, "why", Some(b"last"))
            .unwrap();
        assert_eq!(
            (crash.state, crash.crashed_attempts),
            (known.state, known.crashes)
        );
    }

    fn withdraw(&mut self, store: &Store, which: usize) {
        let Some(known) = self.all.get_mut(which) else {
            return;
        };
        let revision = store.get_submission(known.id).unwrap().revision;
        let stale = store.withdraw(&actor(known.who), known.id, "", Some(revision - 1));
        assert!(
            matches!(stale, Err(StoreError::RevisionMismatch { present, .. }) if present == revision)
        );
        let done = store.withdraw(&actor(known.who), known.id, "no more", Some(revision));
        if matches!(
            known.state,
            State::Accepted | State::Withdrawn | State::Retired
        ) {
            assert!(matches!(done, Err(StoreError::Forbidden { .. })));
        } else {
            assert_eq!(done.unwrap(), State::Withdrawn);
            known.state = State::Withdrawn;
            self.queue.retain(|at| *at != which);
        }
    }

    fn retire(&mut self, store: &Store, which: usize) {
        let Some(known) = self.all.get_mut(which) else {
            return;
        };
        let done = store.retire(&worker(), known.id);
        if known.state == State::Accepted {
            assert_eq!(done.unwrap(), State::Retired);
            known.state = State::Retired;
        } else {
            assert!(matches!(done, Err(StoreError::Forbidden { .. })));
        }
    }

    fn check(&self, store: &Store) {
        let mut by_state: BTreeMap<State, Vec<SubmissionId>> = BTreeMap::new();
        for known in self.all.iter().rev() {
            let view = store.get_submission(known.id).unwrap();
            assert_eq!(view.state, known.state);
            assert_eq!(view.arrays[0].stored, known.stored);
            assert_eq!(view.crashed_attempts, known.crashes);
            let gone = known.state == State::Withdrawn;
            assert_eq!(view.withdrawal_reason.is_some(), gone);
            by_state.entry(known.state).or_default().push(known.id);
        }
        for state in State::ALL {
            let filter = SubmissionFilter {
                state: Some(*state),
                ..SubmissionFilter::default()
            };
            let page = store
                .list_submissions(&filter, &PageRequest::default())
                .unwrap();
            let found: Vec<_> = page.entries.iter().map(|view| view.id).collect();
            assert_eq!(found, by_state.remove(state).unwrap_or_default(), "{state}");
        }
        let live = self
            .all
            .iter()
            .filter(|k| k.state == State::Accepted)
            .count();
        assert_eq!(
            store.records_of_compound("Velnaric acid").unwrap().len(),
            live
        );
        assert_eq!(store.queue_length(), self.queue.len());
        assert_index_is_right(store);
    }
}

fn run(steps: Vec<Step>) {
    let folder = scratch();
    let root = folder.path().join("store");
    let disk = SimDisk::new(&root);
    let open = || Store::open(&root, options_on(Arc::new(disk.clone()))).unwrap();
    let mut store = open();
    let mut model = Model::default();
    for step in steps {
        match step {
            Step::Create {
                who,
                package,
                request,
            } => model.create(&store, who, package, request),
            Step::Send { which } => model.send(&store, which),
            Step::Seal { which } => model.seal(&store, which),
            Step::Judge { verdict } => model.judge(&store, verdict),
            Step::Crash => model.crash(&store),
            Step::Withdraw { which } => model.withdraw(&store, which),
            Step::Retire { which } => model.retire(&store, which),
            Step::CloseAndOpen => {
                store.close().unwrap();
                drop(store);
                store = open();
                assert!(!store.index_was_rebuilt());
            }
            Step::DropAndOpen => {
                drop(store);
                store = open();
            }
            Step::PowerCut => {
                drop(store);
                disk.power_cut(Leave::Nothing);
                store = open();
            }
        }
    }
    model.check(&store);
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 48, failure_persistence: None, ..ProptestConfig::default() })]

    #[test]
    fn random_days_match_the_model(steps in prop::collection::vec(step(), 1..60)) {
        run(steps);
    }
}
