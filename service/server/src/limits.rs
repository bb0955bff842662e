//! The one table of what this service takes at most. `GetServerInfo` tells it; every handler keeps to it.

use tarehouse_proto::v1;

/// Bytes of one chunk.
pub const CHUNK_BYTES_MAX: usize = 512 * 1024;
/// Bytes of one message of an upload stream, frame and all.
pub const UPLOAD_MESSAGE_BYTES_MAX: usize = 1024 * 1024;
/// Bytes of one message to any other method: a manifest with its declarations.
pub const MESSAGE_BYTES_MAX: usize = 2 * 1024 * 1024;
/// Entries on one page of a list.
pub const PAGE_SIZE_MAX: u32 = 200;
/// Entries on one page where the request says 0.
pub const PAGE_SIZE_DEFAULT: u32 = 50;
/// Temperatures in one ranking.
pub const TEMPERATURES_MAX: usize = 64;
/// Records that one ranking reads.
pub const RANKED_RECORDS_MAX: usize = 2000;
/// Bytes of a free text: reason, compound, level, contributor key in a filter.
pub const TEXT_BYTES_MAX: usize = 1024;
/// Attempts at an examination before it is given to a curator.
pub const ATTEMPTS_MAX: u32 = 3;

/// The table as `GetServerInfo` tells it.
pub(crate) fn on_the_wire(upload_streams_max: usize) -> v1::Limits {
    v1::Limits {
        atoms_max: 2048,
        cells_max: tarehouse_physics::supercell::CELLS_MAX,
        array_bytes_max: 2 << 30,
        manifest_bytes_max: 1 << 20,
        chunk_bytes_max: CHUNK_BYTES_MAX as u64,
        page_size_max: PAGE_SIZE_MAX,
        page_size_default: PAGE_SIZE_DEFAULT,
        temperatures_max: TEMPERATURES_MAX as u32,
        upload_streams_max: u32::try_from(upload_streams_max).unwrap_or(u32::MAX),
    }
}
