//! Reasons of `ErrorInfo`; only ever appended to.

/// The package breaks the package format; the violations say where.
pub const PACKAGE_INVALID: &str = "PACKAGE_INVALID";
/// A field of the request is not what its comment asks for.
pub const REQUEST_INVALID: &str = "REQUEST_INVALID";
/// The declared arrays do not agree with the manifest.
pub const ARRAYS_DISAGREE: &str = "ARRAYS_DISAGREE";
/// A message is longer than the service reads.
pub const MESSAGE_TOO_LARGE: &str = "MESSAGE_TOO_LARGE";
/// The stream ended, or its frames came in another order than open, chunks, finish.
pub const STREAM_INCOMPLETE: &str = "STREAM_INCOMPLETE";
/// The CRC-32 of a chunk is not that of its bytes.
pub const CHECKSUM_MISMATCH: &str = "CHECKSUM_MISMATCH";
/// A chunk does not follow the committed bytes.
pub const OFFSET_MISMATCH: &str = "OFFSET_MISMATCH";
/// More bytes than announced.
pub const SIZE_EXCEEDED: &str = "SIZE_EXCEEDED";
/// The digest of the whole array is not the declared one.
pub const DIGEST_MISMATCH: &str = "DIGEST_MISMATCH";
/// The size of the whole array is not the declared one.
pub const SIZE_MISMATCH: &str = "SIZE_MISMATCH";
/// The caller was silent for too long.
pub const STREAM_IDLE: &str = "STREAM_IDLE";
/// The method's time is over.
pub const DEADLINE_EXCEEDED: &str = "DEADLINE_EXCEEDED";
/// No such submission.
pub const SUBMISSION_NOT_FOUND: &str = "SUBMISSION_NOT_FOUND";
/// No such record.
pub const RECORD_NOT_FOUND: &str = "RECORD_NOT_FOUND";
/// No such array.
pub const ARRAY_NOT_FOUND: &str = "ARRAY_NOT_FOUND";
/// The submission has not been examined.
pub const REPORT_NOT_FOUND: &str = "REPORT_NOT_FOUND";
/// No such compound.
pub const COMPOUND_NOT_FOUND: &str = "COMPOUND_NOT_FOUND";
/// The request id was used for another package.
pub const REQUEST_ID_CONFLICT: &str = "REQUEST_ID_CONFLICT";
/// Another upload of this array is open.
pub const UPLOAD_IN_PROGRESS: &str = "UPLOAD_IN_PROGRESS";
/// The etag is not the present one.
pub const ETAG_MISMATCH: &str = "ETAG_MISMATCH";
/// The state does not allow it.
pub const STATE_FORBIDS: &str = "STATE_FORBIDS";
/// Arrays are missing.
pub const ARRAYS_MISSING: &str = "ARRAYS_MISSING";
/// Too many submissions wait.
pub const QUEUE_FULL: &str = "QUEUE_FULL";
/// Too many upload streams are open.
pub const UPLOADS_FULL: &str = "UPLOADS_FULL";
/// Too many watches are open.
pub const WATCHES_FULL: &str = "WATCHES_FULL";
/// Too many arrays are being fetched.
pub const FETCHES_FULL: &str = "FETCHES_FULL";
/// A temperature lies outside the grid of the policy.
pub const TEMPERATURE_OUTSIDE: &str = "TEMPERATURE_OUTSIDE";
/// The members of a series are of different forms or levels.
pub const SERIES_MIXED: &str = "SERIES_MIXED";
/// The pressure is beyond what one volume answers for.
pub const VOLUME_SERIES_NEEDED: &str = "VOLUME_SERIES_NEEDED";
/// The members make no volume series.
pub const VOLUME_SERIES_UNFIT: &str = "VOLUME_SERIES_UNFIT";
/// No temperature and pressure asked for lies inside the volumes examined.
pub const VOLUMES_EXCEEDED: &str = "VOLUMES_EXCEEDED";
/// The service is stopping.
pub const DRAINING: &str = "DRAINING";
/// The principal holds too many drafts.
pub const DRAFT_QUOTA: &str = "DRAFT_QUOTA";
/// No space is left in the store.
pub const NO_SPACE: &str = "NO_SPACE";
/// The store takes no writes.
pub const STORE_UNAVAILABLE: &str = "STORE_UNAVAILABLE";
/// What is stored is not what was stored.
pub const STORE_DAMAGED: &str = "STORE_DAMAGED";
/// A fault of the service.
pub const INTERNAL: &str = "INTERNAL";
/// The projected constants of this submission were never stored; the message says why.
pub const PROJECTED_NOT_KEPT: &str = "PROJECTED_NOT_KEPT";
/// More records than one ranking reads.
pub const RANKING_TOO_LARGE: &str = "RANKING_TOO_LARGE";
