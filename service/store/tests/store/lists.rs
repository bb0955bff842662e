//! Lists, filters, orders and page tokens.

use tarehouse_assay::report::Verdict;
use tarehouse_store::{
    PageRequest, RecordFilter, RecordOrder, State, StoreError, SubmissionFilter,
};

use crate::support::{examine, mira, open, outcome, queued, sample, summary, worker};

fn page(size: usize, token: &str) -> PageRequest {
    PageRequest {
        size,
        token: token.to_owned(),
    }
}

#[test]
fn submissions_come_newest_first_in_pages_that_fit_together() {
    let folder = tempfile::tempdir().unwrap();
    let store = open(folder.path());
    let mut ids = Vec::new();
    for number in 0..7 {
        let mut new = sample(number, &number.to_string());
        if number % 2 == 0 {
            new.compound = "Other".to_owned();
        }
        ids.push(store.create_submission(&mira(), new).unwrap().id);
    }
    store.withdraw(&mira(), ids[3], "", None).unwrap();
    ids.reverse();
    let all = |filter: &SubmissionFilter, size: usize| {
        let mut found = Vec::new();
        let mut token = String::new();
        loop {
            let page = store.list_submissions(filter, &page(size, &token)).unwrap();
            assert!(page.entries.len() <= size);
            found.extend(page.entries.into_iter().map(|view| view.id));
            token = page.next_token;
            if token.is_empty() {
                return found;
            }
        }
    };
    for size in [1, 2, 7, 100] {
        assert_eq!(all(&SubmissionFilter::default(), size), ids, "size {size}");
        let filter = SubmissionFilter {
            compound: Some("  OTHER ".to_owned()),
            ..SubmissionFilter::default()
        };
        let others: Vec<_> = ids.iter().copied().step_by(2).collect();
        assert_eq!(all(&filter, size), others);
        let filter = SubmissionFilter {
            state: Some(State::Withdrawn),
            contributor: Some("mira".to_owned()),
            compound: Some("velnaric acid".to_owned()),
        };
        assert_eq!(all(&filter, size), [ids[3]]);
        let filter = SubmissionFilter {
            contributor: Some("mir".to_owned()),
            ..SubmissionFilter::default()
        };
        assert!(all(&filter, size).is_empty());
    }
    let draft = SubmissionFilter {
        state: Some(State::Draft),
        ..SubmissionFilter::default()
    };
    assert_eq!(all(&draft, 4).len(), 6);
}

#[test]
fn a_token_belongs_to_its_filter() {
    let folder = tempfile::tempdir().unwrap();
    let store = open(folder.path());
    for number in 0..3 {
        store
            .create_submission(&mira(), sample(number, &number.to_string()))
            .unwrap();
    }
    let filter = SubmissionFilter::default();
    let token = store
        .list_submissions(&filter, &page(1, ""))
        .unwrap()
        .next_token;
    let other = SubmissionFilter {
        state: Some(State::Draft),
        ..SubmissionFilter::default()
    };
    let list =
        |filter: &SubmissionFilter, token: &str| store.list_submissions(filter, &page(1, token));
    assert!(list(&filter, &token).is_ok());
    assert!(matches!(
        list(&other, &token),
        Err(StoreError::PageTokenFilter)
    ));
    let records = store.list_records(&RecordFilter::default(), &page(1, &token));
    assert!(matches!(records, Err(StoreError::PageTokenFilter)));
    let mut flipped = token.clone();
    let last = flipped.pop().unwrap();
    flipped.push(if last == '0' { '1' } else { '0' });
    for bad in ["zz", "00", &flipped, &token[2..]] {
        assert!(
            matches!(list(&filter, bad), Err(StoreError::PageToken)),
            "{bad}"
        );
    }
}

#[test]
fn records_are_ranked_filtered_and_counted() {
    let folder = tempfile::tempdir().unwrap();
    let store = open(folder.path());
    let energies = [-3.5, 12.0, -120.25, 0.0];
    let mut ids = Vec::new();
    for (number, energy) in (0..).zip(energies) {
        ids.push(queued(&store, number, None));
        examine(&store, Verdict::Accept, energy);
    }
    let ranked = |filter: RecordFilter| -> Vec<f64> {
        let mut found = Vec::new();
        let mut token = String::new();
        loop {
            let page = store.list_records(&filter, &page(2, &token)).unwrap();
            found.extend(
                page.entries
                    .iter()
                    .map(|r| r.summary.lattice_energy_kj_per_mol),
            );
            token = page.next_token;
            if token.is_empty() {
                return found;
            }
        }
    };
    let by_energy = RecordFilter {
        compound: Some("velnaric acid".to_owned()),
        order: RecordOrder::LatticeEnergy,
        ..RecordFilter::default()
    };
    assert_eq!(ranked(by_energy.clone()), [-120.25, -3.5, 0.0, 12.0]);
    assert_eq!(ranked(RecordFilter::default()), [0.0, -120.25, 12.0, -3.5]);
    let low = RecordFilter {
        lattice_energy_max_kj_per_mol: Some(-3.5),
        ..by_energy.clone()
    };
    assert_eq!(ranked(low), [-120.25, -3.5]);
    let form = RecordFilter {
        form: Some("0".to_owned()),
        ..by_energy.clone()
    };
    assert_eq!(ranked(form), [-3.5, 0.0]);
    let level = RecordFilter {
        level: Some("another".to_owned()),
        ..by_energy.clone()
    };
    assert!(ranked(level).is_empty());
    let compounds = store.list_compounds(&page(0, "")).unwrap().entries;
    assert_eq!(compounds.len(), 1);
    assert_eq!((compounds[0].record_count, compounds[0].form_count), (4, 3));
    store.retire(&worker(), ids[2]).unwrap();
    assert_eq!(ranked(by_energy.clone()), [-3.5, 0.0, 12.0]);
    let with_retired = RecordFilter {
        include_retired: true,
        ..by_energy
    };
    assert_eq!(ranked(with_retired).len(), 4);
    let compounds = store.list_compounds(&page(0, "")).unwrap().entries;
    assert_eq!((compounds[0].record_count, compounds[0].form_count), (3, 2));
    for id in [ids[0], ids[1], ids[3]] {
        store.retire(&worker(), id).unwrap();
    }
    assert!(
        store
            .list_compounds(&page(0, ""))
            .unwrap()
            .entries
            .is_empty()
    );
}

#[test]
fn a_summary_is_bounded_and_needed() {
    let folder = tempfile::tempdir().unwrap();
    let store = open(folder.path());
    queued(&store, 1, None);
    let lease = store.claim_job().unwrap();
    let complete = |change: fn(&mut tarehouse_store::Outcome)| {
        let mut outcome = outcome(Verdict::Accept, 1.0);
        change(&mut outcome);
        store.complete_examination(&worker(), &lease, outcome)
    };
    let bad: [fn(&mut tarehouse_store::Outcome); 3] = [
        |outcome| outcome.summary = None,
        |outcome| {
            let mut long = summary(1.0);
            long.temperature_k = vec![1.5; 600];
            outcome.summary = Some(long);
        },
        |outcome| outcome.summary = Some(summary(f64::NAN)),
    ];
    for change in bad {
        assert!(matches!(complete(change), Err(StoreError::Invalid(_))));
    }
    assert!(complete(|_| {}).unwrap().counted);
}
