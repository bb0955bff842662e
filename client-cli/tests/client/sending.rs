//! Sending through a service that fails: nothing is lost, nothing is sent twice, nothing is tried for ever.

use std::collections::{BTreeMap, VecDeque};
use std::sync::{Arc, Mutex};

use clap::Parser as _;
use tarehouse_client::arguments::{Arguments, Command};
use tarehouse_client::commands::fetch::to_file;
use tarehouse_client::commands::submit::{send_package, submit_all};
use tarehouse_client::commands::{Context, ResumeNote};
use tarehouse_client::console::{Console, Traits};
use tarehouse_client::exit::Exit;
use tarehouse_client::interrupt::Interrupt;
use tarehouse_client::package_folder::PackageFiles;
use tarehouse_client::progress::Bars;
use tarehouse_client::retry::Pause;
use tarehouse_client::upload::CHUNK_BYTES;
use tarehouse_client::waiting::until_final;
use tarehouse_proto::v1::watch_submission_response::Event;
use tarehouse_proto::v1::{FetchArrayRequest, Heartbeat, State};

use crate::fake::{Fake, NAME, Script, state};
use crate::support::{demo_package, text};

fn noted() -> Pause {
    Pause::Noted(Arc::new(Mutex::new(Vec::new())))
}

/// A package of one array of `size` bytes.
fn files(size: usize) -> PackageFiles {
    let bytes: Vec<u8> = (0..249_u8).cycle().take(size).collect();
    PackageFiles {
        folder: "package".to_owned(),
        manifest: "".into(),
        arrays: BTreeMap::from([("constants.npy".to_owned(), bytes.into())]),
    }
}

#[tokio::test]
async fn after_a_cut_the_upload_goes_on_from_what_has_arrived() {
    let fake = Fake::with(Script {
        cuts: VecDeque::from([2, 0, 1]),
        ..Script::default()
    });
    let files = files(5 * CHUNK_BYTES + 17);
    let session = fake.session().await;
    let sent = send_package(&session, &files, &Bars::new(false), &noted()).await;
    assert_eq!(sent.unwrap().state(), State::Queued);
    let script = fake.0.lock().unwrap();
    assert_eq!(script.arrived, files.arrays["constants.npy"]);
    let chunk = CHUNK_BYTES as u64;
    assert_eq!(script.offsets, [0, 2 * chunk, 2 * chunk, 3 * chunk]);
}

#[tokio::test]
async fn an_upload_that_never_advances_is_given_up() {
    let fake = Fake::with(Script {
        cuts: VecDeque::from([0; 100]),
        ..Script::default()
    });
    let session = fake.session().await;
    let sent = send_package(&session, &files(10), &Bars::new(false), &noted()).await;
    assert_eq!(sent.unwrap_err().exit(), Exit::Unavailable);
    assert!(fake.0.lock().unwrap().offsets.len() < 20);
}

#[tokio::test]
async fn damage_on_the_way_is_sent_again_and_another_refusal_is_final() {
    let fake = Fake::with(Script {
        refusals: VecDeque::from(["CHECKSUM_MISMATCH", "DIGEST_MISMATCH"]),
        ..Script::default()
    });
    let session = fake.session().await;
    let sent = send_package(&session, &files(10), &Bars::new(false), &noted()).await;
    assert!(sent.is_ok());
    // Ten bytes had arrived after the first refusal; the wrong digest makes all of them suspect.
    assert_eq!(fake.0.lock().unwrap().offsets, [0, 10, 0]);

    let fake = Fake::with(Script {
        refusals: VecDeque::from(["SIZE_EXCEEDED"]),
        ..Script::default()
    });
    let session = fake.session().await;
    let sent = send_package(&session, &files(10), &Bars::new(false), &noted()).await;
    assert_eq!(sent.unwrap_err().exit(), Exit::Usage);
}

#[tokio::test]
async fn one_request_id_serves_all_attempts_at_a_create() {
    let fake = Fake::with(Script {
        away: 3,
        ..Script::default()
    });
    let session = fake.session().await;
    send_package(&session, &files(1), &Bars::new(false), &noted())
        .await
        .unwrap();
    let script = fake.0.lock().unwrap();
    assert_eq!(script.request_ids.len(), 4);
    assert!(
        script
            .request_ids
            .iter()
            .all(|id| *id == script.request_ids[0])
    );
    assert!(uuid::Uuid::parse_str(&script.request_ids[0]).is_ok());
}

#[tokio::test]
async fn a_full_queue_is_waited_for_as_long_as_it_asks() {
    let fake = Fake::with(Script {
        full: 30,
        ..Script::default()
    });
    let session = fake.session().await;
    let pauses = Arc::new(Mutex::new(Vec::new()));
    let pause = Pause::Noted(Arc::clone(&pauses));
    send_package(&session, &files(1), &Bars::new(false), &pause)
        .await
        .unwrap();
    let pauses = pauses.lock().unwrap();
    assert_eq!(pauses.len(), 30);
    assert!(pauses.iter().all(|pause| pause.as_secs() == 5));
}

#[tokio::test]
async fn a_watch_that_ends_early_is_opened_again() {
    let fake = Fake::with(Script {
        watches: VecDeque::from([
            vec![state(State::Queued), Event::Heartbeat(Heartbeat {})],
            vec![],
            vec![state(State::Queued), state(State::Held)],
        ]),
        ..Script::default()
    });
    let session = fake.session().await;
    let seen = until_final(&session, NAME, &Bars::new(false), None, &noted()).await;
    assert_eq!(seen.unwrap().state(), State::Held);
}

fn wanted() -> FetchArrayRequest {
    FetchArrayRequest {
        name: "records/1".to_owned(),
        array: "constants.npy".to_owned(),
        ..FetchArrayRequest::default()
    }
}

#[tokio::test]
async fn a_cut_fetch_goes_on_and_a_wrong_digest_writes_nothing() {
    let file: Vec<u8> = (0..100_000_u32).flat_map(u32::to_le_bytes).collect();
    let folder = tempfile::tempdir().unwrap();
    let out = folder.path().join("out.npy");
    let fake = Fake::with(Script {
        file_digest: blake3::hash(&file).to_hex().to_string(),
        file: file.clone(),
        fetch_cuts: VecDeque::from([1000, 1000, 70_000]),
        ..Script::default()
    });
    let session = fake.session().await;
    let bars = Bars::new(false);
    to_file(&session, wanted(), &out, false, &bars, &noted())
        .await
        .unwrap();
    assert!(std::fs::read(&out).unwrap() == file);
    assert_eq!(fake.0.lock().unwrap().offsets, [0, 1000, 1000, 70_000]);

    let other = folder.path().join("other.npy");
    fake.0.lock().unwrap().file_digest = "00".repeat(32);
    let damaged = to_file(&session, wanted(), &other, false, &bars, &noted()).await;
    assert_eq!(damaged.unwrap_err().exit(), Exit::Internal);
    assert_eq!(
        std::fs::read_dir(folder.path()).unwrap().count(),
        1,
        "no other file is left"
    );
}

#[tokio::test]
async fn a_lost_service_is_not_tried_again_for_every_folder() {
    let fake = Fake::with(Script {
        away: usize::MAX,
        ..Script::default()
    });
    let session = fake.session().await;
    let package = demo_package("drosmelide-i");
    let words = [
        "tarehouse",
        "submit",
        text(&package),
        text(&package),
        text(&package),
    ];
    let Command::Submit(args) = Arguments::try_parse_from(words).unwrap().command else {
        panic!("not submit");
    };
    let sink = || Box::new(std::io::sink());
    let mut console = Console::new(sink(), sink(), Traits::pipes());
    let mut context = Context {
        console: &mut console,
        server_from_environment: None,
        pause: noted(),
        interrupt: Interrupt::never(),
    };
    let outcomes = submit_all(&session, &mut context, &args, &ResumeNote::default())
        .await
        .unwrap();
    assert_eq!(outcomes.len(), 3);
    assert!(
        outcomes
            .iter()
            .all(|outcome| outcome.exit == Exit::Unavailable)
    );
    let script = fake.0.lock().unwrap();
    let first = &script.request_ids[0];
    assert!(
        script.request_ids.iter().all(|id| id == first),
        "only the first folder was tried"
    );
}
