//! One frame of the trail: bytes in, bytes out.
//!
//! ```text
//! mark 4 | head length 4 | payload length 4 | previous hash 32 | head | payload | hash 32
//! ```
//! Numbers are little-endian. The hash is BLAKE3 over (previous hash ‖ head ‖ payload), with both lengths before them.
//! Since the previous hash is inside, a frame can be told from rubbish wherever it is found; that is what lets the
//! start-up say whether anything valid follows a bad spot.

use prost::Message;
use tarehouse_assay::submission::Digest;

use crate::limits::{HEAD_BYTES_MAX, PAYLOAD_BYTES_MAX};

/// First bytes of a frame.
pub(crate) const MARK: [u8; 4] = [0xF5, b'f', b'r', 0x0A];
/// Bytes before the head.
const FIXED: usize = 4 + 4 + 4 + 32;
/// Bytes of a hash.
const HASH: usize = 32;

/// What every change of state carries, with its payload.
#[derive(Debug, Clone, PartialEq, Eq)]
pub(crate) struct Frame {
    pub(crate) seq: u64,
    pub(crate) time_ms: u64,
    pub(crate) principal: String,
    pub(crate) policy_digest: Option<Digest>,
    pub(crate) program_version: String,
    pub(crate) kind: u32,
    pub(crate) version: u32,
    pub(crate) payload: Vec<u8>,
}

/// A frame read from bytes.
#[derive(Debug, Clone, PartialEq, Eq)]
pub(crate) struct Read {
    pub(crate) frame: Frame,
    pub(crate) previous: Digest,
    pub(crate) hash: Digest,
    /// Bytes it takes.
    pub(crate) length: usize,
}

/// Why bytes are no frame.
#[derive(Debug, Clone, Copy, PartialEq, Eq, thiserror::Error)]
pub(crate) enum FrameFault {
    #[error("the bytes end inside a frame")]
    Short,
    #[error("there is no frame mark")]
    Mark,
    #[error("a length is beyond its limit")]
    Length,
    #[error("the hash does not fit")]
    Hash,
    #[error("the head cannot be decoded")]
    Head,
}

#[derive(Clone, PartialEq, Message)]
struct Head {
    #[prost(uint64, tag = "1")]
    seq: u64,
    #[prost(uint64, tag = "2")]
    time_ms: u64,
    #[prost(string, tag = "3")]
    principal: String,
    #[prost(bytes = "vec", optional, tag = "4")]
    policy_digest: Option<Vec<u8>>,
    #[prost(string, tag = "5")]
    program_version: String,
    #[prost(uint32, tag = "6")]
    kind: u32,
    #[prost(uint32, tag = "7")]
    version: u32,
}

fn chain_hash(previous: &Digest, lengths: &[u8], head: &[u8], payload: &[u8]) -> Digest {
    let mut hasher = blake3::Hasher::new();
    hasher.update(previous);
    hasher.update(lengths);
    hasher.update(head);
    hasher.update(payload);
    *hasher.finalize().as_bytes()
}

impl Frame {
    /// Bytes of the frame behind `previous`, and its hash.
    pub(crate) fn encode(&self, previous: &Digest) -> (Vec<u8>, Digest) {
        let head = Head {
            seq: self.seq,
            time_ms: self.time_ms,
            principal: self.principal.clone(),
            policy_digest: self.policy_digest.map(|digest| digest.to_vec()),
            program_version: self.program_version.clone(),
            kind: self.kind,
            version: self.version,
        }
        .encode_to_vec();
        let mut lengths = Vec::with_capacity(8);
        for part in [&head, &self.payload] {
            let length = u32::try_from(part.len()).unwrap_or(u32::MAX);
            lengths.extend_from_slice(&length.to_le_bytes());
        }
        let hash = chain_hash(previous, &lengths, &head, &self.payload);
        let mut bytes = Vec::with_capacity(FIXED + head.len() + self.payload.len() + HASH);
        bytes.extend_from_slice(&MARK);
        bytes.extend_from_slice(&lengths);
        bytes.extend_from_slice(previous);
        bytes.extend_from_slice(&head);
        bytes.extend_from_slice(&self.payload);
        bytes.extend_from_slice(&hash);
        (bytes, hash)
    }

    /// Reads the frame at the start of `bytes`.
    pub(crate) fn decode(bytes: &[u8]) -> Result<Read, FrameFault> {
        let mark = bytes.get(..4).ok_or(FrameFault::Short)?;
        if mark != MARK {
            return Err(FrameFault::Mark);
        }
        let lengths = bytes.get(4..12).ok_or(FrameFault::Short)?;
        let length_at = |at: usize| -> Result<usize, FrameFault> {
            let part = lengths.get(at..at + 4).ok_or(FrameFault::Short)?;
            let number = u32::from_le_bytes(part.try_into().map_err(|_| FrameFault::Short)?);
            usize::try_from(number).map_err(|_| FrameFault::Length)
        };
        let (head_length, payload_length) = (length_at(0)?, length_at(4)?);
        if head_length > HEAD_BYTES_MAX || payload_length > PAYLOAD_BYTES_MAX {
            return Err(FrameFault::Length);
        }
        let length = FIXED + head_length + payload_length + HASH;
        let whole = bytes.get(..length).ok_or(FrameFault::Short)?;
        let digest_at = |at: usize| -> Result<Digest, FrameFault> {
            let part = whole.get(at..at + 32).ok_or(FrameFault::Short)?;
            part.try_into().map_err(|_| FrameFault::Short)
        };
        let previous = digest_at(12)?;
        let hash = digest_at(length - HASH)?;
        let head = whole
            .get(FIXED..FIXED + head_length)
            .ok_or(FrameFault::Short)?;
        let payload = whole
            .get(FIXED + head_length..length - HASH)
            .ok_or(FrameFault::Short)?;
        if chain_hash(&previous, lengths, head, payload) != hash {
            return Err(FrameFault::Hash);
        }
        let head = Head::decode(head).map_err(|_| FrameFault::Head)?;
        let policy_digest = match head.policy_digest {
            None => None,
            Some(bytes) => Some(bytes.try_into().map_err(|_| FrameFault::Head)?),
        };
        Ok(Read {
            frame: Self {
                seq: head.seq,
                time_ms: head.time_ms,
                principal: head.principal,
                policy_digest,
                program_version: head.program_version,
                kind: head.kind,
                version: head.version,
                payload: payload.to_vec(),
            },
            previous,
            hash,
            length,
        })
    }

    /// Whether a valid frame starts anywhere in `bytes`.
    pub(crate) fn found_in(bytes: &[u8]) -> bool {
        bytes
            .windows(MARK.len())
            .enumerate()
            .filter(|(_, window)| *window == MARK)
            .any(|(at, _)| Self::decode(bytes.get(at..).unwrap_or_default()).is_ok())
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn sample() -> Frame {
        Frame {
            seq: 7,
            time_ms: 1_700_000_000_000,
            principal: "mira".to_owned(),
            policy_digest: Some([3; 32]),
            program_version: "0.1.0".to_owned(),
            kind: 2,
            version: 1,
            payload: vec![1, 2, 3, 4, 5],
        }
    }

    #[test]
    fn decode_of_encode_is_the_same() {
        let (bytes, hash) = sample().encode(&[9; 32]);
        let read = Frame::decode(&bytes).unwrap();
        assert_eq!(read.frame, sample());
        assert_eq!(
            (read.previous, read.hash, read.length),
            ([9; 32], hash, bytes.len())
        );
    }

    #[test]
    fn every_flipped_bit_and_every_cut_is_noticed() {
        let (bytes, _) = sample().encode(&[9; 32]);
        for at in 0..bytes.len() {
            for bit in 0..8 {
                let mut bad = bytes.clone();
                bad[at] ^= 1 << bit;
                assert!(Frame::decode(&bad).is_err(), "byte {at} bit {bit}");
            }
            assert!(Frame::decode(&bytes[..at]).is_err(), "cut at {at}");
        }
    }

    #[test]
    fn a_frame_is_found_behind_rubbish() {
        let (bytes, _) = sample().encode(&[9; 32]);
        let mut mixed = vec![0xF5, 0, 1];
        mixed.extend_from_slice(&MARK);
        mixed.extend_from_slice(&bytes);
        assert!(Frame::found_in(&mixed));
        mixed.pop();
        assert!(!Frame::found_in(&mixed));
    }
}
