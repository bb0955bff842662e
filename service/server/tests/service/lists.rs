//! Lists, their pages and their tokens.

use std::collections::BTreeSet;

use tarehouse_proto::v1;
use tonic::Code;

use crate::support::{Fake, House, Pack, assert_refused};

#[tokio::test]
async fn submissions_come_in_pages_newest_first() {
    let house = House::new(Fake::accepting()).await;
    let mut names = Vec::new();
    for k in 0..7 {
        let pack = Pack::new("velnaric acid", &format!("form {k}"), -1.0);
        names.push(house.create(&pack).await.name);
    }
    names.reverse();
    let mut request = v1::ListSubmissionsRequest {
        page_size: 3,
        ..Default::default()
    };
    let (mut found, mut pages) = (Vec::new(), 0);
    loop {
        let answer = house
            .submissions()
            .list_submissions(request.clone())
            .await
            .unwrap()
            .into_inner();
        assert!(answer.submissions.len() <= 3);
        found.extend(answer.submissions.into_iter().map(|s| s.name));
        pages += 1;
        request.page_token = answer.next_page_token;
        if request.page_token.is_empty() {
            break;
        }
    }
    assert_eq!(found, names);
    assert!(pages >= 3);
}

#[tokio::test]
async fn lists_of_submissions_keep_to_their_filter() {
    let house = House::new(Fake::accepting()).await;
    for k in 0..7 {
        let key = ["odd", "even"][usize::from(k % 2 == 0)];
        let pack = Pack::keyed("velnaric acid", &format!("form {k}"), -1.0, Some(key));
        house.create(&pack).await;
    }
    let request = v1::ListSubmissionsRequest {
        page_size: 2,
        contributor_key: "even".to_owned(),
        ..Default::default()
    };
    let first = house
        .submissions()
        .list_submissions(request.clone())
        .await
        .unwrap()
        .into_inner();
    assert_eq!(first.submissions.len(), 2);
    assert!(
        first
            .submissions
            .iter()
            .all(|s| s.contributor_key == "even")
    );
    let other = v1::ListSubmissionsRequest {
        page_token: first.next_page_token,
        ..Default::default()
    };
    let status = house
        .submissions()
        .list_submissions(other)
        .await
        .unwrap_err();
    assert_refused(&status, Code::InvalidArgument, "REQUEST_INVALID");

    for (state, count) in [(v1::State::Draft, 7), (v1::State::Queued, 0)] {
        let request = v1::ListSubmissionsRequest {
            state: state.into(),
            ..Default::default()
        };
        let answer = house
            .submissions()
            .list_submissions(request)
            .await
            .unwrap()
            .into_inner();
        assert_eq!(answer.submissions.len(), count);
    }
    let request = v1::ListSubmissionsRequest {
        state: 77,
        ..Default::default()
    };
    let status = house
        .submissions()
        .list_submissions(request)
        .await
        .unwrap_err();
    assert_refused(&status, Code::InvalidArgument, "REQUEST_INVALID");
}

#[tokio::test]
async fn records_come_by_compound_form_and_name() {
    let house = House::new(Fake::accepting()).await;
    for (compound, form) in [("b", "II"), ("a", "I"), ("b", "I"), ("a", "II"), ("c", "I")] {
        house.submit(&Pack::new(compound, form, -1.0)).await;
    }
    let mut request = v1::ListRecordsRequest {
        page_size: 2,
        ..Default::default()
    };
    let mut found = Vec::new();
    loop {
        let answer = house
            .catalogue()
            .list_records(request.clone())
            .await
            .unwrap()
            .into_inner();
        found.extend(answer.records.into_iter().map(|r| (r.compound, r.form)));
        request.page_token = answer.next_page_token;
        if request.page_token.is_empty() {
            break;
        }
    }
    let expected = [("a", "I"), ("a", "II"), ("b", "I"), ("b", "II"), ("c", "I")];
    assert_eq!(found, expected.map(|(c, f)| (c.to_owned(), f.to_owned())));

    let request = v1::ListRecordsRequest {
        form: "I".to_owned(),
        ..Default::default()
    };
    let answer = house
        .catalogue()
        .list_records(request)
        .await
        .unwrap()
        .into_inner();
    assert_eq!(answer.records.len(), 3);

    let mut request = v1::ListCompoundsRequest {
        page_size: 2,
        ..Default::default()
    };
    let mut compounds = Vec::new();
    loop {
        let answer = house
            .catalogue()
            .list_compounds(request.clone())
            .await
            .unwrap()
            .into_inner();
        compounds.extend(answer.compounds);
        request.page_token = answer.next_page_token;
        if request.page_token.is_empty() {
            break;
        }
    }
    let names: Vec<&str> = compounds.iter().map(|c| c.compound.as_str()).collect();
    assert_eq!(names, ["a", "b", "c"]);
    assert_eq!((compounds[0].form_count, compounds[0].record_count), (2, 2));
}

#[tokio::test]
async fn the_server_tells_its_limits_policy_and_names() {
    let house = House::new(Fake::accepting()).await;
    let mut client = v1::server_service_client::ServerServiceClient::new(house.channel.clone());
    let info = client
        .get_server_info(v1::GetServerInfoRequest {})
        .await
        .unwrap()
        .into_inner();
    let policy = tarehouse_assay::Policy::built_in().unwrap();
    assert_eq!(info.policy_text, policy.text);
    assert_eq!(
        info.policy_digest,
        blake3::hash(policy.text.as_bytes()).to_hex().to_string()
    );
    let rules: BTreeSet<&str> = info.rules.iter().map(String::as_str).collect();
    assert!(rules.contains("pair-symmetry") && rules.len() == info.rules.len());
    assert!(
        info.likely_causes
            .iter()
            .any(|cause| cause == "LIKELY_CAUSE_WRONG_UNIT")
    );
    let limits = info.limits.unwrap();
    assert_eq!(limits.chunk_bytes_max, 512 * 1024);
    assert_eq!(limits.upload_streams_max, 16);
}
