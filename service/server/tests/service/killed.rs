//! The real command, killed without warning while clients submit, and started again on the same store.
//!
//! What a client was told is noted only when the answer has arrived; after every start each note must still hold.

use std::io::{BufRead as _, BufReader};
use std::path::Path;
use std::process::{Child, Command, Stdio};
use std::sync::atomic::{AtomicUsize, Ordering};
use std::sync::{Arc, Mutex};
use std::time::{SystemTime, UNIX_EPOCH};

use tarehouse_proto::v1;
use tarehouse_proto::v1::submission_service_client::SubmissionServiceClient;
use tarehouse_proto::v1::transfer_service_client::TransferServiceClient;
use tarehouse_store::{Health, Options, Store};
use tokio::sync::mpsc::{UnboundedSender, unbounded_channel};
use tokio::task::JoinHandle;
use tonic::Status;
use tonic::transport::Channel;

use crate::support::{PATIENCE, Pack};

const ROUNDS: usize = 10;
const CLIENTS: usize = 2;
/// Answers after which a round is cut: at least, and how many more at most. A package takes three.
const ANSWERS_MIN: u64 = 3;
const ANSWERS_MORE: u64 = 5;

/// The service as a process of its own; killed when it is dropped.
struct Running {
    child: Child,
    address: String,
}

impl Running {
    /// Starts it on a store and waits until it listens.
    fn start(folder: &Path) -> Self {
        let file = folder.join("service.toml");
        std::fs::write(&file, "listen = \"127.0.0.1:0\"\n[work]\nworkers = \"1\"\n").unwrap();
        let mut child = Command::new(env!("CARGO_BIN_EXE_tarehouse-server"))
            .arg("--config")
            .arg(file)
            .stdout(Stdio::null())
            .stderr(Stdio::piped())
            .spawn()
            .unwrap();
        let mut log = BufReader::new(child.stderr.take().unwrap()).lines();
        let mut before = Vec::new();
        let address = loop {
            let Some(Ok(line)) = log.next() else {
                panic!("the service ended by itself: {before:#?}");
            };
            if let Some((_, address)) = line.split_once("listening address=") {
                break address.trim().to_owned();
            }
            before.push(line);
        };
        // A pipe that nobody reads would stop the service.
        std::thread::spawn(move || log.for_each(drop));
        Self { child, address }
    }

    async fn channel(&self) -> Channel {
        let address = format!("http://{}", self.address);
        let endpoint = Channel::from_shared(address).unwrap();
        endpoint.timeout(PATIENCE).connect().await.unwrap()
    }

    /// SIGKILL: no handler runs.
    fn kill(&mut self) {
        self.child.kill().unwrap();
        self.child.wait().unwrap();
    }
}

impl Drop for Running {
    fn drop(&mut self) {
        let _ = self.child.kill();
        let _ = self.child.wait();
    }
}

/// One package on its way, and the last that its client was told.
#[derive(Clone)]
struct Job {
    pack: Pack,
    request: v1::CreateSubmissionRequest,
    /// Name, once the creation was answered.
    name: Option<String>,
    array_answered: bool,
    seal_answered: bool,
}

impl Job {
    fn new(number: usize) -> Self {
        let pack = Pack::new("velnaric acid", &format!("form {number}"), -10.0);
        Self {
            request: pack.request(),
            pack,
            name: None,
            array_answered: false,
            seal_answered: false,
        }
    }

    /// One call further; what is not answered is asked again with the same request.
    async fn step(&mut self, channel: &Channel) -> Result<(), Status> {
        let mut submissions = SubmissionServiceClient::new(channel.clone());
        let Some(name) = self.name.clone() else {
            let answer = submissions.create_submission(self.request.clone()).await?;
            self.name = answer.into_inner().submission.map(|draft| draft.name);
            return Ok(());
        };
        if !self.array_answered {
            let mut transfers = TransferServiceClient::new(channel.clone());
            let submission = name.clone();
            let request = v1::GetTransferStatusRequest { submission };
            let status = transfers.get_transfer_status(request).await?.into_inner();
            let offset = usize::try_from(status.arrays[0].committed_bytes).unwrap();
            // Where every byte is there already, the finish frame alone is sent.
            let frames = self.pack.frames(&name, offset, 600);
            transfers.send_array(tokio_stream::iter(frames)).await?;
            self.array_answered = true;
            return Ok(());
        }
        submissions
            .seal_submission(v1::SealSubmissionRequest { name })
            .await?;
        self.seal_answered = true;
        Ok(())
    }
}

/// Random enough to cut anywhere; the seed stands in the assertion that fails.
struct Dice(u64);

impl Dice {
    fn below(&mut self, limit: u64) -> u64 {
        // Marsaglia (2003), xorshift64 with the triple 13, 7, 17.
        self.0 ^= self.0 << 13;
        self.0 ^= self.0 >> 7;
        self.0 ^= self.0 << 17;
        self.0 % limit
    }
}

/// A client that submits until the service is gone.
fn client(
    channel: Channel,
    jobs: Arc<Mutex<Vec<Job>>>,
    answers: UnboundedSender<()>,
    numbers: Arc<AtomicUsize>,
) -> JoinHandle<Status> {
    tokio::spawn(async move {
        loop {
            let open = {
                let mut jobs = jobs.lock().unwrap();
                let open = jobs.iter().position(|job| !job.seal_answered);
                open.unwrap_or_else(|| {
                    jobs.push(Job::new(numbers.fetch_add(1, Ordering::Relaxed)));
                    jobs.len() - 1
                })
            };
            let mut job = jobs.lock().unwrap()[open].clone();
            let stepped = job.step(&channel).await;
            jobs.lock().unwrap()[open] = job;
            if let Err(status) = stepped {
                return status;
            }
            let _ = answers.send(());
        }
    })
}

/// Every answer of a client still holds.
async fn check(channel: &Channel, jobs: &[Job], seed: u64) {
    for job in jobs {
        let Some(name) = job.name.clone() else {
            continue;
        };
        let request = v1::GetSubmissionRequest { name };
        let answer = SubmissionServiceClient::new(channel.clone())
            .get_submission(request)
            .await
            .unwrap_or_else(|status| panic!("seed {seed}: a submission is lost: {status:?}"));
        let found = answer.into_inner().submission.unwrap();
        if job.seal_answered {
            assert_ne!(
                found.state(),
                v1::State::Draft,
                "seed {seed}: a seal is lost"
            );
        }
        if job.array_answered {
            let array = &found.arrays[0];
            assert_eq!(array.committed_bytes, array.size_bytes, "seed {seed}");
        }
    }
}

/// Seals what is open and waits for every verdict.
async fn settle(channel: &Channel, jobs: &mut [Job], seed: u64) {
    for job in jobs.iter_mut() {
        while !job.seal_answered {
            job.step(channel).await.unwrap();
        }
    }
    let mut submissions = SubmissionServiceClient::new(channel.clone());
    for job in jobs {
        let name = job.name.clone().unwrap();
        let request = v1::WatchSubmissionRequest { name: name.clone() };
        let mut watch = submissions
            .watch_submission(request)
            .await
            .unwrap()
            .into_inner();
        let end = async { while watch.message().await.unwrap().is_some() {} };
        tokio::time::timeout(PATIENCE, end).await.unwrap();
        let request = v1::GetReportRequest { name: name.clone() };
        let report = submissions.get_report(request).await.unwrap().into_inner();
        let request = v1::GetSubmissionRequest { name };
        let found = submissions
            .get_submission(request)
            .await
            .unwrap()
            .into_inner();
        let found = found.submission.unwrap();
        assert_eq!(found.state(), v1::State::Rejected, "seed {seed}");
        let digest = report.report.unwrap().package_digest;
        assert_eq!(digest, found.package_digest, "seed {seed}");
    }
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn nothing_answered_for_is_lost_by_kills() {
    let now = SystemTime::now().duration_since(UNIX_EPOCH).unwrap();
    let seed = u64::from(now.subsec_nanos()) | 1;
    let mut dice = Dice(seed);
    let folder = tempfile::tempdir().unwrap();
    let clients: Vec<Arc<Mutex<Vec<Job>>>> = (0..CLIENTS).map(|_| Arc::default()).collect();
    let numbers = Arc::new(AtomicUsize::new(0));
    let all = || -> Vec<Job> {
        let of = |jobs: &Arc<Mutex<Vec<Job>>>| jobs.lock().unwrap().clone();
        clients.iter().flat_map(of).collect()
    };
    for _ in 0..ROUNDS {
        let mut running = Running::start(folder.path());
        check(&running.channel().await, &all(), seed).await;
        let (answers, mut answered) = unbounded_channel();
        let mut tasks = Vec::new();
        for jobs in &clients {
            let channel = running.channel().await;
            tasks.push(client(
                channel,
                Arc::clone(jobs),
                answers.clone(),
                Arc::clone(&numbers),
            ));
        }
        drop(answers);
        let wanted = ANSWERS_MIN + dice.below(ANSWERS_MORE + 1);
        let enough = async {
            for _ in 0..wanted {
                let answer = answered.recv().await;
                assert!(answer.is_some(), "seed {seed}: a call was refused");
            }
        };
        tokio::time::timeout(PATIENCE, enough).await.unwrap();
        // Some way into the next calls.
        for _ in 0..dice.below(400) {
            tokio::task::yield_now().await;
        }
        running.kill();
        for task in tasks {
            let status = tokio::time::timeout(PATIENCE, task).await.unwrap().unwrap();
            assert!(
                status.metadata().get("grpc-status-details-bin").is_none()
                    && status.details().is_empty(),
                "seed {seed}: refused by the service itself: {status:?}"
            );
        }
    }
    let mut jobs = all();
    assert!(jobs.len() >= ROUNDS, "seed {seed}: {} packages", jobs.len());
    let running = Running::start(folder.path());
    let channel = running.channel().await;
    check(&channel, &jobs, seed).await;
    settle(&channel, &mut jobs, seed).await;
    drop((channel, running));
    let store = Store::open(folder.path().join("tarehouse-store"), Options::default()).unwrap();
    assert_eq!((store.health(), store.queue_length()), (Health::Good, 0));
    assert_eq!(
        store.index_fingerprint().unwrap(),
        store.rebuilt_index_fingerprint().unwrap()
    );
}
