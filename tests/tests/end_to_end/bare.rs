//! Bare calls, for what no client of ours would send.

use tarehouse_proto::v1;
use tarehouse_proto::v1::catalog_service_client::CatalogServiceClient;
use tarehouse_proto::v1::send_array_request::Frame;
use tarehouse_proto::v1::submission_service_client::SubmissionServiceClient;
use tarehouse_proto::v1::transfer_service_client::TransferServiceClient;
use tonic::transport::Channel;
use tonic::{Code, Status};
use tonic_types::StatusExt as _;

use crate::house::demo_package;

/// The one array of the packages that are spoilt here.
pub(crate) const ARRAY: &str = "constants.npy";

/// Calls over one connection.
#[derive(Clone)]
pub(crate) struct Bare {
    pub(crate) submissions: SubmissionServiceClient<Channel>,
    pub(crate) transfers: TransferServiceClient<Channel>,
    pub(crate) catalog: CatalogServiceClient<Channel>,
}

impl Bare {
    /// Connects.
    pub(crate) async fn to(url: &str) -> Self {
        let channel = Channel::from_shared(url.to_owned()).unwrap();
        let channel = channel.connect().await.unwrap();
        Self {
            submissions: SubmissionServiceClient::new(channel.clone()),
            transfers: TransferServiceClient::new(channel.clone()),
            catalog: CatalogServiceClient::new(channel),
        }
    }

    pub(crate) async fn create(
        &self,
        request: v1::CreateSubmissionRequest,
    ) -> Result<v1::Submission, Status> {
        let answer = self.submissions.clone().create_submission(request).await?;
        Ok(answer.into_inner().submission.unwrap())
    }

    pub(crate) async fn send(&self, frames: Vec<v1::SendArrayRequest>) -> Result<(), Status> {
        let stream = tokio_stream::iter(frames);
        self.transfers.clone().send_array(stream).await.map(drop)
    }

    pub(crate) async fn seal(&self, name: &str) -> Result<(), Status> {
        let name = name.to_owned();
        let request = v1::SealSubmissionRequest { name };
        self.submissions
            .clone()
            .seal_submission(request)
            .await
            .map(drop)
    }

    pub(crate) async fn withdraw(&self, name: &str) {
        let request = v1::WithdrawSubmissionRequest {
            name: name.to_owned(),
            ..v1::WithdrawSubmissionRequest::default()
        };
        let answer = self.submissions.clone().withdraw_submission(request).await;
        let withdrawn = answer.unwrap().into_inner().submission.unwrap();
        assert_eq!(withdrawn.state(), v1::State::Withdrawn);
    }

    /// Names and states of all submissions.
    pub(crate) async fn listed(&self) -> Vec<(String, v1::State)> {
        let request = v1::ListSubmissionsRequest::default();
        let answer = self.submissions.clone().list_submissions(request).await;
        let all = answer.unwrap().into_inner();
        assert_eq!(all.next_page_token, "");
        all.submissions
            .iter()
            .map(|one| (one.name.clone(), one.state()))
            .collect()
    }
}

/// A package in memory.
#[derive(Clone)]
pub(crate) struct Pack {
    pub(crate) manifest: String,
    pub(crate) constants: Vec<u8>,
}

impl Pack {
    /// A package of the demo.
    pub(crate) fn demo(name: &str) -> Self {
        let folder = demo_package(name);
        Self {
            manifest: std::fs::read_to_string(folder.join("package.toml")).unwrap(),
            constants: std::fs::read(folder.join(ARRAY)).unwrap(),
        }
    }

    /// The package with the line that starts with `key = ` replaced.
    pub(crate) fn with(&self, key: &str, line: &str) -> Self {
        let head = format!("{key} = ");
        assert!(self.manifest.lines().any(|one| one.starts_with(&head)));
        let mut is_done = false;
        let lines = self.manifest.lines().map(|one| {
            if !is_done && one.starts_with(&head) {
                is_done = true;
                line
            } else {
                one
            }
        });
        Self {
            manifest: lines.collect::<Vec<_>>().join("\n"),
            ..self.clone()
        }
    }

    pub(crate) fn digest(&self) -> String {
        blake3::hash(&self.constants).to_hex().to_string()
    }

    /// A request with an id that no other request of the test has.
    pub(crate) fn request(&self, number: usize) -> v1::CreateSubmissionRequest {
        v1::CreateSubmissionRequest {
            manifest: self.manifest.clone().into_bytes().into(),
            arrays: vec![v1::ArrayDeclaration {
                name: ARRAY.to_owned(),
                size_bytes: self.constants.len() as u64,
                digest: self.digest(),
            }],
            request_id: format!("00000000-0000-4000-8000-{number:012x}"),
            validate_only: false,
        }
    }

    /// An upload in one chunk.
    pub(crate) fn frames(&self, name: &str) -> Vec<v1::SendArrayRequest> {
        vec![
            opening(name, 0),
            chunk(0, &self.constants),
            finish(self.constants.len(), &self.digest()),
        ]
    }
}

fn frame(frame: Frame) -> v1::SendArrayRequest {
    v1::SendArrayRequest { frame: Some(frame) }
}

pub(crate) fn opening(name: &str, offset: usize) -> v1::SendArrayRequest {
    frame(Frame::Open(v1::SendArrayOpen {
        submission: name.to_owned(),
        array: ARRAY.to_owned(),
        offset_bytes: offset as u64,
    }))
}

pub(crate) fn chunk(offset: usize, data: &[u8]) -> v1::SendArrayRequest {
    frame(Frame::Chunk(v1::Chunk {
        offset_bytes: offset as u64,
        data: data.to_vec().into(),
        crc32: crc32fast::hash(data),
    }))
}

pub(crate) fn finish(size: usize, digest: &str) -> v1::SendArrayRequest {
    frame(Frame::Finish(v1::SendArrayFinish {
        size_bytes: size as u64,
        digest: digest.to_owned(),
    }))
}

/// Asserts code and reason of a refusal, and returns its violations as text.
pub(crate) fn refused(what: &str, status: &Status, code: Code, reason: &str) -> Vec<String> {
    let details = status.get_error_details();
    let found = details
        .error_info()
        .map_or("no reason", |info| info.reason.as_str());
    assert_eq!((status.code(), found), (code, reason), "{what}: {status:?}");
    assert!(!status.message().is_empty(), "{what}: no message");
    details.bad_request().map_or_else(Vec::new, |bad| {
        bad.field_violations
            .iter()
            .map(|violation| format!("{}: {}", violation.field, violation.description))
            .collect()
    })
}
