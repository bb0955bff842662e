//! One upload, frame by frame: open, chunks in order, finish.

use std::sync::Arc;

use tarehouse_assay::submission::Digest;
use tarehouse_proto::convert::digest_from_hex;
use tarehouse_proto::v1;
use tarehouse_proto::v1::send_array_request::Frame;
use tarehouse_store::{ArrayStatus, StoreError, SubmissionId};
use tonic::{Status, Streaming};

use crate::core::Core;
use crate::failure::{Failure, reason};
use crate::layers::{Principal, stream_failure};
use crate::limits;
use crate::services::transfer::{opened, whole};
use crate::uploads::Hold;

/// An upload.
pub(crate) struct Receiver {
    core: Arc<Core>,
    principal: Principal,
    stream: Streaming<v1::SendArrayRequest>,
}

/// The array that an upload writes.
struct Target {
    id: SubmissionId,
    array: String,
    size_bytes: u64,
    /// Where the next byte goes.
    offset_bytes: u64,
    /// The array was whole before this upload; its chunks have nowhere to go.
    stored: bool,
    _hold: Hold,
}

impl Receiver {
    /// An upload that has not been opened.
    pub(crate) fn new(
        core: Arc<Core>,
        principal: Principal,
        stream: Streaming<v1::SendArrayRequest>,
    ) -> Self {
        Self {
            core,
            principal,
            stream,
        }
    }

    /// Takes frames until the finish frame.
    pub(crate) async fn run(mut self) -> Result<v1::Array, Status> {
        let open = match self.next().await? {
            Frame::Open(open) => open,
            Frame::Chunk(_) | Frame::Finish(_) => {
                return Err(incomplete("the first frame must be open").into());
            }
        };
        let mut target = self.open(open).await?;
        let outcome = self.receive(&mut target).await;
        if outcome.is_err() && !target.stored {
            self.keep(&target).await;
        }
        outcome
    }

    async fn receive(&mut self, target: &mut Target) -> Result<v1::Array, Status> {
        loop {
            match self.next().await? {
                Frame::Open(_) => return Err(incomplete("only the first frame may be open").into()),
                Frame::Chunk(chunk) => self.append(target, chunk).await?,
                Frame::Finish(finish) => return Ok(self.finish(target, finish).await?),
            }
        }
    }

    /// The next frame; the end of the stream is a failure, and so is too long a silence.
    async fn next(&mut self) -> Result<Frame, Status> {
        let idle = self.core.config.stream_idle;
        let message = tokio::select! {
            () = self.core.drain.until_cut() => return Err(Failure::draining().into()),
            message = tokio::time::timeout(idle, self.stream.message()) => message,
        };
        let message = message.map_err(|_| Failure::Late {
            reason: reason::STREAM_IDLE,
            message: format!(
                "no frame for {} s; what has arrived is kept",
                idle.as_secs_f64()
            ),
        })?;
        let message = message.map_err(stream_failure)?;
        let message = message.ok_or_else(|| {
            incomplete("the stream ended without a finish frame; what has arrived is kept")
        })?;
        message
            .frame
            .ok_or_else(|| incomplete("a frame is empty").into())
    }

    async fn open(&self, open: v1::SendArrayOpen) -> Result<Target, Failure> {
        let id = opened(&open)?;
        let hold = self.core.uploads.hold(id, &open.array)?;
        let status = self.status(id, &open.array).await?;
        if open.offset_bytes == 0 && status.committed_bytes > 0 && !status.stored {
            let array = open.array.clone();
            self.core
                .depot
                .ask(move |store| store.restart_array(id, &array))
                .await?;
        } else if open.offset_bytes != 0 && open.offset_bytes != status.committed_bytes {
            return Err(Failure::Forbidden {
                reason: reason::OFFSET_MISMATCH,
                message: format!(
                    "{} bytes are committed; start there or at 0, not at {}",
                    status.committed_bytes, open.offset_bytes
                ),
                breaches: Vec::new(),
            });
        }
        Ok(Target {
            id,
            array: open.array,
            size_bytes: status.declared_bytes,
            offset_bytes: open.offset_bytes,
            stored: status.stored,
            _hold: hold,
        })
    }

    async fn status(&self, id: SubmissionId, array: &str) -> Result<ArrayStatus, Failure> {
        let array = array.to_owned();
        self.core
            .depot
            .ask(move |store| {
                let status = store.array_status(id, &array)?;
                let view = store.get_submission(id)?;
                if view.state != tarehouse_store::State::Draft && !status.stored {
                    return Err(StoreError::NotADraft {
                        id,
                        state: view.state,
                    });
                }
                Ok(status)
            })
            .await
    }

    async fn append(&self, target: &mut Target, chunk: v1::Chunk) -> Result<(), Failure> {
        let end = check_chunk(target, &chunk)?;
        if !target.stored {
            let (id, array, offset) = (target.id, target.array.clone(), target.offset_bytes);
            self.core
                .depot
                .ask(move |store| store.append_array_part(id, &array, offset, &chunk.data))
                .await?;
        }
        target.offset_bytes = end;
        Ok(())
    }

    async fn finish(
        &self,
        target: &Target,
        finish: v1::SendArrayFinish,
    ) -> Result<v1::Array, Failure> {
        let digest: Digest = digest_from_hex(&finish.digest).ok_or_else(|| {
            Failure::field(
                "finish.digest",
                "64 lower-case hexadecimal digits are wanted",
            )
        })?;
        let (received, declared) = (target.offset_bytes, target.size_bytes);
        if finish.size_bytes != declared || received != declared && !target.stored {
            return Err(Failure::invalid(
                reason::SIZE_MISMATCH,
                format!(
                    "declared {declared} bytes, received {received}, finished with {}",
                    finish.size_bytes
                ),
            ));
        }
        let actor = self.core.actor_of(&self.principal);
        let (id, array) = (target.id, target.array.clone());
        let object = self
            .core
            .depot
            .ask(move |store| store.finish_array(&actor, id, &array, finish.size_bytes, &digest))
            .await?;
        Ok(whole(&target.array, object))
    }

    /// Makes what has arrived durable, so that the next upload can go on from there.
    async fn keep(&self, target: &Target) {
        let (id, array) = (target.id, target.array.clone());
        let kept = self
            .core
            .depot
            .ask(move |store| store.array_status(id, &array))
            .await;
        match kept {
            Ok(status) => {
                tracing::info!(%id, array = %target.array, committed = status.committed_bytes, "upload cut");
            }
            Err(failure) => tracing::warn!(%id, ?failure, "a cut upload could not be kept"),
        }
    }
}

/// Whether a chunk follows, fits and is what its checksum says; the offset after it.
fn check_chunk(target: &Target, chunk: &v1::Chunk) -> Result<u64, Failure> {
    let size = chunk.data.len();
    if size > limits::CHUNK_BYTES_MAX {
        let message = format!(
            "a chunk has {size} bytes, at most {} are taken",
            limits::CHUNK_BYTES_MAX
        );
        return Err(Failure::invalid(reason::MESSAGE_TOO_LARGE, message));
    }
    if chunk.offset_bytes != target.offset_bytes {
        let message = format!(
            "a chunk starts at byte {}, byte {} comes next",
            chunk.offset_bytes, target.offset_bytes
        );
        return Err(Failure::invalid(reason::OFFSET_MISMATCH, message));
    }
    let end = target.offset_bytes.saturating_add(size as u64);
    if end > target.size_bytes {
        let message = format!("{end} bytes were sent, {} were declared", target.size_bytes);
        return Err(Failure::invalid(reason::SIZE_EXCEEDED, message));
    }
    if crc32fast::hash(&chunk.data) != chunk.crc32 {
        let message = format!(
            "the chunk at byte {} was damaged on its way; send again from the committed bytes",
            chunk.offset_bytes
        );
        return Err(Failure::invalid(reason::CHECKSUM_MISMATCH, message));
    }
    Ok(end)
}

fn incomplete(message: &str) -> Failure {
    Failure::invalid(reason::STREAM_INCOMPLETE, message)
}
