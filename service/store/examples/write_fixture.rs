//! Writes the small store that `tests/fixtures/store-vN` keeps: every kind of change in several segments, without the
//! index, which is no part of the format.
//!
//! `cargo run --release -p tarehouse-store --example write_fixture -- FOLDER`; FOLDER must not exist. Ids are random, so
//! no two are alike; `tests/store/fixture.rs` says what is in it. A fixture that is committed is never written again: a
//! changed format gets a folder of its own beside the old one.

use std::error::Error;
use std::path::PathBuf;
use std::sync::Arc;
use std::sync::atomic::{AtomicU64, Ordering};

use tarehouse_assay::report::Verdict;
use tarehouse_store::{
    Actor, DeclaredArray, NewSubmission, Options, Outcome, RecordSummary, Store, StoreError,
    SubmissionId,
};

type Result<T> = std::result::Result<T, Box<dyn Error>>;

const ARRAY: &str = "constants.npy";

fn main() -> Result<()> {
    let folder = std::env::args_os().nth(1).ok_or("a folder is wanted")?;
    let folder = PathBuf::from(folder);
    if folder.exists() {
        return Err("the folder exists".into());
    }
    // 1 December 2026, a second per reading.
    let clock = AtomicU64::new(1_796_083_200_000);
    let options = Options {
        program_version: "0.1.0".to_owned(),
        clock: Arc::new(move || clock.fetch_add(1000, Ordering::Relaxed)),
        segment_bytes_max: 4_000,
        ..Options::default()
    };
    let store = Store::open(&folder, options)?;
    fill(&store)?;
    store.close()?;
    drop(store);
    std::fs::remove_dir_all(folder.join("index"))?;
    std::fs::remove_dir_all(folder.join("temp"))?;
    std::fs::remove_file(folder.join("lock"))?;
    Ok(())
}

/// Sample `number` is the package whose digest is that byte 32 times.
fn fill(store: &Store) -> Result<()> {
    let mira = Actor::new("mira");
    // 1 is superseded by 2 under their common key; 3 is retired by a curator.
    queued(store, 1, Some("mine"))?;
    examined(store, Verdict::Accept, -50.5)?;
    queued(store, 2, Some("mine"))?;
    examined(store, Verdict::Accept, -51.25)?;
    let third = queued(store, 3, None)?;
    examined(store, Verdict::Accept, -40.0)?;
    store.retire(&Actor::new("curator"), third)?;
    queued(store, 4, None)?;
    examined(store, Verdict::Hold, 0.0)?;
    queued(store, 5, None)?;
    examined(store, Verdict::Reject, 0.0)?;
    // 6 crashes until it is held.
    queued(store, 6, None)?;
    for _ in 0..3 {
        let lease = store.claim_job().ok_or("nothing is queued")?;
        store.crash_examination(&worker(), &lease, "out of memory", Some(b"it crashed"))?;
    }
    let seventh = store.create_submission(&mira, sample(7, None))?.id;
    store.withdraw(&mira, seventh, "a better one follows", None)?;
    // 8 stays a draft with half of its array and a second request id, 9 stays queued.
    let eighth = store.create_submission(&mira, sample(8, None))?.id;
    let bytes = content(8);
    let half = bytes.get(..100).unwrap_or_default();
    store.append_array_part(eighth, ARRAY, 0, half)?;
    let mut again = sample(8, None);
    "another request 8".clone_into(&mut again.request_id);
    store.create_submission(&mira, again)?;
    queued(store, 9, None)?;
    Ok(())
}

fn worker() -> Actor {
    Actor::new("worker").under([5; 32])
}

fn content(number: u8) -> Vec<u8> {
    (0..200_u8).map(|k| k.wrapping_mul(3) ^ number).collect()
}

fn sample(number: u8, key: Option<&str>) -> NewSubmission {
    let content = content(number);
    NewSubmission {
        request_id: format!("request {number}"),
        package_digest: [number; 32],
        manifest: format!("number = {number}\n").into_bytes(),
        arrays: vec![DeclaredArray {
            name: ARRAY.to_owned(),
            size: content.len() as u64,
            digest: *blake3::hash(&content).as_bytes(),
        }],
        compound: "Velnaric acid".to_owned(),
        form: "I".to_owned(),
        formula: "C4 H6 O2".to_owned(),
        contributor_key: key.map(str::to_owned),
    }
}

fn queued(
    store: &Store,
    number: u8,
    key: Option<&str>,
) -> std::result::Result<SubmissionId, StoreError> {
    let mira = Actor::new("mira");
    let id = store.create_submission(&mira, sample(number, key))?.id;
    let content = content(number);
    store.append_array_part(id, ARRAY, 0, &content)?;
    let digest = *blake3::hash(&content).as_bytes();
    store.finish_array(&mira, id, ARRAY, content.len() as u64, &digest)?;
    store.seal(&mira, id)?;
    Ok(id)
}

fn examined(store: &Store, verdict: Verdict, energy: f64) -> Result<()> {
    let lease = store.claim_job().ok_or("nothing is queued")?;
    let accepted = verdict == Verdict::Accept;
    let outcome = Outcome {
        report: format!("report {verdict:?} {energy}").into_bytes(),
        projected: (verdict != Verdict::Reject).then(|| vec![7; 50]),
        verdict,
        summary: accepted.then(|| RecordSummary {
            level: "pbe / d4 / plane waves / undeclared".to_owned(),
            energy_level: "pbe0 / d4 / plane waves / undeclared".to_owned(),
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
        }),
    };
    store.complete_examination(&worker(), &lease, outcome)?;
    Ok(())
}
