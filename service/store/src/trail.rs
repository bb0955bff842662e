//! The trail: append-only, hash-chained segments that hold every change of state. It is the truth.
//!
//! Invariants: a frame is answered for only after it and all before it are durable; a segment is never rewritten, only
//! its unanswered tail is ever cut; the anchor is never ahead of what is durable.

pub(crate) mod anchor;
pub(crate) mod frame;
pub(crate) mod scan;
pub(crate) mod segment;
pub(crate) mod writer;

use tarehouse_assay::submission::Digest;

/// Hash that the first frame follows.
pub(crate) fn genesis() -> Digest {
    *blake3::hash(b"tarehouse-trail/1").as_bytes()
}
