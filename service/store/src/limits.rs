//! Every size this crate bounds, in one table.

/// Arrays of one submission.
pub const ARRAY_COUNT_MAX: usize = 16;
/// Name of an array file, bytes.
pub const ARRAY_NAME_BYTES_MAX: usize = 64;
/// One array, bytes.
pub const ARRAY_BYTES_MAX: u64 = 16 << 30;
/// Manifest of a package, bytes.
pub const MANIFEST_BYTES_MAX: usize = 8 << 20;
/// Report of an examination, bytes.
pub const REPORT_BYTES_MAX: usize = 64 << 20;
/// Any name or label, bytes.
pub const TEXT_BYTES_MAX: usize = 512;
/// Reason of a withdrawal, bytes.
pub const REASON_BYTES_MAX: usize = 1024;
/// Encoded summary of a record, bytes.
pub const SUMMARY_BYTES_MAX: usize = 4096;
/// Entries of one page.
pub const PAGE_SIZE_MAX: usize = 1000;
/// Entries of a page where none are asked for.
pub const PAGE_SIZE_DEFAULT: usize = 50;
/// Index entries looked at for one page, where a filter drops most of them.
pub const PAGE_SCAN_MAX: usize = 20_000;
/// Crashed attempts after which a submission is held.
pub const CRASHED_ATTEMPTS_MAX: u32 = 3;
/// Payload of a frame, bytes.
pub(crate) const PAYLOAD_BYTES_MAX: usize = 1 << 20;
/// Head of a frame, bytes.
pub(crate) const HEAD_BYTES_MAX: usize = 8 << 10;
/// Frames that share one sync.
pub(crate) const BATCH_FRAMES_MAX: usize = 512;
/// Bytes that share one sync.
pub(crate) const BATCH_BYTES_MAX: usize = 4 << 20;
/// Changes durable but not yet in the index; beyond it the trail waits for the index.
pub(crate) const BACKLOG_MAX: usize = 10_000;
/// Bytes read at a time while hashing.
pub(crate) const COPY_BYTES: usize = 1 << 20;
