//! One download: the header, then the file in chunks, read from the store part by part.
//!
//! The last chunk is sent only where the whole content has its digest. A caller who takes nothing for too long is left.

use std::sync::Arc;

use prost::bytes::Bytes;
use tarehouse_assay::report::Verdict;
use tarehouse_proto::convert::digest_to_hex;
use tarehouse_proto::package::MANIFEST_FILE;
use tarehouse_proto::v1;
use tarehouse_proto::v1::fetch_array_response::Frame;
use tarehouse_store::{ObjectReader, ObjectRef, StoreError, SubmissionId, SubmissionView};
use tokio::sync::OwnedSemaphorePermit;
use tokio::sync::mpsc::Sender;
use tonic::Status;

use crate::core::Core;
use crate::failure::{Failure, reason};
use crate::limits;

/// What is fetched.
#[derive(Debug, Clone, PartialEq, Eq)]
pub(crate) enum Source {
    /// The manifest.
    Manifest,
    /// An array as contributed.
    Array(String),
    /// The force constants as projected; the name that the caller gave.
    Projected(String),
}

impl Source {
    /// What a request asks for.
    pub(crate) fn of(array: &str, treatment: v1::Treatment) -> Result<Self, Failure> {
        match (treatment, array) {
            (v1::Treatment::Projected, array) => Ok(Self::Projected(array.to_owned())),
            (_, "") => Err(Failure::field(
                "array",
                "the file name of an array is wanted",
            )),
            (_, MANIFEST_FILE) => Ok(Self::Manifest),
            (_, array) => Ok(Self::Array(array.to_owned())),
        }
    }
}

/// Where the bytes come from.
enum Content {
    /// Part by part from the store.
    Stored(Box<ObjectReader>),
    /// At hand, from the offset on.
    AtHand(Bytes),
}

/// A download.
pub(crate) struct Fetch {
    content: Content,
    header: v1::FetchArrayHeader,
    /// Bytes that are read but not sent.
    skip_bytes: u64,
}

type Frames = Sender<Result<v1::FetchArrayResponse, Status>>;

impl Fetch {
    /// Opens what is fetched; nothing is sent yet.
    pub(crate) async fn open(
        core: &Core,
        id: SubmissionId,
        source: Source,
        offset_bytes: u64,
    ) -> Result<Self, Failure> {
        let view = core.submission(id).await?;
        let (name, object, content) = match source {
            Source::Manifest => {
                let bytes = core.depot.ask(move |store| store.read_manifest(id)).await?;
                let start = usize::try_from(offset_bytes)
                    .unwrap_or(usize::MAX)
                    .min(bytes.len());
                let rest = Bytes::from(bytes).slice(start..);
                (
                    MANIFEST_FILE.to_owned(),
                    view.manifest,
                    Content::AtHand(rest),
                )
            }
            Source::Array(name) => {
                let array = name.clone();
                let reader = open_stored(core, move |store| store.open_array(id, &array)).await?;
                (name, reader.object(), Content::Stored(Box::new(reader)))
            }
            Source::Projected(name) => {
                let constants = core.manifest_facts(&view).await?.constants_file.clone();
                if !name.is_empty() && name != constants {
                    return Err(Failure::field(
                        "array",
                        "only the force constants are projected",
                    ));
                }
                if view.projected.is_none() {
                    return Err(not_projected(&view));
                }
                let reader = open_stored(core, move |store| store.open_projected(id)).await?;
                (
                    constants,
                    reader.object(),
                    Content::Stored(Box::new(reader)),
                )
            }
        };
        if offset_bytes > object.size {
            let message = format!("the file has {} bytes", object.size);
            return Err(Failure::field("offset_bytes", message));
        }
        Ok(Self {
            content,
            header: header(name, object, offset_bytes),
            skip_bytes: offset_bytes,
        })
    }

    /// Sends header and chunks until the end, or until nobody takes them.
    pub(crate) async fn run(self, core: Arc<Core>, frames: Frames, place: OwnedSemaphorePermit) {
        let last = frames.clone();
        tokio::select! {
            sent = self.send(&core, frames) => {
                if let Err(failure) = sent {
                    let _ = last.try_send(Err(failure.into()));
                }
            }
            () = core.drain.until_cut() => {
                let _ = last.try_send(Err(Failure::draining().into()));
            }
        }
        drop(place);
    }

    async fn send(mut self, core: &Core, frames: Frames) -> Result<(), Failure> {
        let mut offset_bytes = self.header.offset_bytes;
        if !tell(core, &frames, Frame::Header(self.header.clone())).await? {
            return Ok(());
        }
        while let Some(data) = self.next(core).await? {
            let chunk = v1::Chunk {
                offset_bytes,
                crc32: crc32fast::hash(&data),
                data,
            };
            offset_bytes += chunk.data.len() as u64;
            if !tell(core, &frames, Frame::Chunk(chunk)).await? {
                return Ok(());
            }
        }
        Ok(())
    }

    /// The next bytes to send; none at the end.
    async fn next(&mut self, core: &Core) -> Result<Option<Bytes>, Failure> {
        match &mut self.content {
            Content::AtHand(rest) => {
                let part = rest.split_to(rest.len().min(limits::CHUNK_BYTES_MAX));
                return Ok(Some(part).filter(|part| !part.is_empty()));
            }
            Content::Stored(_) => {}
        }
        loop {
            let Content::Stored(mut reader) =
                std::mem::replace(&mut self.content, Content::AtHand(Bytes::new()))
            else {
                return Ok(None);
            };
            let (reader, part) = core
                .depot
                .ask(move |_| {
                    let part = reader.next_part(limits::CHUNK_BYTES_MAX)?;
                    Ok((reader, part))
                })
                .await?;
            self.content = Content::Stored(reader);
            let Some(part) = part else { return Ok(None) };
            let mut part = Bytes::from(part);
            let skipped = part
                .len()
                .min(usize::try_from(self.skip_bytes).unwrap_or(usize::MAX));
            self.skip_bytes -= skipped as u64;
            let rest = part.split_off(skipped);
            if !rest.is_empty() {
                return Ok(Some(rest));
            }
        }
    }
}

async fn open_stored(
    core: &Core,
    open: impl FnOnce(&tarehouse_store::Store) -> Result<ObjectReader, StoreError> + Send + 'static,
) -> Result<ObjectReader, Failure> {
    core.depot
        .ask_plainly(open)
        .await?
        .map_err(|error| match error {
            StoreError::NotThereYet { what, .. } => Failure::NotFound {
                reason: reason::ARRAY_NOT_FOUND,
                message: format!("{what} is not there yet"),
            },
            other => Failure::from(other),
        })
}

/// Why a submission has no projected constants.
fn not_projected(view: &SubmissionView) -> Failure {
    let (reason, why) = match (view.verdict, view.report) {
        (Some(Verdict::Reject), _) => (
            reason::PROJECTED_NOT_KEPT,
            "was rejected; projected constants are kept of accepted and held submissions only",
        ),
        (Some(Verdict::Accept | Verdict::Hold), _) => (
            reason::PROJECTED_NOT_KEPT,
            "was examined without storing projected constants",
        ),
        (None, Some(_)) => (
            reason::PROJECTED_NOT_KEPT,
            "was held because its examination did not finish; there are no projected constants",
        ),
        (None, None) => (
            reason::ARRAY_NOT_FOUND,
            "has not been examined; there are no projected constants yet",
        ),
    };
    Failure::NotFound {
        reason,
        message: format!("submission {} {why}", view.id),
    }
}

fn header(array: String, object: ObjectRef, offset_bytes: u64) -> v1::FetchArrayHeader {
    v1::FetchArrayHeader {
        array,
        size_bytes: object.size,
        digest: digest_to_hex(&object.digest),
        offset_bytes,
    }
}

/// Sends a frame; false where nobody listens any more.
async fn tell(core: &Core, frames: &Frames, frame: Frame) -> Result<bool, Failure> {
    let idle = core.config.stream_idle;
    let message = v1::FetchArrayResponse { frame: Some(frame) };
    match tokio::time::timeout(idle, frames.send(Ok(message))).await {
        Ok(sent) => Ok(sent.is_ok()),
        Err(_) => Err(Failure::Late {
            reason: reason::STREAM_IDLE,
            message: format!("nothing was taken for {} s", idle.as_secs_f64()),
        }),
    }
}
