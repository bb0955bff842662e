//! Reads the whole trail, checks the chain and says where it ends and how.

use std::io;
use std::path::{Path, PathBuf};

use tarehouse_assay::submission::Digest;

use super::frame::Frame;
use super::segment::{self, HEADER, Header};
use super::{anchor, genesis};
use crate::disk::{self, Disk, OpenMode};
use crate::error::{OpenError, TrailDamage};

/// Largest segment that is read; far above what the writer makes.
const SEGMENT_BYTES_MAX: u64 = 4 << 30;

/// Where and how the trail ends.
#[derive(Debug)]
pub(crate) struct Scan {
    /// Last valid frame; 0 if there is none.
    pub(crate) last_seq: u64,
    /// Its hash.
    pub(crate) head: Digest,
    /// Segment to append to, with its valid length; none in an empty trail.
    pub(crate) active: Option<(PathBuf, u64)>,
    /// First frame of that segment.
    pub(crate) active_first_seq: u64,
    pub(crate) ending: Ending,
}

/// How the trail ends.
#[derive(Debug, PartialEq, Eq)]
pub(crate) enum Ending {
    /// With a whole frame.
    Whole,
    /// With rubbish behind the last whole frame, as an interrupted write leaves it.
    Torn {
        path: PathBuf,
        good_length: u64,
        detail: String,
    },
    /// Something valid follows the bad spot.
    Damaged(TrailDamage),
}

struct Walk<'a> {
    scan: Scan,
    visit: &'a mut dyn FnMut(Frame, Digest) -> Result<(), OpenError>,
}

/// Reads every valid frame in order.
pub(crate) fn scan(
    disk: &dyn Disk,
    root: &Path,
    visit: &mut dyn FnMut(Frame, Digest) -> Result<(), OpenError>,
) -> Result<Scan, OpenError> {
    let folder = segment::folder(root);
    let failed = |doing: &'static str, path: &Path| {
        let path = path.to_path_buf();
        move |source: io::Error| OpenError::Io {
            doing,
            path,
            source,
        }
    };
    let names = segment::list(disk, &folder).map_err(failed("listing segments", &folder))?;
    let mut walk = Walk {
        scan: Scan {
            last_seq: 0,
            head: genesis(),
            active: None,
            active_first_seq: 1,
            ending: Ending::Whole,
        },
        visit,
    };
    for (index, name) in names.iter().enumerate() {
        let path = folder.join(name);
        let bytes = disk::read_file(disk, &path, SEGMENT_BYTES_MAX)
            .map_err(failed("reading a segment", &path))?;
        let Some((offset, detail)) = walk.segment(&path, name, &bytes)? else {
            continue;
        };
        let rest = bytes.get(offset..).unwrap_or_default();
        let mut followed = Frame::found_in(rest);
        for later in names.iter().skip(index + 1) {
            let path = folder.join(later);
            let bytes = disk::read_file(disk, &path, SEGMENT_BYTES_MAX)
                .map_err(failed("reading a segment", &path))?;
            followed = followed || Header::decode(&bytes).is_some() || Frame::found_in(&bytes);
        }
        walk.scan.ending = if followed || index + 1 < names.len() {
            Ending::Damaged(TrailDamage {
                segment: name.clone(),
                offset: offset as u64,
                after_seq: walk.scan.last_seq,
                detail,
            })
        } else {
            Ending::Torn {
                path,
                good_length: offset as u64,
                detail,
            }
        };
        break;
    }
    Ok(walk.scan)
}

impl Walk<'_> {
    /// Walks one segment; returns the offset and nature of the first bad spot.
    fn segment(
        &mut self,
        path: &Path,
        name: &str,
        bytes: &[u8],
    ) -> Result<Option<(usize, String)>, OpenError> {
        let scan = &mut self.scan;
        let Some(header) = Header::decode(bytes) else {
            return Ok(Some((0, "the segment header is not valid".to_owned())));
        };
        if header.first_seq != scan.last_seq + 1
            || header.previous != scan.head
            || name != segment::name(header.first_seq)
        {
            return Ok(Some((
                0,
                "the segment does not follow the one before".to_owned(),
            )));
        }
        let mut offset = HEADER;
        scan.active_first_seq = header.first_seq;
        scan.active = Some((path.to_path_buf(), offset as u64));
        while offset < bytes.len() {
            let read = match Frame::decode(bytes.get(offset..).unwrap_or_default()) {
                Ok(read) => read,
                Err(fault) => return Ok(Some((offset, fault.to_string()))),
            };
            if read.previous != scan.head || read.frame.seq != scan.last_seq + 1 {
                return Ok(Some((
                    offset,
                    "the frame does not follow the one before".to_owned(),
                )));
            }
            scan.last_seq = read.frame.seq;
            scan.head = read.hash;
            offset += read.length;
            scan.active = Some((path.to_path_buf(), offset as u64));
            (self.visit)(read.frame, read.hash)?;
        }
        Ok(None)
    }
}

/// Compares the trail with its anchor; returns the anchor's counter.
pub(crate) fn compare_with_anchor(
    reading: anchor::Reading,
    scan: &Scan,
    hash_at_anchor: Option<Digest>,
) -> Result<u64, OpenError> {
    if matches!(scan.ending, Ending::Damaged(_)) {
        return Ok(0);
    }
    match reading {
        anchor::Reading::Missing | anchor::Reading::Damaged if scan.last_seq == 0 => Ok(0),
        anchor::Reading::Missing | anchor::Reading::Damaged => Err(OpenError::AnchorDamaged {
            trail_seq: scan.last_seq,
        }),
        anchor::Reading::Mark(mark, _) if mark.seq > scan.last_seq => {
            let place = match (&scan.ending, &scan.active) {
                (
                    Ending::Torn {
                        path,
                        good_length,
                        detail,
                    },
                    _,
                ) => {
                    format!("{} at byte {good_length}: {detail}", path.display())
                }
                (_, Some((path, length))) => format!("{} at byte {length}", path.display()),
                (_, None) => "there is no segment".to_owned(),
            };
            Err(OpenError::BehindAnchor {
                trail_seq: scan.last_seq,
                anchor_seq: mark.seq,
                place,
            })
        }
        anchor::Reading::Mark(mark, _) if hash_at_anchor != Some(mark.head) => {
            Err(OpenError::AnchorMismatch { seq: mark.seq })
        }
        anchor::Reading::Mark(_, counter) => Ok(counter),
    }
}

/// Cuts what an interrupted write left behind, and makes durable what was only read from the cache.
///
/// After an unclean stop the last segment may hold frames that were never synced, or whose sync failed; the system may
/// then take its cached pages for written although they are not. So the segment is written anew, from the bytes that
/// were verified, and put in the old one's place; where there is no space for that, it is synced as it is.
pub(crate) fn settle_tail(
    disk: &dyn Disk,
    root: &Path,
    scan: &mut Scan,
    clean_stop: bool,
) -> Result<(), OpenError> {
    let folder = segment::folder(root);
    if let Ending::Torn {
        path,
        good_length,
        detail,
    } = &scan.ending
    {
        tracing::warn!(segment = %path.display(), offset = good_length, %detail, "cutting a torn tail");
        if *good_length < HEADER as u64 {
            let removed = disk.remove_file(path);
            removed
                .and_then(|()| disk.sync_dir(&folder))
                .map_err(|source| OpenError::Io {
                    doing: "removing a torn segment",
                    path: path.clone(),
                    source,
                })?;
        }
        scan.ending = Ending::Whole;
    } else if clean_stop {
        return Ok(());
    }
    let Some((path, length)) = &scan.active else {
        return Ok(());
    };
    rewrite(disk, &folder, path, *length)
        .or_else(|error| {
            if disk::is_no_space(&error) {
                sync_in_place(disk, &folder, path, *length)
            } else {
                Err(error)
            }
        })
        .map_err(|source| OpenError::Io {
            doing: "settling the last segment",
            path: path.clone(),
            source,
        })
}

fn rewrite(disk: &dyn Disk, folder: &Path, path: &Path, length: u64) -> io::Result<()> {
    let mut bytes = disk::read_file(disk, path, SEGMENT_BYTES_MAX)?;
    bytes.truncate(usize::try_from(length).map_err(io::Error::other)?);
    let fresh = folder.join("settling");
    let mut file = disk.open(&fresh, OpenMode::Fresh)?;
    disk::write_all(file.as_mut(), 0, &bytes)?;
    file.sync()?;
    disk.rename(&fresh, path)?;
    disk.sync_dir(folder)
}

fn sync_in_place(disk: &dyn Disk, folder: &Path, path: &Path, length: u64) -> io::Result<()> {
    let mut file = disk.open(path, OpenMode::Keep)?;
    if file.length()? > length {
        file.set_len(length)?;
    }
    file.sync()?;
    disk.sync_dir(folder)
}
