//! TransferService: how arrays travel.
//!
//! The end of a caller's stream is never success: only a finish frame with size and digest makes an array whole. What
//! has arrived before a cut stays, and the next upload goes on from there.

use std::sync::Arc;

use tarehouse_proto::convert::digest_to_hex;
use tarehouse_proto::v1;
use tarehouse_store::{ObjectRef, SubmissionId};
use tokio::sync::mpsc;
use tokio_stream::wrappers::ReceiverStream;
use tonic::{Request, Response, Status, Streaming};

use crate::core::Core;
use crate::failure::Failure;
use crate::fetch::{Fetch, Source};
use crate::layers::Principal;
use crate::names::{self, Resource};
use crate::receive::Receiver;
use crate::wire;

/// Frames on their way to one caller.
const FRAMES_MAX: usize = 2;

/// TransferService on the shared parts.
#[derive(Debug)]
pub(crate) struct Service {
    pub(crate) core: Arc<Core>,
}

impl Service {
    async fn status(&self, name: &str) -> Result<Vec<v1::Array>, Failure> {
        let id = names::parse_submission("submission", name)?;
        let view = self.core.submission(id).await?;
        let committed = self.core.committed(&view).await?;
        Ok(wire::submission(&view, &committed, None).arrays)
    }

    async fn send(
        &self,
        principal: Principal,
        stream: Streaming<v1::SendArrayRequest>,
    ) -> Result<v1::Array, Status> {
        self.core.drain.admit()?;
        let place = self.core.uploads.stream()?;
        let receiver = Receiver::new(Arc::clone(&self.core), principal, stream);
        // A task of its own: where the caller vanishes, what has arrived is still made durable.
        let task = tokio::spawn(async move {
            let array = receiver.run().await;
            drop(place);
            array
        });
        task.await.map_err(Failure::internal)?
    }

    async fn fetch(
        &self,
        request: v1::FetchArrayRequest,
    ) -> Result<ReceiverStream<Result<v1::FetchArrayResponse, Status>>, Failure> {
        let core = &self.core;
        core.drain.admit()?;
        let place = core.fetch_permit()?;
        let id = match Resource::parse("name", &request.name)? {
            Resource::Submission(id) => id,
            Resource::Record(id) => core.record(id).await?.id,
        };
        let treatment = v1::Treatment::try_from(request.treatment)
            .map_err(|_| Failure::field("treatment", "not a known treatment"))?;
        let source = Source::of(&request.array, treatment)?;
        let fetch = Fetch::open(core, id, source, request.offset_bytes).await?;
        let (frames, stream) = mpsc::channel(FRAMES_MAX);
        tokio::spawn(fetch.run(Arc::clone(core), frames, place));
        Ok(ReceiverStream::new(stream))
    }
}

/// An array that is stored whole.
pub(crate) fn whole(name: &str, object: ObjectRef) -> v1::Array {
    v1::Array {
        name: name.to_owned(),
        size_bytes: object.size,
        digest: digest_to_hex(&object.digest),
        committed_bytes: object.size,
    }
}

/// The submission of an upload.
pub(crate) fn opened(open: &v1::SendArrayOpen) -> Result<SubmissionId, Failure> {
    names::parse_submission("open.submission", &open.submission)
}

#[tonic::async_trait]
impl v1::transfer_service_server::TransferService for Service {
    async fn get_transfer_status(
        &self,
        request: Request<v1::GetTransferStatusRequest>,
    ) -> Result<Response<v1::GetTransferStatusResponse>, Status> {
        let arrays = self.status(&request.get_ref().submission).await?;
        Ok(Response::new(v1::GetTransferStatusResponse { arrays }))
    }

    async fn send_array(
        &self,
        request: Request<Streaming<v1::SendArrayRequest>>,
    ) -> Result<Response<v1::SendArrayResponse>, Status> {
        let principal = Principal::of(&request);
        let array = Some(self.send(principal, request.into_inner()).await?);
        Ok(Response::new(v1::SendArrayResponse { array }))
    }

    type FetchArrayStream = ReceiverStream<Result<v1::FetchArrayResponse, Status>>;

    async fn fetch_array(
        &self,
        request: Request<v1::FetchArrayRequest>,
    ) -> Result<Response<Self::FetchArrayStream>, Status> {
        Ok(Response::new(self.fetch(request.into_inner()).await?))
    }
}
