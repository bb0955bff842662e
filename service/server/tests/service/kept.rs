//! What is kept of an examination: reports of every verdict, projected constants of what may reach the catalogue; and
//! a ranking that is refused where it would not be whole.

use tarehouse_assay::report::Verdict;
use tarehouse_proto::package::npy;
use tarehouse_proto::v1;
use tonic::{Code, Status};

use crate::support::{ARRAY, Fake, House, Pack, assert_refused, fetch, report};

async fn projected(house: &House, name: &str) -> Result<Vec<f64>, Status> {
    let (header, bytes) = fetch(house, name, "", v1::Treatment::Projected, 0).await?;
    assert_eq!(header.array, ARRAY);
    assert_eq!(header.size_bytes, bytes.len() as u64);
    assert_eq!(header.digest, blake3::hash(&bytes).to_hex().to_string());
    Ok(npy::read(&bytes, Some(&[2, 4, 3, 4, 3])).unwrap().values)
}

/// Refused with a reason, and with words that say why.
fn assert_not_projected(answer: Result<Vec<f64>, Status>, reason: &str, why: &str) {
    let status = answer.unwrap_err();
    assert_refused(&status, Code::NotFound, reason);
    assert!(status.message().contains(why), "{}", status.message());
}

#[tokio::test]
async fn held_and_rejected_submissions_keep_their_reports() {
    let house = House::new(Fake::judging(|submission, policy, _| {
        match submission.identity.form.as_str() {
            "hold" => report(submission, policy, Verdict::Hold),
            "reject" => report(submission, policy, Verdict::Reject),
            _ => panic!("as the test wishes"),
        }
    }))
    .await;
    let packs = ["hold", "reject", "crash"].map(|form| Pack::new("velnaric acid", form, -10.0));
    let draft = house.create(&packs[0]).await;
    assert_not_projected(
        projected(&house, &draft.name).await,
        "ARRAY_NOT_FOUND",
        "has not been examined",
    );
    let mut names = Vec::new();
    for pack in &packs {
        let done = house.submit(pack).await;
        let found = house.report(&done.name).await.unwrap();
        assert_eq!(found.package_digest, done.package_digest);
        assert_eq!(found.verdict(), done_verdict(&done, pack));
        let contributed = fetch(&house, &done.name, ARRAY, v1::Treatment::Contributed, 0).await;
        assert_eq!(contributed.unwrap().1, pack.constants);
        names.push(done.name);
    }
    let [held, rejected, crashed] = names.as_slice() else {
        panic!("three were submitted");
    };
    // The test's examiner "projects" by doubling.
    let expected: Vec<f64> = (0..288).map(|k| f64::from(k) * 0.25 - 14.0).collect();
    assert_eq!(projected(&house, held).await.unwrap(), expected);
    let cases = [(rejected, "was rejected"), (crashed, "did not finish")];
    for (name, why) in cases {
        assert_not_projected(projected(&house, name).await, "PROJECTED_NOT_KEPT", why);
    }
    // A rejected one that is withdrawn is told about in the same words.
    let request = v1::WithdrawSubmissionRequest {
        name: rejected.clone(),
        ..Default::default()
    };
    house
        .submissions()
        .withdraw_submission(request)
        .await
        .unwrap();
    assert_not_projected(
        projected(&house, rejected).await,
        "PROJECTED_NOT_KEPT",
        "was rejected",
    );
    assert!(house.report(rejected).await.is_ok());
}

/// What the report must say: an examination that crashed is held by its report.
fn done_verdict(done: &v1::Submission, pack: &Pack) -> v1::Verdict {
    if pack.manifest.contains("form = \"reject\"") {
        assert_eq!(done.state(), v1::State::Rejected);
        return v1::Verdict::Reject;
    }
    assert_eq!(done.state(), v1::State::Held);
    v1::Verdict::Hold
}

#[tokio::test]
async fn a_ranking_of_too_many_records_is_refused() {
    let house = House::with(Fake::accepting(), |config| config.ranked_records_max = 2).await;
    let rank = |compound: &str, constants_level: Option<&str>| {
        let request = v1::RankFormsRequest {
            compound: compound.to_owned(),
            constants_level: constants_level.map(str::to_owned),
            ..Default::default()
        };
        let mut catalogue = house.catalogue();
        async move {
            let answer = catalogue.rank_forms(request).await?;
            Ok::<_, Status>(answer.into_inner().tables)
        }
    };
    for form in ["I", "II"] {
        house.submit(&Pack::new("velnaric acid", form, -10.0)).await;
    }
    house.submit(&Pack::new("another one", "I", -10.0)).await;
    assert_eq!(rank("velnaric acid", None).await.unwrap()[0].rows.len(), 2);
    let mut third = Pack::new("velnaric acid", "III", -10.0);
    third
        .manifest
        .push_str("\n[settings]\nfunctional = \"PBE\"\n");
    house.submit(&third).await;
    let refused = rank("velnaric acid", None).await.unwrap_err();
    assert_refused(&refused, Code::ResourceExhausted, "RANKING_TOO_LARGE");
    assert!(
        refused.message().contains("more than the 2 records"),
        "{}",
        refused.message()
    );
    // A level leaves few enough of them; one that nobody has is an empty ranking of a compound that is known.
    let undeclared = "Undeclared / undeclared  / undeclared / undeclared";
    let tables = rank("velnaric acid", Some(undeclared)).await.unwrap();
    assert_eq!((tables.len(), tables[0].rows.len()), (1, 2));
    assert!(
        rank("velnaric acid", Some("nobody's"))
            .await
            .unwrap()
            .is_empty()
    );
    let unknown = rank("no such compound", Some(undeclared))
        .await
        .unwrap_err();
    assert_refused(&unknown, Code::NotFound, "COMPOUND_NOT_FOUND");
}
