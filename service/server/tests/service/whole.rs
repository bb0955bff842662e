//! The whole path of a package, from its creation to the ranking.

use std::sync::Arc;

use prost::Message as _;
use tarehouse_assay::report::Verdict;
use tarehouse_proto::package::npy;
use tarehouse_proto::v1;
use tarehouse_proto::v1::watch_submission_response::Event;
use tonic::{Code, Status};

use crate::support::{ARRAY, Fake, Gate, House, Pack, assert_refused, fetch, report};

#[tokio::test]
async fn a_package_goes_from_draft_to_record() {
    let gate = Gate::default();
    let house = House::new(Fake::behind(&gate)).await;
    let pack = Pack::new("velnaric acid", "I", -10.0);
    let draft = house.create(&pack).await;
    assert_eq!(draft.state(), v1::State::Draft);
    assert_eq!(
        (draft.compound.as_str(), draft.form.as_str()),
        ("velnaric acid", "I")
    );
    assert_eq!(
        (draft.formula.as_str(), draft.contributor.as_str()),
        ("F N", "local")
    );
    assert!(house.get(&draft.name).await.record.is_empty());
    let missing = house.report(&draft.name).await.unwrap_err();
    assert_refused(&missing, Code::NotFound, "REPORT_NOT_FOUND");

    let array = house.send(pack.frames(&draft.name, 0, 700)).await.unwrap();
    assert_eq!(array.committed_bytes, pack.constants.len() as u64);
    let queued = house.seal(&draft.name).await.unwrap();
    assert_eq!(queued.state(), v1::State::Queued);
    assert_ne!(queued.etag, draft.etag);

    // The examiner waits at the gate: the watch shows it, then sees it end.
    let request = v1::WatchSubmissionRequest {
        name: draft.name.clone(),
    };
    let mut watch = house
        .submissions()
        .watch_submission(request)
        .await
        .unwrap()
        .into_inner();
    let first = watch.message().await.unwrap().unwrap().event.unwrap();
    assert!(
        matches!(&first, Event::Submission(s) if s.state() == v1::State::Queued),
        "{first:?}"
    );
    loop {
        match watch.message().await.unwrap().unwrap().event.unwrap() {
            Event::Progress(progress) if progress.stage == "waiting" => {
                assert_eq!((progress.done, progress.total, progress.attempt), (3, 7, 1));
                break;
            }
            Event::Progress(_) | Event::Heartbeat(_) => {}
            Event::Submission(submission) => panic!("{submission:?} before the gate was opened"),
        }
    }
    gate.open();
    let done = house.settled(&draft.name).await;
    assert_eq!(done.state(), v1::State::Accepted);
    assert_eq!(done.verdict(), v1::Verdict::Accept);
    while watch.message().await.unwrap().is_some() {}

    check_record(&house, &draft, &done).await;
    house.service.shutdown().await.unwrap();
}

/// Report and record of an accepted submission.
async fn check_record(house: &House, draft: &v1::Submission, done: &v1::Submission) {
    let found = house.report(&draft.name).await.unwrap();
    let by_record = house.report(&done.record).await.unwrap();
    assert_eq!(found.encode_to_vec(), by_record.encode_to_vec());
    assert_eq!(found.package_digest, draft.package_digest);

    let request = v1::GetRecordRequest {
        name: done.record.clone(),
    };
    let record = house
        .catalogue()
        .get_record(request)
        .await
        .unwrap()
        .into_inner()
        .record
        .unwrap();
    assert_eq!(record.submission, draft.name);
    assert_eq!(
        (record.atom_count, record.cell_count, record.formula_units),
        (4, 2, 2)
    );
    assert_eq!(record.cell_protocol(), v1::CellProtocol::Relaxed);
    assert_eq!(record.caution_count, 1);
    assert_eq!(
        record.constants_level,
        "undeclared / undeclared / undeclared / undeclared"
    );
    assert!((record.bracket_half_width_kj_per_mol.unwrap() - 0.2).abs() < 1e-9);
}

#[tokio::test]
async fn verdicts_lead_to_their_states() {
    let house = House::new(Fake::judging(|submission, policy, _| {
        let verdict = match submission.identity.form.as_str() {
            "hold" => Verdict::Hold,
            _ => Verdict::Reject,
        };
        report(submission, policy, verdict)
    }))
    .await;
    for (form, state) in [("hold", v1::State::Held), ("reject", v1::State::Rejected)] {
        let done = house.submit(&Pack::new("velnaric acid", form, -10.0)).await;
        assert_eq!(done.state(), state);
        assert_eq!(done.verdict_reasons, ["As the test wishes."]);
        assert!(done.record.is_empty());
        let name = done.name.replace("submissions/", "records/");
        let request = v1::GetRecordRequest { name };
        let status = house.catalogue().get_record(request).await.unwrap_err();
        assert_refused(&status, Code::NotFound, "RECORD_NOT_FOUND");
    }
}

async fn rank(house: &House, temperatures_k: Vec<f64>) -> Result<Vec<v1::RankTable>, Status> {
    let request = v1::RankFormsRequest {
        compound: "Velnaric  acid".to_owned(),
        temperatures_k,
        ..v1::RankFormsRequest::default()
    };
    Ok(house
        .catalogue()
        .rank_forms(request)
        .await?
        .into_inner()
        .tables)
}

#[tokio::test]
async fn forms_are_ranked_and_change_places_with_temperature() {
    let house = House::new(Fake::accepting()).await;
    let none = rank(&house, vec![]).await.unwrap_err();
    assert_refused(&none, Code::NotFound, "COMPOUND_NOT_FOUND");
    // F(I) = −10 + 2 − 1e−5 T², F(II) = −9.5 + 2 − 2e−5 T²: they cross at T = √(0.5/1e−5) = 223.6 K.
    house.submit(&Pack::new("velnaric acid", "I", -10.0)).await;
    house.submit(&Pack::new("velnaric acid", "II", -9.5)).await;
    house
        .submit(&Pack::new("another compound", "I", -99.0))
        .await;
    let tables = rank(&house, vec![0.0, 223.0, 224.0, 300.0]).await.unwrap();
    assert_eq!(tables.len(), 1);
    let rows = &tables[0].rows;
    assert_eq!([rows[0].form.as_str(), rows[1].form.as_str()], ["I", "II"]);
    let ranks = |row: usize| rows[row].points.iter().map(|p| p.rank).collect::<Vec<_>>();
    assert_eq!((ranks(0), ranks(1)), (vec![1, 1, 2, 2], vec![2, 2, 1, 1]));
    let above = rows[1].points[1].relative_kj_per_mol.unwrap();
    assert!(
        (above - (0.5 - 1e-5 * 223.0 * 223.0)).abs() < 1e-9,
        "{above}"
    );
    assert_eq!(
        rank(&house, vec![]).await.unwrap()[0].rows[0].points.len(),
        2
    );
    let outside = rank(&house, vec![10.0, 1e6]).await.unwrap_err();
    assert_refused(&outside, Code::InvalidArgument, "TEMPERATURE_OUTSIDE");
}

#[tokio::test]
async fn what_is_stored_can_be_fetched() {
    let house = House::new(Fake::accepting()).await;
    let pack = Pack::new("velnaric acid", "I", -10.0);
    let draft = house.create(&pack).await;
    let early = fetch(&house, &draft.name, ARRAY, v1::Treatment::Contributed, 0)
        .await
        .unwrap_err();
    assert_refused(&early, Code::NotFound, "ARRAY_NOT_FOUND");
    let done = house.submit(&pack).await;
    let as_sent = v1::Treatment::Contributed;
    for name in [&done.name, &done.record] {
        let (header, bytes) = fetch(&house, name, ARRAY, as_sent, 0).await.unwrap();
        assert_eq!(bytes, pack.constants);
        assert_eq!(header.digest, pack.digest());
        assert_eq!(header.size_bytes, pack.constants.len() as u64);
    }
    let (_, manifest) = fetch(&house, &done.name, "package.toml", as_sent, 5)
        .await
        .unwrap();
    assert_eq!(manifest, &pack.manifest.as_bytes()[5..]);
    for offset in [1, 1000, pack.constants.len()] {
        let found = fetch(&house, &done.name, ARRAY, as_sent, offset as u64)
            .await
            .unwrap();
        assert_eq!(found.1, &pack.constants[offset..]);
    }
    let beyond = pack.constants.len() as u64 + 1;
    let status = fetch(&house, &done.name, ARRAY, as_sent, beyond)
        .await
        .unwrap_err();
    assert_refused(&status, Code::InvalidArgument, "REQUEST_INVALID");
    let status = fetch(&house, &done.name, "other.npy", as_sent, 0)
        .await
        .unwrap_err();
    assert_refused(&status, Code::NotFound, "ARRAY_NOT_FOUND");

    let (header, bytes) = fetch(&house, &done.name, "", v1::Treatment::Projected, 0)
        .await
        .unwrap();
    assert_eq!(header.array, ARRAY);
    assert_eq!(header.digest, blake3::hash(&bytes).to_hex().to_string());
    let values = npy::read(&bytes, Some(&[2, 4, 3, 4, 3])).unwrap().values;
    // The test's examiner "projects" by doubling.
    let expected: Vec<f64> = (0..288).map(|k| f64::from(k) * 0.25 - 14.0).collect();
    assert_eq!(values, expected);
    let status = fetch(
        &house,
        &done.name,
        "package.toml",
        v1::Treatment::Projected,
        0,
    )
    .await
    .unwrap_err();
    assert_refused(&status, Code::InvalidArgument, "REQUEST_INVALID");
}

#[tokio::test]
async fn a_newer_accepted_submission_with_the_same_key_retires_the_older() {
    let house = House::new(Fake::accepting()).await;
    let older = house
        .submit(&Pack::keyed("velnaric acid", "I", -10.0, Some("mine")))
        .await;
    let newer = house
        .submit(&Pack::keyed("velnaric acid", "I", -11.0, Some("mine")))
        .await;
    assert_eq!(house.get(&older.name).await.state(), v1::State::Retired);
    let tables = rank(&house, vec![0.0]).await.unwrap();
    assert_eq!(tables[0].rows.len(), 1);
    assert_eq!(tables[0].rows[0].record, newer.record);
}

#[tokio::test]
async fn the_examination_of_the_house_gives_a_verdict() {
    let house = House::new(Arc::new(tarehouse_server::Assay)).await;
    // Constants that grow from −7 to 29 eV/Å² in the order of the file: no crystal has such.
    let done = house.submit(&Pack::new("velnaric acid", "I", -10.0)).await;
    assert_eq!(done.state(), v1::State::Rejected);
    let report = house.report(&done.name).await.unwrap();
    assert_eq!(report.verdict(), v1::Verdict::Reject);
    assert_eq!(report.package_digest, done.package_digest);
    let sums = report
        .findings
        .iter()
        .find(|f| f.rule == "translation-sum-displaced")
        .unwrap();
    assert_eq!(sums.severity(), v1::Severity::Fail);
    assert_eq!(done.verdict_reasons, report.verdict_reasons);
}
