//! Sending a package: create, send every array in chunks, seal. What has arrived is never sent again.
//!
//! One request id serves all attempts of one call. The service finds a package that it has seen by its digest, so a
//! second `submit` of the same folder goes on where the first stopped.

use prost::bytes::Bytes;
use tarehouse_proto::v1::send_array_request::Frame;
use tarehouse_proto::v1::{
    Array, ArrayDeclaration, Chunk, CreateSubmissionRequest, GetTransferStatusRequest,
    SealSubmissionRequest, SendArrayFinish, SendArrayOpen, SendArrayRequest, State, Submission,
};
use tonic::{Code, Status};
use tonic_types::StatusExt as _;

use crate::connect::{Session, asking, sealing};
use crate::failure::Failure;
use crate::package_folder::PackageFiles;
use crate::progress::{Bars, Handle};
use crate::retry::{Pause, Retry, retrying};

/// Bytes of data in one chunk.
pub const CHUNK_BYTES: usize = 512 * 1024;
/// Attempts at an array that is refused as damaged or as being sent by somebody else.
const REFUSED_ATTEMPTS_MAX: u32 = 5;

/// Creates the submission of a package, or finds the one that stands already.
///
/// # Errors
/// The service's answer.
pub async fn create(
    session: &Session,
    files: &PackageFiles,
    pause: &Pause,
) -> Result<Submission, Failure> {
    let request = CreateSubmissionRequest {
        manifest: files.manifest.clone(),
        arrays: files
            .arrays
            .iter()
            .map(|(name, bytes)| ArrayDeclaration {
                name: name.clone(),
                size_bytes: bytes.len() as u64,
                digest: blake3::hash(bytes).to_hex().to_string(),
            })
            .collect(),
        request_id: uuid::Uuid::new_v4().to_string(),
        validate_only: false,
    };
    retrying(pause, || {
        let mut client = session.submissions();
        let request = request.clone();
        async move { client.create_submission(asking(request)).await }
    })
    .await
    .map_err(|status| Failure::service(format!("submit {}", files.folder), status))?
    .into_inner()
    .submission
    .ok_or_else(|| Failure::missing("the submission"))
}

/// Sends what is missing of every array of a draft.
///
/// # Errors
/// The service's answer, after trying again where that may help.
pub async fn send_arrays(
    session: &Session,
    submission: &str,
    files: &PackageFiles,
    bars: &Bars,
    pause: &Pause,
) -> Result<(), Failure> {
    for (name, bytes) in &files.arrays {
        let bar = bars.bytes(&format!("{} {name}", files.folder), bytes.len() as u64);
        send_array(session, submission, name, bytes, &bar.handle(), pause)
            .await
            .map_err(|status| {
                Failure::service(format!("send {name} of {}", files.folder), status)
            })?;
    }
    Ok(())
}

/// Sends what is missing of one array; after a cut it asks how much arrived and goes on from there.
async fn send_array(
    session: &Session,
    submission: &str,
    name: &str,
    bytes: &Bytes,
    bar: &Handle,
    pause: &Pause,
) -> Result<Array, Status> {
    let mut retry = Retry::new(pause.clone());
    let mut refused = 0;
    let mut furthest = 0;
    let mut from_start = false;
    loop {
        let offset = if from_start {
            Ok(0)
        } else {
            committed(session, submission, name).await
        };
        let sent = match offset {
            Ok(offset) => {
                let offset = offset.min(bytes.len() as u64);
                if offset > furthest {
                    furthest = offset;
                    retry.progressed();
                }
                send_from(session, submission, name, bytes, bar, offset).await
            }
            Err(status) => Err(status),
        };
        let status = match sent {
            Ok(array) => return Ok(array),
            Err(status) => status,
        };
        // What arrived earlier is not what was sent: once more, all of it.
        let is_damaged = reason(&status).is_some_and(|reason| reason == "DIGEST_MISMATCH");
        if is_damaged && !from_start {
            from_start = true;
            continue;
        }
        if may_pass(&status) && refused < REFUSED_ATTEMPTS_MAX {
            refused += 1;
            retry
                .wait_after(Status::unavailable("the array was refused"))
                .await
                .map_err(|_| status)?;
        } else {
            retry.wait_after(status).await?;
        }
    }
}

/// Whether a refused upload may be taken after asking again what has arrived: another stream of the same array, perhaps
/// our own that was cut, was still being written; or a piece was damaged on the way; or this machine slept.
fn may_pass(status: &Status) -> bool {
    const REASONS: [&str; 3] = ["OFFSET_MISMATCH", "CHECKSUM_MISMATCH", "STREAM_IDLE"];
    matches!(status.code(), Code::Aborted | Code::DataLoss)
        || reason(status).is_some_and(|reason| REASONS.contains(&reason.as_str()))
}

fn reason(status: &Status) -> Option<String> {
    let details = status.get_error_details();
    details.error_info().map(|info| info.reason.clone())
}

async fn send_from(
    session: &Session,
    submission: &str,
    name: &str,
    bytes: &Bytes,
    bar: &Handle,
    offset: u64,
) -> Result<Array, Status> {
    bar.set(offset);
    let frames = frames(submission, name, bytes.clone(), offset, bar.clone());
    session
        .transfers()
        .send_array(tokio_stream::iter(frames))
        .await?
        .into_inner()
        .array
        .ok_or_else(|| Status::internal("an answer without its array"))
}

/// Bytes of an array that the service holds.
async fn committed(session: &Session, submission: &str, name: &str) -> Result<u64, Status> {
    let request = GetTransferStatusRequest {
        submission: submission.to_owned(),
    };
    let answer = session
        .transfers()
        .get_transfer_status(asking(request))
        .await?;
    Ok(answer
        .into_inner()
        .arrays
        .iter()
        .find(|array| array.name == name)
        .map_or(0, |array| array.committed_bytes))
}

/// The frames of one upload from `offset` on, made as they are sent.
pub fn frames(
    submission: &str,
    name: &str,
    bytes: Bytes,
    offset: u64,
    bar: Handle,
) -> impl Iterator<Item = SendArrayRequest> + Send + use<> {
    let open = Frame::Open(SendArrayOpen {
        submission: submission.to_owned(),
        array: name.to_owned(),
        offset_bytes: offset,
    });
    let finish = Frame::Finish(SendArrayFinish {
        size_bytes: bytes.len() as u64,
        digest: blake3::hash(&bytes).to_hex().to_string(),
    });
    let start = usize::try_from(offset)
        .unwrap_or(usize::MAX)
        .min(bytes.len());
    let chunks = (start..bytes.len()).step_by(CHUNK_BYTES).map(move |from| {
        let to = bytes.len().min(from + CHUNK_BYTES);
        let data = bytes.slice(from..to);
        bar.set(to as u64);
        Frame::Chunk(Chunk {
            offset_bytes: from as u64,
            crc32: crc32fast::hash(&data),
            data,
        })
    });
    std::iter::once(open)
        .chain(chunks)
        .chain(std::iter::once(finish))
        .map(|frame| SendArrayRequest { frame: Some(frame) })
}

/// Seals a draft: it is queued for its examination.
///
/// # Errors
/// The service's answer.
pub async fn seal(
    session: &Session,
    submission: &str,
    folder: &str,
    pause: &Pause,
) -> Result<Submission, Failure> {
    let request = SealSubmissionRequest {
        name: submission.to_owned(),
    };
    retrying(pause, || {
        let mut client = session.submissions();
        let request = request.clone();
        async move { client.seal_submission(sealing(request)).await }
    })
    .await
    .map_err(|status| Failure::service(format!("seal {folder}"), status))?
    .into_inner()
    .submission
    .ok_or_else(|| Failure::missing("the submission"))
}

/// Whether arrays may still be sent to a submission in this state.
pub fn takes_arrays(state: State) -> bool {
    state == State::Draft
}

#[cfg(test)]
mod tests {
    use super::*;

    fn all_frames(size: usize, offset: u64) -> Vec<Frame> {
        let bytes: Bytes = (0..size).map(|k| u8::try_from(k % 251).unwrap()).collect();
        let bar = Bars::new(false).bytes("x", 1);
        frames("submissions/1", "x.npy", bytes, offset, bar.handle())
            .map(|request| request.frame.unwrap())
            .collect()
    }

    #[test]
    fn an_upload_is_open_chunks_in_order_and_finish() {
        for (size, offset, chunk_count) in [
            (0, 0, 0),
            (1, 0, 1),
            (CHUNK_BYTES, 0, 1),
            (CHUNK_BYTES + 1, 0, 2),
            (3 * CHUNK_BYTES, 100, 3),
            (10, 10, 0),
        ] {
            let frames = all_frames(size, offset);
            assert_eq!(frames.len(), chunk_count + 2);
            let (Frame::Open(open), Frame::Finish(finish)) =
                (frames.first().unwrap(), frames.last().unwrap())
            else {
                panic!("the ends are wrong");
            };
            assert_eq!(
                (open.offset_bytes, finish.size_bytes),
                (offset, size as u64)
            );
            let mut place = offset;
            for frame in &frames[1..frames.len() - 1] {
                let Frame::Chunk(chunk) = frame else {
                    panic!("not a chunk");
                };
                assert_eq!(chunk.offset_bytes, place);
                assert_eq!(chunk.crc32, crc32fast::hash(&chunk.data));
                assert!(chunk.data.len() <= CHUNK_BYTES);
                place += chunk.data.len() as u64;
            }
            assert_eq!(place, size as u64);
        }
    }
}
