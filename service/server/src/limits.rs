//! The one table of what this service takes at most. `GetServerInfo` tells it; every handler keeps to it.

use tarehouse_proto::{limits, v1};

/// Bytes of one chunk.
pub const CHUNK_BYTES_MAX: usize = narrow(limits::CHUNK_BYTES.max) as usize;
/// Bytes of one message of an upload stream, frame and all.
pub const UPLOAD_MESSAGE_BYTES_MAX: usize = 1024 * 1024;
/// Bytes of one message to any other method: a manifest with its declarations.
pub const MESSAGE_BYTES_MAX: usize = 2 * 1024 * 1024;
/// Entries on one page of a list.
pub const PAGE_SIZE_MAX: u32 = narrow(limits::PAGE_SIZE.max);
/// Entries on one page where the request says 0.
pub const PAGE_SIZE_DEFAULT: u32 = limits::PAGE_SIZE_DEFAULT;
/// Temperatures in one ranking.
pub const TEMPERATURES_MAX: usize = narrow(limits::TEMPERATURES.max) as usize;
/// Members of one series.
pub const SERIES_MEMBERS_MAX: usize = 64;
/// Largest pressure that a request may name, GPa.
pub const PRESSURE_MAX_GPA: f64 = 1000.0;
/// Pressures of one request.
pub const PRESSURES_MAX: usize = 64;
/// Arrays of one submission.
pub const ARRAYS_MAX: usize = tarehouse_store::limits::ARRAY_COUNT_MAX;
/// Watches open at the same time.
pub const WATCHES_MAX: usize = 1024;
/// Bytes of a free text: reason, compound, level, contributor key in a filter.
pub const TEXT_BYTES_MAX: usize = 1024;

/// A limit of the contract that is far below 2^32.
#[allow(
    clippy::cast_possible_truncation,
    reason = "the limits of the contract are checked to be small at compile time"
)]
const fn narrow(limit: u64) -> u32 {
    assert!(
        limit <= u32::MAX as u64,
        "a limit of the contract is too large"
    );
    limit as u32
}

/// The table as `GetServerInfo` tells it.
pub(crate) fn on_the_wire(upload_streams_max: usize) -> v1::Limits {
    let count = |n: usize| u32::try_from(n).unwrap_or(u32::MAX);
    v1::Limits {
        atoms_max: limits::ATOMS.max,
        cells_max: limits::CELLS.max,
        array_bytes_max: limits::ARRAY_BYTES.max,
        manifest_bytes_max: limits::MANIFEST_BYTES.max,
        chunk_bytes_max: limits::CHUNK_BYTES.max,
        page_size_max: PAGE_SIZE_MAX,
        page_size_default: PAGE_SIZE_DEFAULT,
        temperatures_max: count(TEMPERATURES_MAX),
        upload_streams_max: count(upload_streams_max),
    }
}
