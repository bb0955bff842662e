//! Crashes, restarts, draining, and what every call passes through.

use std::sync::Arc;
use std::sync::atomic::{AtomicUsize, Ordering};
use std::time::{Duration, Instant};

use tarehouse_assay::report::Verdict;
use tarehouse_proto::v1;
use tarehouse_proto::v1::submission_service_client::SubmissionServiceClient;
use tarehouse_proto::v1::watch_submission_response::Event;
use tarehouse_server::{Config, ServeError, run_with};
use tokio::sync::{mpsc, oneshot};
use tokio_stream::wrappers::ReceiverStream;
use tonic::transport::{Channel, Endpoint};
use tonic::{Code, Request};
use tonic_health::ServingStatus;
use tonic_health::pb::HealthCheckRequest;
use tonic_health::pb::health_client::HealthClient;

use crate::support::{
    Fake, Gate, House, PATIENCE, Pack, assert_refused, chunk, eventually, opening, report,
};

fn crashing(times: usize) -> (Arc<AtomicUsize>, Arc<dyn tarehouse_server::Examiner>) {
    let attempts = Arc::new(AtomicUsize::new(0));
    let counted = Arc::clone(&attempts);
    let examiner = Fake::judging(move |submission, policy, _| {
        let attempt = counted.fetch_add(1, Ordering::SeqCst);
        assert!(attempt >= times, "the examiner crashes as the test wishes");
        report(submission, policy, Verdict::Accept)
    });
    (attempts, examiner)
}

#[tokio::test]
async fn three_crashes_give_a_submission_to_a_curator() {
    let (attempts, examiner) = crashing(usize::MAX);
    let house = House::new(examiner).await;
    let done = house.submit(&Pack::new("velnaric acid", "I", -10.0)).await;
    assert_eq!(done.state(), v1::State::Held);
    assert_eq!(attempts.load(Ordering::SeqCst), 3);
    let report = house.report(&done.name).await.unwrap();
    assert_eq!(report.verdict(), v1::Verdict::Hold);
    assert_eq!(report.findings.len(), 1);
    assert_eq!(report.findings[0].rule, "examination-failed");
    assert_eq!(report.package_digest, done.package_digest);
    assert_eq!(done.verdict_reasons, report.verdict_reasons);
}

#[tokio::test]
async fn two_crashes_are_forgiven() {
    let (attempts, examiner) = crashing(2);
    let house = House::new(examiner).await;
    let done = house.submit(&Pack::new("velnaric acid", "I", -10.0)).await;
    assert_eq!(done.state(), v1::State::Accepted);
    assert_eq!(attempts.load(Ordering::SeqCst), 3);
}

#[tokio::test]
async fn queued_work_survives_a_restart() {
    let gate = Gate::default();
    let slow = |config: &mut Config| {
        config.workers = 1;
        config.grace = Duration::from_millis(200);
    };
    let house = House::with(Fake::behind(&gate), slow).await;
    let first = house.queue(&Pack::new("velnaric acid", "I", -10.0)).await;
    let second = house.queue(&Pack::new("velnaric acid", "II", -10.0)).await;
    let draft = house
        .create(&Pack::new("velnaric acid", "III", -10.0))
        .await;
    house.service.shutdown().await.unwrap();

    let house = House::again(house.folder, Fake::accepting(), |_| {}).await;
    for name in [&first, &second] {
        assert_eq!(house.settled(name).await.state(), v1::State::Accepted);
    }
    assert_eq!(house.get(&draft.name).await.state(), v1::State::Draft);
    // The examination of the first service ends now and finds its store closed.
    gate.open();
    assert_eq!(
        house.report(&first).await.unwrap().verdict(),
        v1::Verdict::Accept
    );
}

#[tokio::test]
async fn many_watch_one_submission() {
    let gate = Gate::default();
    let house = House::with(Fake::behind(&gate), |config| {
        config.heartbeat = Duration::from_millis(50);
    })
    .await;
    let name = house.queue(&Pack::new("velnaric acid", "I", -10.0)).await;
    let mut watches = Vec::new();
    for _ in 0..40 {
        let request = v1::WatchSubmissionRequest { name: name.clone() };
        watches.push(
            house
                .submissions()
                .watch_submission(request)
                .await
                .unwrap()
                .into_inner(),
        );
    }
    // Silence is told as a heartbeat.
    let quiet = async {
        while !matches!(
            watches[0].message().await.unwrap().unwrap().event,
            Some(Event::Heartbeat(_))
        ) {}
    };
    tokio::time::timeout(PATIENCE, quiet).await.unwrap();
    gate.open();
    for mut watch in watches {
        let mut last = None;
        while let Some(message) = watch.message().await.unwrap() {
            last = message.event;
        }
        let Some(Event::Submission(submission)) = last else {
            panic!("{last:?}")
        };
        assert_eq!(submission.state(), v1::State::Accepted);
    }
}

struct Listening {
    channel: Channel,
    stop: oneshot::Sender<()>,
    served: tokio::task::JoinHandle<Result<(), ServeError>>,
    folder: tempfile::TempDir,
}

async fn listening(grace: Duration) -> Listening {
    let folder = tempfile::tempdir().unwrap();
    let mut config = Config::standard().unwrap();
    config.store = folder.path().join("store");
    config.grace = grace;
    let listener = tokio::net::TcpListener::bind("127.0.0.1:0").await.unwrap();
    let address = listener.local_addr().unwrap();
    let (stop, stopped) = oneshot::channel();
    let served = tokio::spawn(run_with(listener, config, Fake::accepting(), async {
        stopped.await.unwrap();
    }));
    let channel = Endpoint::new(format!("http://{address}"))
        .unwrap()
        .connect_lazy();
    Listening {
        channel,
        stop,
        served,
        folder,
    }
}

async fn ask_health(channel: &Channel, service: &str) -> i32 {
    let request = HealthCheckRequest {
        service: service.to_owned(),
    };
    eventually(|| {
        let (mut client, request) = (HealthClient::new(channel.clone()), request.clone());
        async move { client.check(request).await.ok() }
    })
    .await
    .into_inner()
    .status
}

#[tokio::test]
async fn draining_ends_watches_and_says_so_to_health() {
    let grace = Duration::from_secs(40);
    let house = listening(grace).await;
    for service in [
        "",
        "tarehouse.v1.SubmissionService",
        "tarehouse.v1.CatalogService",
    ] {
        let status = ask_health(&house.channel, service).await;
        assert_eq!(
            status,
            i32::from(tonic_health::pb::health_check_response::ServingStatus::Serving)
        );
    }
    let request = HealthCheckRequest::default();
    let mut health = HealthClient::new(house.channel.clone())
        .watch(request)
        .await
        .unwrap()
        .into_inner();
    assert_eq!(
        health.message().await.unwrap().unwrap().status,
        ServingStatus::Serving as i32
    );

    let mut submissions = SubmissionServiceClient::new(house.channel.clone());
    let request = Pack::new("velnaric acid", "I", -10.0).request();
    let draft = submissions
        .create_submission(request)
        .await
        .unwrap()
        .into_inner()
        .submission
        .unwrap();
    let request = v1::WatchSubmissionRequest { name: draft.name };
    let mut watch = submissions
        .watch_submission(request)
        .await
        .unwrap()
        .into_inner();
    assert!(matches!(
        watch.message().await.unwrap().unwrap().event,
        Some(Event::Submission(_))
    ));

    let began = Instant::now();
    house.stop.send(()).unwrap();
    let status = watch.message().await.unwrap_err();
    assert_refused(&status, Code::Unavailable, "DRAINING");
    assert_eq!(
        health.message().await.unwrap().unwrap().status,
        ServingStatus::NotServing as i32
    );
    house.served.await.unwrap().unwrap();
    assert!(began.elapsed() < grace / 2, "{:?}", began.elapsed());
}

#[tokio::test]
async fn the_hard_deadline_cuts_an_upload_and_keeps_what_arrived() {
    let house = listening(Duration::from_millis(300)).await;
    let pack = Pack::new("velnaric acid", "I", -10.0);
    let mut submissions = SubmissionServiceClient::new(house.channel.clone());
    let answer = submissions.create_submission(pack.request()).await.unwrap();
    let name = answer.into_inner().submission.unwrap().name;
    let (sender, receiver) = mpsc::channel(4);
    sender.send(opening(&name, 0)).await.unwrap();
    sender.send(chunk(0, &pack.constants[..900])).await.unwrap();
    let mut transfers =
        v1::transfer_service_client::TransferServiceClient::new(house.channel.clone());
    let mut status_of = transfers.clone();
    let call =
        tokio::spawn(async move { transfers.send_array(ReceiverStream::new(receiver)).await });
    let request = v1::GetTransferStatusRequest {
        submission: name.clone(),
    };
    loop {
        let answer = status_of
            .get_transfer_status(request.clone())
            .await
            .unwrap()
            .into_inner();
        if answer.arrays[0].committed_bytes == 900 {
            break;
        }
    }
    house.stop.send(()).unwrap();
    let status = call.await.unwrap().unwrap_err();
    assert_refused(&status, Code::Unavailable, "DRAINING");
    tokio::time::timeout(PATIENCE, house.served)
        .await
        .unwrap()
        .unwrap()
        .unwrap();
    drop(sender);
    let house = House::again(house.folder, Fake::accepting(), |_| {}).await;
    assert_eq!(house.committed(&name).await, 900);
}

#[tokio::test]
async fn a_request_id_comes_back_or_is_made() {
    let house = House::new(Fake::accepting()).await;
    let mut client = v1::server_service_client::ServerServiceClient::new(house.channel.clone());
    let mut request = Request::new(v1::GetServerInfoRequest {});
    request
        .metadata_mut()
        .insert("x-request-id", "mine-1".parse().unwrap());
    let answer = client.get_server_info(request).await.unwrap();
    assert_eq!(answer.metadata().get("x-request-id").unwrap(), "mine-1");
    let answer = client
        .get_server_info(v1::GetServerInfoRequest {})
        .await
        .unwrap();
    let made = answer
        .metadata()
        .get("x-request-id")
        .unwrap()
        .to_str()
        .unwrap();
    assert!(uuid::Uuid::parse_str(made).is_ok(), "{made}");
}

#[tokio::test]
async fn both_reflections_name_every_service() {
    use tonic_reflection::pb::{v1 as new, v1alpha as old};
    let house = House::new(Fake::accepting()).await;
    let mut names = Vec::new();

    let request = new::ServerReflectionRequest {
        host: String::new(),
        message_request: Some(
            new::server_reflection_request::MessageRequest::ListServices(String::new()),
        ),
    };
    let mut client =
        new::server_reflection_client::ServerReflectionClient::new(house.channel.clone());
    let mut answers = client
        .server_reflection_info(tokio_stream::iter([request]))
        .await
        .unwrap()
        .into_inner();
    match answers.message().await.unwrap().unwrap().message_response {
        Some(new::server_reflection_response::MessageResponse::ListServicesResponse(list)) => {
            names.push(list.service.into_iter().map(|s| s.name).collect::<Vec<_>>());
        }
        other => panic!("{other:?}"),
    }

    let request = old::ServerReflectionRequest {
        host: String::new(),
        message_request: Some(
            old::server_reflection_request::MessageRequest::ListServices(String::new()),
        ),
    };
    let mut client =
        old::server_reflection_client::ServerReflectionClient::new(house.channel.clone());
    let mut answers = client
        .server_reflection_info(tokio_stream::iter([request]))
        .await
        .unwrap()
        .into_inner();
    match answers.message().await.unwrap().unwrap().message_response {
        Some(old::server_reflection_response::MessageResponse::ListServicesResponse(list)) => {
            names.push(list.service.into_iter().map(|s| s.name).collect::<Vec<_>>());
        }
        other => panic!("{other:?}"),
    }
    for found in names {
        for service in ["Submission", "Transfer", "Catalog", "Server"] {
            let name = format!("tarehouse.v1.{service}Service");
            assert!(found.contains(&name), "{name} is not in {found:?}");
        }
    }
}

#[tokio::test]
async fn one_store_is_opened_by_one_service() {
    let house = House::new(Fake::accepting()).await;
    let store = house.folder.path().join("store");
    let again = tarehouse_server::in_process(&store, Config::standard().unwrap()).await;
    assert!(matches!(again, Err(ServeError::Open(_))));
    house.service.shutdown().await.unwrap();
}
