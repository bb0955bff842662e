//! A service that fails as it is told to, and notes what reaches it.

use std::collections::VecDeque;
use std::sync::{Arc, Mutex};
use std::time::Duration;

use hyper_util::rt::TokioIo;
use tarehouse_client::connect::{Session, Target};
use tarehouse_proto::v1::send_array_request::Frame;
use tarehouse_proto::v1::submission_service_server::{SubmissionService, SubmissionServiceServer};
use tarehouse_proto::v1::transfer_service_server::{TransferService, TransferServiceServer};
use tarehouse_proto::v1::watch_submission_response::Event;
use tarehouse_proto::v1::{self, fetch_array_response};
use tokio_stream::StreamExt as _;
use tonic::transport::{Endpoint, Server};
use tonic::{Code, Request, Response, Status, Streaming};
use tonic_types::{ErrorDetails, StatusExt as _};

pub(crate) const NAME: &str = "submissions/1";

/// What the service does and has seen.
#[derive(Debug, Default)]
pub(crate) struct Script {
    /// Chunks after which each upload in turn is cut; none = not cut.
    pub(crate) cuts: VecDeque<usize>,
    /// Reason with which the next finish frames are refused.
    pub(crate) refusals: VecDeque<&'static str>,
    /// How often sealing says that the queue is full.
    pub(crate) full: usize,
    /// Events of each watch in turn.
    pub(crate) watches: VecDeque<Vec<Event>>,
    /// File that is fetched, and its announced digest.
    pub(crate) file: Vec<u8>,
    pub(crate) file_digest: String,
    /// Bytes after which each fetch in turn is cut.
    pub(crate) fetch_cuts: VecDeque<usize>,
    /// Bytes that have arrived.
    pub(crate) arrived: Vec<u8>,
    /// Offset of each upload.
    pub(crate) offsets: Vec<u64>,
    /// Request ids of each create.
    pub(crate) request_ids: Vec<String>,
    /// How often create is answered with UNAVAILABLE.
    pub(crate) away: usize,
    /// Declared arrays.
    pub(crate) declared: Vec<v1::ArrayDeclaration>,
}

#[derive(Debug, Clone, Default)]
pub(crate) struct Fake(pub(crate) Arc<Mutex<Script>>);

impl Fake {
    pub(crate) fn with(script: Script) -> Self {
        Self(Arc::new(Mutex::new(script)))
    }

    /// A session with this service.
    pub(crate) async fn session(&self) -> Session {
        let (near, far) = tokio::io::duplex(256 * 1024);
        tokio::spawn(
            Server::builder()
                .add_service(SubmissionServiceServer::new(self.clone()))
                .add_service(TransferServiceServer::new(self.clone()))
                .serve_with_incoming(tokio_stream::once(Ok::<_, std::io::Error>(far))),
        );
        let mut near = Some(near);
        let channel = Endpoint::from_static("http://fake")
            .connect_with_connector(tower::service_fn(move |_| {
                let near = near.take();
                async move {
                    near.map(TokioIo::new)
                        .ok_or_else(|| std::io::Error::other("only once"))
                }
            }))
            .await
            .unwrap();
        Session::over(channel, Target::Server("http://fake".to_owned()))
    }
}

fn submission(state: v1::State) -> v1::Submission {
    v1::Submission {
        name: NAME.to_owned(),
        state: state.into(),
        ..v1::Submission::default()
    }
}

/// An event that tells a state.
pub(crate) fn state(state: v1::State) -> Event {
    Event::Submission(submission(state))
}

fn refused(code: Code, reason: &str) -> Status {
    let details = ErrorDetails::with_error_info(reason, "tarehouse", []);
    Status::with_error_details(code, "refused", details)
}

#[tonic::async_trait]
impl SubmissionService for Fake {
    async fn create_submission(
        &self,
        request: Request<v1::CreateSubmissionRequest>,
    ) -> Result<Response<v1::CreateSubmissionResponse>, Status> {
        let mut script = self.0.lock().unwrap();
        let request = request.into_inner();
        script.request_ids.push(request.request_id);
        if script.away > 0 {
            script.away -= 1;
            return Err(Status::unavailable("away"));
        }
        script.declared = request.arrays;
        Ok(Response::new(v1::CreateSubmissionResponse {
            submission: Some(submission(v1::State::Draft)),
        }))
    }

    async fn get_submission(
        &self,
        _: Request<v1::GetSubmissionRequest>,
    ) -> Result<Response<v1::GetSubmissionResponse>, Status> {
        Ok(Response::new(v1::GetSubmissionResponse {
            submission: Some(submission(v1::State::Queued)),
        }))
    }

    async fn list_submissions(
        &self,
        _: Request<v1::ListSubmissionsRequest>,
    ) -> Result<Response<v1::ListSubmissionsResponse>, Status> {
        Err(Status::unimplemented("not part of the script"))
    }

    async fn seal_submission(
        &self,
        _: Request<v1::SealSubmissionRequest>,
    ) -> Result<Response<v1::SealSubmissionResponse>, Status> {
        let mut script = self.0.lock().unwrap();
        if script.full > 0 {
            script.full -= 1;
            let details = ErrorDetails::with_retry_info(Some(Duration::from_secs(5)));
            return Err(Status::with_error_details(
                Code::Unavailable,
                "full",
                details,
            ));
        }
        Ok(Response::new(v1::SealSubmissionResponse {
            submission: Some(submission(v1::State::Queued)),
        }))
    }

    async fn withdraw_submission(
        &self,
        _: Request<v1::WithdrawSubmissionRequest>,
    ) -> Result<Response<v1::WithdrawSubmissionResponse>, Status> {
        Err(Status::unimplemented("not part of the script"))
    }

    type WatchSubmissionStream = std::pin::Pin<
        Box<dyn tokio_stream::Stream<Item = Result<v1::WatchSubmissionResponse, Status>> + Send>,
    >;

    async fn watch_submission(
        &self,
        _: Request<v1::WatchSubmissionRequest>,
    ) -> Result<Response<Self::WatchSubmissionStream>, Status> {
        let events = self.0.lock().unwrap().watches.pop_front();
        let events = events.ok_or_else(|| Status::internal("one watch too many"))?;
        let events = events
            .into_iter()
            .map(|event| Ok(v1::WatchSubmissionResponse { event: Some(event) }));
        Ok(Response::new(Box::pin(tokio_stream::iter(events))))
    }

    async fn get_report(
        &self,
        _: Request<v1::GetReportRequest>,
    ) -> Result<Response<v1::GetReportResponse>, Status> {
        Err(Status::not_found("no report"))
    }
}

#[tonic::async_trait]
impl TransferService for Fake {
    async fn get_transfer_status(
        &self,
        _: Request<v1::GetTransferStatusRequest>,
    ) -> Result<Response<v1::GetTransferStatusResponse>, Status> {
        let script = self.0.lock().unwrap();
        let arrays = script
            .declared
            .iter()
            .map(|declared| v1::Array {
                name: declared.name.clone(),
                size_bytes: declared.size_bytes,
                digest: declared.digest.clone(),
                committed_bytes: script.arrived.len() as u64,
            })
            .collect();
        Ok(Response::new(v1::GetTransferStatusResponse { arrays }))
    }

    async fn send_array(
        &self,
        request: Request<Streaming<v1::SendArrayRequest>>,
    ) -> Result<Response<v1::SendArrayResponse>, Status> {
        let mut frames = request.into_inner();
        let cut = self
            .0
            .lock()
            .unwrap()
            .cuts
            .pop_front()
            .unwrap_or(usize::MAX);
        let mut chunks = 0;
        while let Some(frame) = frames.next().await {
            let mut script = self.0.lock().unwrap();
            match frame?.frame.unwrap() {
                Frame::Open(open) => {
                    let offset = usize::try_from(open.offset_bytes).unwrap();
                    script.arrived.truncate(offset);
                    script.offsets.push(open.offset_bytes);
                }
                Frame::Chunk(_) if chunks == cut => return Err(Status::unavailable("cut")),
                Frame::Chunk(chunk) => {
                    assert_eq!(chunk.offset_bytes, script.arrived.len() as u64);
                    script.arrived.extend_from_slice(&chunk.data);
                    chunks += 1;
                }
                Frame::Finish(finish) => {
                    if let Some(reason) = script.refusals.pop_front() {
                        return Err(refused(Code::InvalidArgument, reason));
                    }
                    let digest = blake3::hash(&script.arrived).to_hex().to_string();
                    assert_eq!(finish.digest, digest);
                    assert_eq!(finish.size_bytes, script.arrived.len() as u64);
                    let array = Some(v1::Array::default());
                    return Ok(Response::new(v1::SendArrayResponse { array }));
                }
            }
        }
        Err(Status::aborted("no finish frame"))
    }

    type FetchArrayStream = std::pin::Pin<
        Box<dyn tokio_stream::Stream<Item = Result<v1::FetchArrayResponse, Status>> + Send>,
    >;

    async fn fetch_array(
        &self,
        request: Request<v1::FetchArrayRequest>,
    ) -> Result<Response<Self::FetchArrayStream>, Status> {
        let mut script = self.0.lock().unwrap();
        let offset = usize::try_from(request.get_ref().offset_bytes).unwrap();
        script.offsets.push(offset as u64);
        let end = script.fetch_cuts.pop_front().unwrap_or(script.file.len());
        let header = fetch_array_response::Frame::Header(v1::FetchArrayHeader {
            array: request.get_ref().array.clone(),
            size_bytes: script.file.len() as u64,
            digest: script.file_digest.clone(),
            offset_bytes: offset as u64,
        });
        let data: tonic::codegen::Bytes = script.file[offset..end].to_vec().into();
        let chunk = fetch_array_response::Frame::Chunk(v1::Chunk {
            offset_bytes: offset as u64,
            crc32: crc32fast::hash(&data),
            data,
        });
        let frames = [header, chunk].map(|frame| Ok(v1::FetchArrayResponse { frame: Some(frame) }));
        Ok(Response::new(Box::pin(tokio_stream::iter(frames))))
    }
}
