//! A service of its own for each test, small packages, and an examiner that does as it is told.

use std::sync::{Arc, Condvar, Mutex};
use std::time::Duration;

use tarehouse_assay::report::{
    CrystalFacts, Curves, Finding, FreeEnergy, LikelyCause, Mesh, Noise, Report, Rule, Severity,
    Verdict,
};
use tarehouse_assay::{ExamineError, Policy, Progress, Submission};
use tarehouse_physics::ForceConstants;
use tarehouse_proto::package::npy;
use tarehouse_proto::v1;
use tarehouse_proto::v1::catalog_service_client::CatalogServiceClient;
use tarehouse_proto::v1::fetch_array_response::Frame as Fetched;
use tarehouse_proto::v1::send_array_request::Frame;
use tarehouse_proto::v1::submission_service_client::SubmissionServiceClient;
use tarehouse_proto::v1::transfer_service_client::TransferServiceClient;
use tarehouse_proto::v1::watch_submission_response::Event;
use tarehouse_server::{Config, Examiner, LocalService, in_process_with};
use tempfile::TempDir;
use tonic::transport::Channel;
use tonic::{Code, Status};
use tonic_types::StatusExt as _;

/// Longest time that any wait of a test may take.
pub(crate) const PATIENCE: Duration = Duration::from_mins(1);

type Judge = dyn Fn(&Submission, &Policy, &dyn Progress) -> Report + Send + Sync;

/// An examiner that does as it is told.
pub(crate) struct Fake(Box<Judge>);

impl Fake {
    pub(crate) fn judging(
        judge: impl Fn(&Submission, &Policy, &dyn Progress) -> Report + Send + Sync + 'static,
    ) -> Arc<dyn Examiner> {
        Arc::new(Self(Box::new(judge)))
    }

    /// Accepts everything at once.
    pub(crate) fn accepting() -> Arc<dyn Examiner> {
        Self::judging(|submission, policy, _| report(submission, policy, Verdict::Accept))
    }

    /// Accepts everything once the gate is open.
    pub(crate) fn behind(gate: &Gate) -> Arc<dyn Examiner> {
        let gate = gate.clone();
        Self::judging(move |submission, policy, progress| {
            progress.advance("waiting", 3, 7);
            gate.pass();
            report(submission, policy, Verdict::Accept)
        })
    }
}

impl Examiner for Fake {
    fn examine(
        &self,
        submission: &Submission,
        policy: &Policy,
        progress: &dyn Progress,
    ) -> Result<Report, ExamineError> {
        Ok((self.0)(submission, policy, progress))
    }

    fn projected_constants(&self, submission: &Submission, _policy: &Policy) -> ForceConstants {
        submission.constants.map_blocks(|_, block| block * 2.0)
    }
}

/// Holds examinations back until it is opened.
#[derive(Clone, Default)]
pub(crate) struct Gate(Arc<(Mutex<bool>, Condvar)>);

impl Gate {
    pub(crate) fn open(&self) {
        *self.0.0.lock().unwrap() = true;
        self.0.1.notify_all();
    }

    fn pass(&self) {
        let (open, _) = self
            .0
            .1
            .wait_timeout_while(self.0.0.lock().unwrap(), PATIENCE, |open| !*open)
            .unwrap();
        assert!(*open, "nobody opened the gate");
    }
}

/// A report with numbers that can be told again: F = z − a T² with z = 2 and a that grows with the form's label.
pub(crate) fn report(submission: &Submission, policy: &Policy, verdict: Verdict) -> Report {
    let a = 1e-5 * submission.identity.form.len() as f64;
    let free_energy = policy
        .limits
        .temperature_grid_k
        .iter()
        .map(|&t| FreeEnergy {
            temperature_k: t,
            defined: true,
            central_kj_per_mol: 2.0 - a * t * t,
            lower_kj_per_mol: 1.9 - a * t * t,
            upper_kj_per_mol: 2.3 - a * t * t,
            internal_energy_kj_per_mol: 2.0 + a * t * t,
            entropy_j_per_mol_k: 2000.0 * a * t,
            heat_capacity_j_per_mol_k: 2000.0 * a * t,
        })
        .collect();
    Report {
        program_version: tarehouse_assay::PROGRAM_VERSION.to_owned(),
        policy_digest: policy.digest,
        package_digest: submission.package_digest,
        verdict,
        verdict_reasons: match verdict {
            Verdict::Accept => Vec::new(),
            Verdict::Hold | Verdict::Reject => vec!["As the test wishes.".to_owned()],
        },
        findings: vec![Finding {
            rule: Rule::Density,
            severity: Severity::Caution,
            measured: Some(1.5),
            limit: Some(1.0),
            unit: "g/cm^3".to_owned(),
            location: String::new(),
            likely_cause: LikelyCause::Unknown,
            message: "Invented.".to_owned(),
            remedy: String::new(),
        }],
        noise: Noise::default(),
        soft_modes: Vec::new(),
        mesh: Mesh::default(),
        crystal: CrystalFacts {
            space_group_number: 2,
            density_g_per_cm3: 1.5,
            lattice_energy_kj_per_mol: submission.energy.lattice_energy_ev,
            ..CrystalFacts::default()
        },
        zero_point_energy_kj_per_mol: 2.0,
        free_energy,
        bracket_parts: None,
        free_energy_draws: Vec::new(),
        remedies: Vec::new(),
        curves: Curves::default(),
        lowest_branches: Vec::new(),
    }
}

const MANIFEST: &str = r#"format = "tarehouse-package/1"

[identity]
compound = "COMPOUND"
formula = "F N"
form = "FORM"
formula_units = 2
KEY

[crystal]
cell_vectors = [[5.0, 0.0, 0.0], [0.5, 6.0, 0.0], [0.25, -0.5, 7.0]]
length_unit = "angstrom"
elements = ["N", "F", "N", "F"]
positions = [[0.0, 0.0, 0.0], [0.25, 0.0, 0.0], [0.5, 0.5, 0.5], [0.75, 0.5, 0.5]]
cell_protocol = "relaxed"

[constants]
file = "constants.npy"
unit = "eV/angstrom^2"
supercell = [[1, 1, 0], [-1, 1, 0], [0, 0, 1]]
translations = [[0, 0, 0], [1, 0, 0]]
first_index = "displaced"
displaced = "all"
raw = true

[energy]
lattice_energy = ENERGY
unit = "eV"
"#;

/// The one array of a test's package.
pub(crate) const ARRAY: &str = "constants.npy";

/// A package.
#[derive(Clone)]
pub(crate) struct Pack {
    pub(crate) manifest: String,
    pub(crate) constants: Vec<u8>,
}

impl Pack {
    pub(crate) fn new(compound: &str, form: &str, lattice_energy: f64) -> Self {
        Self::keyed(compound, form, lattice_energy, None)
    }

    pub(crate) fn keyed(compound: &str, form: &str, energy: f64, key: Option<&str>) -> Self {
        let key = key.map_or_else(String::new, |key| format!("contributor_key = \"{key}\""));
        let manifest = MANIFEST
            .replace("COMPOUND", compound)
            .replace("FORM", form)
            .replace("KEY", &key)
            .replace("ENERGY", &format!("{energy:?}"));
        let values: Vec<f64> = (0..288).map(|k| f64::from(k) * 0.125 - 7.0).collect();
        Self {
            manifest,
            constants: npy::write(&[2, 4, 3, 4, 3], &values),
        }
    }

    pub(crate) fn digest(&self) -> String {
        blake3::hash(&self.constants).to_hex().to_string()
    }

    pub(crate) fn request(&self) -> v1::CreateSubmissionRequest {
        v1::CreateSubmissionRequest {
            manifest: self.manifest.clone().into(),
            arrays: vec![v1::ArrayDeclaration {
                name: ARRAY.to_owned(),
                size_bytes: self.constants.len() as u64,
                digest: self.digest(),
            }],
            request_id: uuid::Uuid::new_v4().to_string(),
            validate_only: false,
        }
    }

    /// Frames of an upload from `offset` in chunks of `step` bytes, with the finish frame.
    pub(crate) fn frames(
        &self,
        name: &str,
        offset: usize,
        step: usize,
    ) -> Vec<v1::SendArrayRequest> {
        let mut frames = vec![opening(name, offset)];
        let rest = &self.constants[offset..];
        frames.extend(
            rest.chunks(step)
                .enumerate()
                .map(|(k, data)| chunk(offset + k * step, data)),
        );
        frames.push(finish(self.constants.len(), &self.digest()));
        frames
    }
}

pub(crate) fn opening(name: &str, offset: usize) -> v1::SendArrayRequest {
    v1::SendArrayRequest {
        frame: Some(Frame::Open(v1::SendArrayOpen {
            submission: name.to_owned(),
            array: ARRAY.to_owned(),
            offset_bytes: offset as u64,
        })),
    }
}

pub(crate) fn chunk(offset: usize, data: &[u8]) -> v1::SendArrayRequest {
    v1::SendArrayRequest {
        frame: Some(Frame::Chunk(v1::Chunk {
            offset_bytes: offset as u64,
            data: data.to_vec().into(),
            crc32: crc32fast::hash(data),
        })),
    }
}

pub(crate) fn finish(size: usize, digest: &str) -> v1::SendArrayRequest {
    v1::SendArrayRequest {
        frame: Some(Frame::Finish(v1::SendArrayFinish {
            size_bytes: size as u64,
            digest: digest.to_owned(),
        })),
    }
}

/// A service of its own.
pub(crate) struct House {
    pub(crate) folder: TempDir,
    pub(crate) channel: Channel,
    pub(crate) service: LocalService,
}

impl House {
    pub(crate) async fn new(examiner: Arc<dyn Examiner>) -> Self {
        Self::with(examiner, |_| {}).await
    }

    pub(crate) async fn with(
        examiner: Arc<dyn Examiner>,
        change: impl FnOnce(&mut Config),
    ) -> Self {
        Self::again(tempfile::tempdir().unwrap(), examiner, change).await
    }

    /// Opens the store of an earlier service.
    pub(crate) async fn again(
        folder: TempDir,
        examiner: Arc<dyn Examiner>,
        change: impl FnOnce(&mut Config),
    ) -> Self {
        let mut config = Config::standard().unwrap();
        config.workers = 2;
        change(&mut config);
        let store = folder.path().join("store");
        let (channel, service) = in_process_with(&store, config, examiner).await.unwrap();
        Self {
            folder,
            channel,
            service,
        }
    }

    pub(crate) fn submissions(&self) -> SubmissionServiceClient<Channel> {
        SubmissionServiceClient::new(self.channel.clone())
    }

    pub(crate) fn transfers(&self) -> TransferServiceClient<Channel> {
        TransferServiceClient::new(self.channel.clone())
    }

    pub(crate) fn catalogue(&self) -> CatalogServiceClient<Channel> {
        CatalogServiceClient::new(self.channel.clone())
    }

    pub(crate) async fn create(&self, pack: &Pack) -> v1::Submission {
        let answer = self
            .submissions()
            .create_submission(pack.request())
            .await
            .unwrap();
        answer.into_inner().submission.unwrap()
    }

    pub(crate) async fn send(
        &self,
        frames: Vec<v1::SendArrayRequest>,
    ) -> Result<v1::Array, Status> {
        let answer = self
            .transfers()
            .send_array(tokio_stream::iter(frames))
            .await?;
        Ok(answer.into_inner().array.unwrap())
    }

    pub(crate) async fn seal(&self, name: &str) -> Result<v1::Submission, Status> {
        let request = v1::SealSubmissionRequest {
            name: name.to_owned(),
        };
        let answer = self.submissions().seal_submission(request).await?;
        Ok(answer.into_inner().submission.unwrap())
    }

    pub(crate) async fn get(&self, name: &str) -> v1::Submission {
        let request = v1::GetSubmissionRequest {
            name: name.to_owned(),
        };
        let answer = self.submissions().get_submission(request).await.unwrap();
        answer.into_inner().submission.unwrap()
    }

    pub(crate) async fn committed(&self, name: &str) -> u64 {
        let request = v1::GetTransferStatusRequest {
            submission: name.to_owned(),
        };
        let answer = self.transfers().get_transfer_status(request).await.unwrap();
        answer.into_inner().arrays[0].committed_bytes
    }

    /// Creates, sends and seals; the name.
    pub(crate) async fn queue(&self, pack: &Pack) -> String {
        let name = self.create(pack).await.name;
        self.send(pack.frames(&name, 0, 1000)).await.unwrap();
        self.seal(&name).await.unwrap();
        name
    }

    /// Follows a submission to its final state; all events.
    pub(crate) async fn events(&self, name: &str) -> Vec<Event> {
        let request = v1::WatchSubmissionRequest {
            name: name.to_owned(),
        };
        let watch = async {
            let answer = self.submissions().watch_submission(request).await.unwrap();
            let (mut stream, mut events) = (answer.into_inner(), Vec::new());
            while let Some(message) = stream.message().await.unwrap() {
                events.push(message.event.unwrap());
            }
            events
        };
        tokio::time::timeout(PATIENCE, watch)
            .await
            .expect("the watch must end")
    }

    /// The submission in its final state.
    pub(crate) async fn settled(&self, name: &str) -> v1::Submission {
        match self.events(name).await.pop() {
            Some(Event::Submission(submission)) => submission,
            other => panic!("a watch must end with a submission, not {other:?}"),
        }
    }

    /// Submits and waits for the end.
    pub(crate) async fn submit(&self, pack: &Pack) -> v1::Submission {
        let name = self.queue(pack).await;
        self.settled(&name).await
    }

    pub(crate) async fn report(&self, name: &str) -> Result<v1::Report, Status> {
        let request = v1::GetReportRequest {
            name: name.to_owned(),
        };
        let answer = self.submissions().get_report(request).await?;
        Ok(answer.into_inner().report.unwrap())
    }
}

/// Fetches a file whole: its header and its bytes.
pub(crate) async fn fetch(
    house: &House,
    name: &str,
    array: &str,
    treatment: v1::Treatment,
    offset_bytes: u64,
) -> Result<(v1::FetchArrayHeader, Vec<u8>), Status> {
    let request = v1::FetchArrayRequest {
        name: name.to_owned(),
        array: array.to_owned(),
        treatment: treatment.into(),
        offset_bytes,
    };
    let mut stream = house.transfers().fetch_array(request).await?.into_inner();
    let Some(Fetched::Header(header)) = stream.message().await?.unwrap().frame else {
        panic!("the header comes first");
    };
    let mut bytes = Vec::new();
    while let Some(message) = stream.message().await? {
        let Some(Fetched::Chunk(chunk)) = message.frame else {
            panic!("chunks follow")
        };
        assert_eq!(chunk.offset_bytes, offset_bytes + bytes.len() as u64);
        assert_eq!(chunk.crc32, crc32fast::hash(&chunk.data));
        bytes.extend_from_slice(&chunk.data);
    }
    Ok((header, bytes))
}

/// Asserts code and reason of a refusal, and that it names the house.
pub(crate) fn assert_refused(status: &Status, code: Code, reason: &str) {
    let details = status.get_error_details();
    let info = details
        .error_info()
        .unwrap_or_else(|| panic!("no reason in {status:?}"));
    assert_eq!(
        (status.code(), info.reason.as_str()),
        (code, reason),
        "{status:?}"
    );
    assert_eq!(info.domain, "tarehouse");
}

/// Asks again until the answer is some; bounded.
pub(crate) async fn eventually<T, F: Future<Output = Option<T>>>(mut ask: impl FnMut() -> F) -> T {
    let asking = async {
        loop {
            if let Some(found) = ask().await {
                return found;
            }
            tokio::task::yield_now().await;
        }
    };
    tokio::time::timeout(PATIENCE, asking)
        .await
        .expect("must come true")
}
