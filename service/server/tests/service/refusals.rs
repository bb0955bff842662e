//! What is refused, with every reason at once, and what a refusal leaves as it was.

use tarehouse_proto::package::npy;
use tarehouse_proto::v1;
use tonic::Code;
use tonic_types::StatusExt as _;

use crate::support::{Fake, Gate, House, Pack, assert_refused, eventually};

#[tokio::test]
async fn a_malformed_manifest_is_told_all_its_faults() {
    let house = House::new(Fake::accepting()).await;
    let mut pack = Pack::new("velnaric acid", "I", -10.0);
    pack.manifest = pack
        .manifest
        .replace("formula_units = 2", "formula_units = 3\nflavour = \"sour\"")
        .replace("unit = \"eV\"", "unit = \"eW\"")
        .replace("raw = true", "raw = \"yes\"");
    let status = house
        .submissions()
        .create_submission(pack.request())
        .await
        .unwrap_err();
    assert_refused(&status, Code::InvalidArgument, "PACKAGE_INVALID");
    let details = status.get_error_details();
    let fields: Vec<&str> = details
        .bad_request()
        .unwrap()
        .field_violations
        .iter()
        .map(|violation| violation.field.as_str())
        .collect();
    for key in ["identity.flavour", "energy.unit", "constants.raw"] {
        assert!(
            fields.iter().any(|field| field.contains(key)),
            "{key} is not among {fields:?}"
        );
    }
    pack.manifest = "not toml at all".to_owned();
    let status = house
        .submissions()
        .create_submission(pack.request())
        .await
        .unwrap_err();
    assert_refused(&status, Code::InvalidArgument, "PACKAGE_INVALID");
    assert!(drafts(&house).await.is_empty());
}

async fn drafts(house: &House) -> Vec<v1::Submission> {
    let request = v1::ListSubmissionsRequest::default();
    house
        .submissions()
        .list_submissions(request)
        .await
        .unwrap()
        .into_inner()
        .submissions
}

#[tokio::test]
async fn declarations_must_agree_with_the_manifest() {
    let house = House::new(Fake::accepting()).await;
    let good = Pack::new("velnaric acid", "I", -10.0).request();
    let declared = good.arrays[0].clone();
    let change = |f: &dyn Fn(&mut v1::ArrayDeclaration)| {
        let mut array = declared.clone();
        f(&mut array);
        vec![array]
    };
    let cases = [
        vec![],
        vec![declared.clone(), declared.clone()],
        change(&|array| array.name = "other.npy".to_owned()),
        change(&|array| array.size_bytes -= 200),
        change(&|array| array.size_bytes = u64::MAX),
        change(&|array| array.digest = "0".to_owned()),
        change(&|array| array.digest = "G".repeat(64)),
        (0..1000).map(|_| declared.clone()).collect(),
    ];
    for arrays in cases {
        let request = v1::CreateSubmissionRequest {
            arrays,
            ..good.clone()
        };
        let status = house
            .submissions()
            .create_submission(request)
            .await
            .unwrap_err();
        assert_refused(&status, Code::InvalidArgument, "ARRAYS_DISAGREE");
    }
    let request = v1::CreateSubmissionRequest {
        request_id: "7".to_owned(),
        ..good.clone()
    };
    let status = house
        .submissions()
        .create_submission(request)
        .await
        .unwrap_err();
    assert_refused(&status, Code::InvalidArgument, "REQUEST_INVALID");
    assert!(drafts(&house).await.is_empty());
}

#[tokio::test]
async fn validation_keeps_nothing() {
    let house = House::new(Fake::accepting()).await;
    let pack = Pack::new("velnaric acid", "I", -10.0);
    let request = v1::CreateSubmissionRequest {
        validate_only: true,
        request_id: String::new(),
        ..pack.request()
    };
    let answer = house
        .submissions()
        .create_submission(request)
        .await
        .unwrap()
        .into_inner();
    let checked = answer.submission.unwrap();
    assert!(checked.name.is_empty());
    assert!(drafts(&house).await.is_empty());
    assert_eq!(
        house.create(&pack).await.package_digest,
        checked.package_digest
    );
}

#[tokio::test]
async fn a_package_is_submitted_once() {
    let house = House::new(Fake::accepting()).await;
    let pack = Pack::new("velnaric acid", "I", -10.0);
    let request = pack.request();
    let calls: Vec<_> = (0..16)
        .map(|k| {
            let mut submissions = house.submissions();
            // Half of them repeat the request, half ask anew.
            let request = if k % 2 == 0 {
                request.clone()
            } else {
                pack.request()
            };
            tokio::spawn(async move { submissions.create_submission(request).await })
        })
        .collect();
    let mut names = std::collections::BTreeSet::new();
    for call in calls {
        names.insert(
            call.await
                .unwrap()
                .unwrap()
                .into_inner()
                .submission
                .unwrap()
                .name,
        );
    }
    assert_eq!(names.len(), 1);
    let opening = Pack::new("velnaric acid", "III", -10.0).request();
    house
        .submissions()
        .create_submission(opening.clone())
        .await
        .unwrap();
    let other = v1::CreateSubmissionRequest {
        request_id: opening.request_id,
        ..Pack::new("velnaric acid", "II", -10.0).request()
    };
    let status = house
        .submissions()
        .create_submission(other)
        .await
        .unwrap_err();
    assert_refused(&status, Code::AlreadyExists, "REQUEST_ID_CONFLICT");
    let done = house.submit(&pack).await;
    assert!(names.contains(&done.name));
    assert_eq!(house.create(&pack).await.state(), v1::State::Accepted);
}

#[tokio::test]
async fn an_array_that_is_no_package_is_found_at_sealing_and_nothing_is_lost() {
    let house = House::new(Fake::accepting()).await;
    let mut pack = Pack::new("velnaric acid", "I", -10.0);
    let mut values = vec![0.5; 288];
    values[17] = f64::NAN;
    pack.constants = npy::write(&[2, 4, 3, 4, 3], &values);
    let name = house.create(&pack).await.name;
    house.send(pack.frames(&name, 0, 1000)).await.unwrap();
    for _ in 0..2 {
        let status = house.seal(&name).await.unwrap_err();
        assert_refused(&status, Code::InvalidArgument, "PACKAGE_INVALID");
        let details = status.get_error_details();
        let violation = &details.bad_request().unwrap().field_violations[0];
        assert!(violation.field.contains("constants.npy"), "{violation:?}");
        assert!(violation.field.contains("[0, 0, 1, 1, 2]"), "{violation:?}");
    }
    let draft = house.get(&name).await;
    assert_eq!(draft.state(), v1::State::Draft);
    assert_eq!(draft.arrays[0].committed_bytes, pack.constants.len() as u64);
}

#[tokio::test]
async fn names_that_are_none_and_names_of_nothing_are_told_apart() {
    let house = House::new(Fake::accepting()).await;
    let nothing = format!("submissions/{}", "a".repeat(32));
    for (name, code, reason) in [
        ("", Code::InvalidArgument, "REQUEST_INVALID"),
        (
            "submissions/../../etc",
            Code::InvalidArgument,
            "REQUEST_INVALID",
        ),
        (nothing.as_str(), Code::NotFound, "SUBMISSION_NOT_FOUND"),
    ] {
        assert_refused(&house.seal(name).await.unwrap_err(), code, reason);
        assert_refused(&house.report(name).await.unwrap_err(), code, reason);
        let request = v1::GetSubmissionRequest {
            name: name.to_owned(),
        };
        let status = house
            .submissions()
            .get_submission(request)
            .await
            .unwrap_err();
        assert_refused(&status, code, reason);
        let request = v1::WatchSubmissionRequest {
            name: name.to_owned(),
        };
        let status = house
            .submissions()
            .watch_submission(request)
            .await
            .unwrap_err();
        assert_refused(&status, code, reason);
    }
}

#[tokio::test]
async fn a_full_queue_says_when_to_come_back() {
    let gate = Gate::default();
    let house = House::with(Fake::behind(&gate), |config| config.queue_length_max = 1).await;
    let first = house.queue(&Pack::new("velnaric acid", "I", -10.0)).await;
    let pack = Pack::new("velnaric acid", "II", -10.0);
    let name = house.create(&pack).await.name;
    house.send(pack.frames(&name, 0, 1000)).await.unwrap();
    let status = house.seal(&name).await.unwrap_err();
    assert_refused(&status, Code::Unavailable, "QUEUE_FULL");
    assert!(
        status
            .get_details_retry_info()
            .unwrap()
            .retry_delay
            .is_some()
    );
    assert_eq!(house.get(&name).await.state(), v1::State::Draft);
    gate.open();
    house.settled(&first).await;
    eventually(|| async { house.seal(&name).await.ok() }).await;
    assert_eq!(house.settled(&name).await.state(), v1::State::Accepted);
}

#[tokio::test]
async fn drafts_are_counted_per_principal() {
    let house = House::with(Fake::accepting(), |config| {
        config.drafts_per_principal_max = 2;
    })
    .await;
    let packs = ["I", "II", "III"].map(|form| Pack::new("velnaric acid", form, -10.0));
    house.create(&packs[0]).await;
    let second = house.create(&packs[1]).await;
    let status = house
        .submissions()
        .create_submission(packs[2].request())
        .await
        .unwrap_err();
    assert_refused(&status, Code::ResourceExhausted, "DRAFT_QUOTA");
    let details = status.get_error_details();
    assert_eq!(
        details.quota_failure().unwrap().violations[0].subject,
        "principal:local"
    );
    assert!(details.retry_info().is_some());
    // One that is there already is found again, and a place that becomes free is used.
    assert_eq!(house.create(&packs[1]).await.name, second.name);
    let request = v1::WithdrawSubmissionRequest {
        name: second.name,
        ..Default::default()
    };
    house
        .submissions()
        .withdraw_submission(request)
        .await
        .unwrap();
    house.create(&packs[2]).await;
}

#[tokio::test]
async fn a_full_quota_keeps_nobody_from_what_is_there_already() {
    let house = House::with(Fake::accepting(), |config| {
        config.drafts_per_principal_max = 1;
    })
    .await;
    let [record, draft, gone] =
        ["I", "II", "III"].map(|form| Pack::new("velnaric acid", form, -1.0));
    let accepted = house.submit(&record).await;
    assert_eq!(accepted.state(), v1::State::Accepted);
    let create = |request: v1::CreateSubmissionRequest| {
        let mut submissions = house.submissions();
        async move {
            let answer = submissions.create_submission(request).await?;
            Ok::<_, tonic::Status>(answer.into_inner().submission.unwrap())
        }
    };
    let withdrawn_request = gone.request();
    let withdrawn = create(withdrawn_request.clone()).await.unwrap();
    let request = v1::WithdrawSubmissionRequest {
        name: withdrawn.name.clone(),
        ..Default::default()
    };
    house
        .submissions()
        .withdraw_submission(request)
        .await
        .unwrap();
    house.create(&draft).await;
    let full = create(Pack::new("velnaric acid", "IV", -1.0).request()).await;
    assert_refused(&full.unwrap_err(), Code::ResourceExhausted, "DRAFT_QUOTA");
    // By its package, and by its request id alone where the package was withdrawn.
    let again = create(record.request()).await.unwrap();
    assert_eq!(
        (&again.name, again.state()),
        (&accepted.name, v1::State::Accepted)
    );
    let again = create(withdrawn_request.clone()).await.unwrap();
    assert_eq!(
        (&again.name, again.state()),
        (&withdrawn.name, v1::State::Withdrawn)
    );
    let anew = create(gone.request()).await;
    assert_refused(&anew.unwrap_err(), Code::ResourceExhausted, "DRAFT_QUOTA");
    // A request id that stands for another package is that conflict, not a matter of the quota.
    let mut taken = draft.request();
    taken.request_id = withdrawn_request.request_id;
    let conflict = create(taken).await;
    assert_refused(
        &conflict.unwrap_err(),
        Code::AlreadyExists,
        "REQUEST_ID_CONFLICT",
    );
}

#[tokio::test]
async fn a_request_id_that_found_a_package_is_taken_after_a_restart_too() {
    let house = House::new(Fake::accepting()).await;
    let [first, other] = ["I", "II"].map(|form| Pack::new("velnaric acid", form, -10.0));
    let name = house.create(&first).await.name;
    let second_request = first.request();
    let found = house
        .submissions()
        .create_submission(second_request.clone())
        .await
        .unwrap();
    assert_eq!(found.into_inner().submission.unwrap().name, name);
    let mut reused = other.request();
    reused.request_id.clone_from(&second_request.request_id);
    let refused = house.submissions().create_submission(reused.clone()).await;
    assert_refused(
        &refused.unwrap_err(),
        Code::AlreadyExists,
        "REQUEST_ID_CONFLICT",
    );
    house.service.shutdown().await.unwrap();
    let house = House::again(house.folder, Fake::accepting(), |_| {}).await;
    let refused = house.submissions().create_submission(reused).await;
    assert_refused(
        &refused.unwrap_err(),
        Code::AlreadyExists,
        "REQUEST_ID_CONFLICT",
    );
    let again = house.submissions().create_submission(second_request).await;
    assert_eq!(again.unwrap().into_inner().submission.unwrap().name, name);
}

#[tokio::test]
async fn a_withdrawal_is_guarded_by_the_etag_and_ends_a_watch() {
    let gate = Gate::default();
    let house = House::new(Fake::behind(&gate)).await;
    let name = house.queue(&Pack::new("velnaric acid", "I", -10.0)).await;
    let etag = house.get(&name).await.etag;
    let withdraw = |etag: &str| {
        let request = v1::WithdrawSubmissionRequest {
            name: name.clone(),
            etag: etag.to_owned(),
            reason: "a better one follows".to_owned(),
        };
        let mut submissions = house.submissions();
        async move { submissions.withdraw_submission(request).await }
    };
    let status = withdraw("stale").await.unwrap_err();
    assert_refused(&status, Code::Aborted, "ETAG_MISMATCH");
    let (events, answer) = tokio::join!(house.settled(&name), withdraw(&etag));
    assert_eq!(
        answer.unwrap().into_inner().submission.unwrap().state(),
        v1::State::Withdrawn
    );
    assert_eq!(events.state(), v1::State::Withdrawn);
    // The examination that was running meanwhile changes nothing.
    gate.open();
    house.service.shutdown().await.unwrap();
    let store = tarehouse_store::Store::open(
        house.folder.path().join("store"),
        tarehouse_store::Options::default(),
    )
    .unwrap();
    let id = name.strip_prefix("submissions/").unwrap().parse().unwrap();
    let reason = store.get_submission(id).unwrap().withdrawal_reason;
    assert_eq!(reason.as_deref(), Some("a better one follows"));
    store.close().unwrap();
    drop(store);
    let house = House::again(house.folder, Fake::accepting(), |_| {}).await;
    assert_eq!(house.get(&name).await.state(), v1::State::Withdrawn);
    let status = house.seal(&name).await.unwrap_err();
    assert_refused(&status, Code::FailedPrecondition, "STATE_FORBIDS");
}
