//! What the tests share: options, sample submissions and the whole way of one.

use std::path::Path;
use std::sync::Arc;
use std::sync::atomic::{AtomicU64, Ordering};
use std::time::Duration;

use tarehouse_assay::report::Verdict;
use tarehouse_store::disk::Disk;
use tarehouse_store::{
    Actor, Completion, DeclaredArray, NewSubmission, Options, Outcome, RecordSummary, State, Store,
    StoreError, SubmissionId,
};

/// A scratch folder in memory where there is such a place: the simulated disk syncs nothing, but the embedded database
/// does, hundreds of times.
pub(crate) fn scratch() -> tempfile::TempDir {
    tempfile::tempdir_in("/dev/shm").unwrap_or_else(|_| tempfile::tempdir().unwrap())
}

/// Options with a counting clock and small segments, so that they are sealed often.
pub(crate) fn options() -> Options {
    let clock = AtomicU64::new(1_000);
    Options {
        program_version: "0.0.1-test".to_owned(),
        clock: Arc::new(move || clock.fetch_add(1, Ordering::Relaxed)),
        segment_bytes_max: 2_000,
        read_wait: Duration::from_secs(20),
        index_cache_bytes: 1 << 20,
        ..Options::default()
    }
}

pub(crate) fn options_on(disk: Arc<dyn Disk>) -> Options {
    Options { disk, ..options() }
}

pub(crate) fn open(folder: &Path) -> Store {
    Store::open(folder, options()).unwrap()
}

pub(crate) fn mira() -> Actor {
    Actor::new("mira")
}

pub(crate) fn worker() -> Actor {
    Actor::new("worker").under([5; 32])
}

/// Content of the one array of sample `number`.
pub(crate) fn content(number: u8) -> Vec<u8> {
    (0..200_u8).map(|k| k.wrapping_mul(3) ^ number).collect()
}

pub(crate) const ARRAY: &str = "constants.npy";

/// Sample submission `number` with its request id.
pub(crate) fn sample(number: u8, request_id: &str) -> NewSubmission {
    let content = content(number);
    NewSubmission {
        request_id: request_id.to_owned(),
        package_digest: [number; 32],
        manifest: format!("number = {number}\n").into_bytes(),
        arrays: vec![DeclaredArray {
            name: ARRAY.to_owned(),
            size: content.len() as u64,
            digest: *blake3::hash(&content).as_bytes(),
        }],
        compound: "Velnaric acid".to_owned(),
        form: format!("{}", number % 3),
        formula: "C4 H6 O2".to_owned(),
        contributor_key: None,
    }
}

pub(crate) fn summary(energy: f64) -> RecordSummary {
    RecordSummary {
        level: "pbe / d4 / plane waves / undeclared".to_owned(),
        energy_level: "pbe / d4 / plane waves / undeclared".to_owned(),
        lattice_energy_kj_per_mol: energy,
        zero_point_energy_kj_per_mol: 210.5,
        defined: true,
        temperature_k: vec![0.0, 300.0],
        central_kj_per_mol: vec![210.5, 190.25],
        lower_kj_per_mol: vec![210.0, 189.75],
        upper_kj_per_mol: vec![211.0, 190.75],
        entropy_j_per_mol_k: vec![0.0, 101.0],
        density_g_per_cm3: Some(1.4),
        space_group_number: Some(14),
    }
}

pub(crate) fn outcome(verdict: Verdict, energy: f64) -> Outcome {
    Outcome {
        report: format!("report {verdict:?} {energy}").into_bytes(),
        projected: (verdict == Verdict::Accept).then(|| vec![7; 50]),
        verdict,
        summary: (verdict == Verdict::Accept).then(|| summary(energy)),
    }
}

/// Sends the array in two parts and finishes it.
pub(crate) fn send(store: &Store, id: SubmissionId, number: u8) -> Result<(), StoreError> {
    let content = content(number);
    let start = store.array_status(id, ARRAY)?;
    if start.stored {
        return Ok(());
    }
    let mut offset = start.committed_bytes;
    while offset < content.len() as u64 {
        let from = usize::try_from(offset).unwrap();
        let to = (from + 128).min(content.len());
        offset = store.append_array_part(id, ARRAY, offset, &content[from..to])?;
    }
    let digest = *blake3::hash(&content).as_bytes();
    store.finish_array(&mira(), id, ARRAY, content.len() as u64, &digest)?;
    Ok(())
}

/// A submission that is complete and queued.
pub(crate) fn queued(store: &Store, number: u8, key: Option<&str>) -> SubmissionId {
    let mut new = sample(number, &format!("request {number}"));
    new.contributor_key = key.map(str::to_owned);
    let id = store.create_submission(&mira(), new).unwrap().id;
    send(store, id, number).unwrap();
    assert_eq!(store.seal(&mira(), id).unwrap(), State::Queued);
    id
}

/// Examines the submission that has waited longest.
pub(crate) fn examine(store: &Store, verdict: Verdict, energy: f64) -> (SubmissionId, Completion) {
    let lease = store.claim_job().expect("a job");
    let done = store
        .complete_examination(&worker(), &lease, outcome(verdict, energy))
        .unwrap();
    (lease.id(), done)
}

pub(crate) fn state(store: &Store, id: SubmissionId) -> State {
    store.get_submission(id).unwrap().state
}

/// The index says what the trail says.
pub(crate) fn assert_index_is_right(store: &Store) {
    assert_eq!(
        store.index_fingerprint().unwrap(),
        store.rebuilt_index_fingerprint().unwrap()
    );
}
