//! The whole way with the service inside this process: real packages, real examinations, a store on disk.

use std::fs;

use tarehouse_client::exit::Exit;
use tarehouse_client::interrupt::Interrupt;

use crate::support::{copy_of, demo_package, edit_manifest, tarehouse, tarehouse_with, text};

fn json(text: &str) -> serde_json::Value {
    serde_json::from_str(text).unwrap_or_else(|error| panic!("{error}: {text}"))
}

#[tokio::test(flavor = "multi_thread")]
async fn submit_report_list_rank_and_fetch_in_one_store() {
    let folder = tempfile::tempdir().unwrap();
    let store = folder.path().join("store");
    let store = text(&store);
    let stable = demo_package("drosmelide-i");
    let unstable = demo_package("drosmelide-v-unstable");
    let misdeclared = demo_package("pelquonol-alpha-unit");
    let broken = copy_of("drosmelide-ii", folder.path());
    edit_manifest(&broken, "formula_units = ", "formula_unitz = ");

    let words = [
        "submit",
        text(&stable),
        text(&unstable),
        text(&misdeclared),
        text(&broken),
        "--local",
        store,
    ];
    let sent = tarehouse(&words).await;
    assert_eq!(sent.exit, Exit::Usage, "{}", sent.err);
    let lines: Vec<serde_json::Value> = sent.out.lines().map(json).collect();
    let words: Vec<&str> = lines
        .iter()
        .map(|line| line["outcome"].as_str().unwrap())
        .collect();
    assert_eq!(words, ["accepted", "held", "rejected", "invalid"]);
    let codes: Vec<u64> = lines
        .iter()
        .map(|line| line["exit_code"].as_u64().unwrap())
        .collect();
    assert_eq!(codes, [0, 4, 3, 2]);
    assert!(sent.err.contains("formula_unitz"), "{}", sent.err);
    let name = lines[0]["submission"]["name"].as_str().unwrap().to_owned();
    let record = lines[0]["submission"]["record"]
        .as_str()
        .unwrap()
        .to_owned();

    // The same folder again is the same submission.
    let again = tarehouse(&["submit", text(&stable), "--local", store]).await;
    assert_eq!(again.exit, Exit::Done);
    assert_eq!(json(&again.out)["submission"]["name"], name.as_str());

    reports_agree(&name, &record, store).await;
    lists_and_ranking(&record, store).await;
    fetched_bytes_are_those_sent(&record, store, folder.path()).await;
}

async fn reports_agree(name: &str, record: &str, store: &str) {
    let of_submission = tarehouse(&["report", name, "--local", store]).await;
    let of_record = tarehouse(&["report", record, "--local", store]).await;
    assert_eq!(of_submission.exit, Exit::Done, "{}", of_submission.err);
    assert_eq!(of_submission.out, of_record.out);
    let package = demo_package("drosmelide-i");
    let here = tarehouse(&["precheck", text(&package), "--format", "json"]).await;
    assert_eq!(
        here.out, of_submission.out,
        "the service says what precheck says"
    );
    let table = tarehouse(&["report", name, "--local", store, "--format", "table"]).await;
    assert!(
        table.out.starts_with("drosmelide · form I"),
        "{}",
        table.out
    );
    let missing = tarehouse(&[
        "report",
        "00000000000000000000000000000000",
        "--local",
        store,
    ])
    .await;
    assert_eq!(missing.exit, Exit::NotFound, "{}", missing.err);
}

async fn lists_and_ranking(record: &str, store: &str) {
    let records = json(&tarehouse(&["list", "--local", store]).await.out);
    assert_eq!(records["records"].as_array().unwrap().len(), 1);
    assert_eq!(records["records"][0]["name"], record);
    let held = tarehouse(&["list", "submissions", "--state", "held", "--local", store]).await;
    assert_eq!(json(&held.out)["submissions"][0]["form"], "V");
    let all = tarehouse(&["list", "submissions", "--local", store, "--format", "table"]).await;
    assert_eq!(all.out.lines().count(), 2 + 3, "{}", all.out);
    let rank = [
        "rank",
        "drosmelide",
        "--temperature",
        "0,150",
        "--local",
        store,
    ];
    let ranked = tarehouse(&rank).await;
    assert_eq!(ranked.exit, Exit::Done, "{}", ranked.err);
    let row = &json(&ranked.out)["tables"][0]["rows"][0];
    assert_eq!(row["form"], "I");
    assert_eq!(row["points"][1]["temperature_k"], 150.0);
    let unknown = tarehouse(&[
        "rank",
        "drosmelide",
        "--level",
        "no such level",
        "--local",
        store,
    ])
    .await;
    assert_eq!(unknown.exit, Exit::NotFound);
    assert!(unknown.err.contains("the levels are"), "{}", unknown.err);
    let outside = [
        "rank",
        "drosmelide",
        "--temperature",
        "9000",
        "--local",
        store,
    ];
    assert_eq!(tarehouse(&outside).await.exit, Exit::Usage);
}

async fn fetched_bytes_are_those_sent(record: &str, store: &str, folder: &std::path::Path) {
    let out = folder.join("out.npy");
    let fetch = ["fetch", record, "--out", text(&out), "--local", store];
    let fetched = tarehouse(&fetch).await;
    assert_eq!(fetched.exit, Exit::Done, "{}", fetched.err);
    let sent = fs::read(demo_package("drosmelide-i").join("constants.npy")).unwrap();
    assert!(fs::read(&out).unwrap() == sent);
    let again = tarehouse(&fetch).await;
    assert_eq!(again.exit, Exit::Usage);
    assert!(again.err.contains("--force"));

    let projected = folder.join("projected.npy");
    let words = [
        "fetch",
        record,
        "--projected",
        "--out",
        text(&projected),
        "--local",
        store,
    ];
    let fetched = tarehouse(&words).await;
    assert_eq!(fetched.exit, Exit::Done, "{}", fetched.err);
    let projected = fs::read(projected).unwrap();
    assert_eq!(projected.len(), sent.len());
    assert!(projected != sent, "projection changes something");

    let manifest = folder.join("manifest.toml");
    let words = [
        "fetch",
        record,
        "--array",
        "package.toml",
        "--out",
        text(&manifest),
        "--local",
        store,
    ];
    assert_eq!(tarehouse(&words).await.exit, Exit::Done);
    assert_eq!(
        fs::read(manifest).unwrap(),
        fs::read(demo_package("drosmelide-i").join("package.toml")).unwrap()
    );
}

#[tokio::test(flavor = "multi_thread")]
async fn every_violation_is_listed_and_nothing_is_sent() {
    let folder = tempfile::tempdir().unwrap();
    let store = folder.path().join("store");
    let package = copy_of("drosmelide-i", folder.path());
    edit_manifest(&package, "unit = \"eV/angstrom^2\"", "unit = \"furlong\"");
    edit_manifest(
        &package,
        "length_unit = \"angstrom\"",
        "length_unit = \"cubit\"",
    );
    fs::remove_file(package.join("constants.npy")).unwrap();
    let checked = tarehouse(&["precheck", text(&package)]).await;
    assert_eq!(checked.exit, Exit::Usage);
    assert!(checked.out.is_empty());
    for part in [
        "constants.unit",
        "crystal.length_unit",
        "constants.npy: the file is missing",
    ] {
        assert!(
            checked.err.contains(part),
            "{part} is missing from\n{}",
            checked.err
        );
    }
    let sent = tarehouse(&["submit", text(&package), "--local", text(&store)]).await;
    assert_eq!(sent.exit, Exit::Usage);
    let listed = tarehouse(&["list", "submissions", "--local", text(&store)]).await;
    assert_eq!(
        json(&listed.out)["submissions"].as_array().unwrap().len(),
        0
    );
}

#[tokio::test(flavor = "multi_thread")]
async fn an_interrupted_submit_says_how_to_go_on_and_its_work_survives() {
    let folder = tempfile::tempdir().unwrap();
    let store = folder.path().join("store");
    let (interrupt, switch) = Interrupt::with_switch();
    switch.send_replace(true);
    let package = demo_package("drosmelide-i");
    let words = ["submit", text(&package), "--local", text(&store)];
    let stopped = tarehouse_with(&words, interrupt).await;
    assert_eq!(stopped.exit, Exit::Interrupted);
    assert!(stopped.err.contains("tarehouse submit"), "{}", stopped.err);

    let queued = tarehouse(&[
        "submit",
        text(&package),
        "--no-wait",
        "--local",
        text(&store),
    ])
    .await;
    assert_eq!(queued.exit, Exit::Done, "{}", queued.err);
    let name = json(&queued.out)["submission"]["name"]
        .as_str()
        .unwrap()
        .to_owned();
    let watched = tarehouse(&["watch", &name, "--local", text(&store)]).await;
    assert_eq!(watched.exit, Exit::Done, "{}", watched.err);
    assert_eq!(json(&watched.out)["state"], "STATE_ACCEPTED");
}

#[tokio::test(flavor = "multi_thread")]
async fn a_rejected_submission_is_taken_back_once_and_an_accepted_one_stays() {
    let folder = tempfile::tempdir().unwrap();
    let store = folder.path().join("store");
    let store = text(&store);
    let mut names = Vec::new();
    for (package, exit) in [
        ("pelquonol-alpha-unit", Exit::Rejected),
        ("pelquonol-alpha", Exit::Done),
    ] {
        let sent = tarehouse(&["submit", text(&demo_package(package)), "--local", store]).await;
        assert_eq!(sent.exit, exit, "{}", sent.err);
        let name = json(&sent.out)["submission"]["name"]
            .as_str()
            .unwrap()
            .to_owned();
        names.push(name);
    }
    let [rejected, accepted] = names.as_slice() else {
        panic!("two were sent");
    };
    let id = rejected.trim_start_matches("submissions/");
    let words = ["withdraw", id, "--reason", "wrong unit", "--local", store];
    let withdrawn = tarehouse(&words).await;
    assert_eq!(withdrawn.exit, Exit::Done, "{}", withdrawn.err);
    assert_eq!(json(&withdrawn.out)["state"], "STATE_WITHDRAWN");
    assert_eq!(tarehouse(&words).await.exit, Exit::Conflict, "only once");
    let refused = tarehouse(&["withdraw", accepted, "--local", store]).await;
    assert_eq!(refused.exit, Exit::Conflict);
    assert!(refused.err.contains("STATE_FORBIDS"), "{}", refused.err);
    let left = tarehouse(&[
        "list",
        "submissions",
        "--state",
        "accepted",
        "--local",
        store,
    ])
    .await;
    assert_eq!(json(&left.out)["submissions"][0]["name"], accepted.as_str());
}

#[tokio::test(flavor = "multi_thread")]
async fn reading_makes_no_store() {
    let folder = tempfile::tempdir().unwrap();
    let store = folder.path().join("no-such-store");
    for words in [
        &["list"][..],
        &["rank", "drosmelide"],
        &["report", "1"],
        &["watch", "1"],
        &["withdraw", "1"],
        &["fetch", "1", "--out", "never-written"],
    ] {
        let words = [words, &["--local", text(&store)]].concat();
        let ended = tarehouse(&words).await;
        assert_eq!(ended.exit, Exit::NotFound, "{words:?}");
        assert!(ended.err.contains("no store"), "{}", ended.err);
    }
    assert!(!store.exists());
}

#[tokio::test(flavor = "multi_thread")]
async fn a_policy_file_governs_the_precheck() {
    let folder = tempfile::tempdir().unwrap();
    let policy = folder.path().join("policy.toml");
    fs::write(&policy, "not_a_threshold = 1\n").unwrap();
    let package = demo_package("drosmelide-i");
    let words = ["precheck", text(&package), "--policy", text(&policy)];
    let refused = tarehouse(&words).await;
    assert_eq!(refused.exit, Exit::Usage);
    assert!(
        refused.err.contains("policy.toml is not a policy"),
        "{}",
        refused.err
    );

    let own = format!("# stricter\n{}", tarehouse_assay::policy::BUILT_IN_TEXT);
    fs::write(&policy, &own).unwrap();
    let examined = tarehouse(&words).await;
    assert_eq!(examined.exit, Exit::Done, "{}", examined.err);
    let digest = blake3::hash(own.as_bytes()).to_hex().to_string();
    assert_eq!(json(&examined.out)["policy_digest"], digest.as_str());
}

#[tokio::test(flavor = "multi_thread")]
async fn the_demo_tells_verdicts_and_changes_of_order() {
    let folder = tempfile::tempdir().unwrap();
    let keep = folder.path().join("kept");
    let shown = tarehouse(&["demo", "--keep", text(&keep)]).await;
    assert_eq!(shown.exit, Exit::Done, "{}", shown.err);
    for word in ["ACCEPTED", "HELD", "REJECTED", "Order changes between"] {
        assert!(
            shown.out.contains(word),
            "{word} is missing from\n{}",
            shown.out
        );
    }
    for compound in ["Ranking of drosmelide", "Ranking of pelquonol"] {
        assert!(shown.out.contains(compound), "{}", shown.out);
    }
    assert!(shown.out.lines().all(|line| line.chars().count() <= 80));
    let again = tarehouse(&["demo", "--keep", text(&keep)]).await;
    assert_eq!(again.exit, Exit::Usage);
    let records = tarehouse(&["list", "--local", text(&keep)]).await;
    assert!(!json(&records.out)["records"].as_array().unwrap().is_empty());
}
