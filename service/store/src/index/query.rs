//! Questions to the index: rows by id, and pages of lists.

use prost::Message;

use super::keys;
use super::rows::{CompoundRow, RecordRow, SubmissionRow};
use crate::id::SubmissionId;
use crate::limits::PAGE_SCAN_MAX;
use crate::view::{
    CompoundView, RecordFilter, RecordOrder, RecordView, SubmissionFilter, SubmissionView,
};

/// A part of a list, with the key to go on behind.
#[derive(Debug)]
pub(crate) struct Slice<T> {
    pub(crate) entries: Vec<T>,
    pub(crate) last_key: Option<Vec<u8>>,
}

/// Where a part of a list starts and how long it is.
#[derive(Debug)]
pub(crate) struct Window {
    /// Key of the last entry of the part before.
    pub(crate) after: Option<Vec<u8>>,
    pub(crate) size: usize,
}

type Answer<T> = Result<T, String>;

/// A key and its value.
type Pair = (Vec<u8>, Vec<u8>);

fn words(error: impl std::fmt::Display) -> String {
    error.to_string()
}

pub(crate) fn submission(db: &sled::Db, id: SubmissionId) -> Answer<Option<SubmissionView>> {
    match db.get(keys::submission(id)).map_err(words)? {
        None => Ok(None),
        Some(bytes) => {
            let row = SubmissionRow::decode(bytes.as_ref()).map_err(words)?;
            row.view(id).map(Some)
        }
    }
}

pub(crate) fn record(db: &sled::Db, id: SubmissionId) -> Answer<Option<RecordView>> {
    match db.get(keys::record(id)).map_err(words)? {
        None => Ok(None),
        Some(bytes) => {
            let row = RecordRow::decode(bytes.as_ref()).map_err(words)?;
            row.view(id).map(Some)
        }
    }
}

pub(crate) fn submissions(
    db: &sled::Db,
    filter: &SubmissionFilter,
    window: &Window,
) -> Answer<Slice<SubmissionView>> {
    let compound = filter.compound.as_deref().map(keys::compound_key);
    let prefix = match (&filter.contributor, &compound, filter.state) {
        (Some(contributor), _, _) => keys::submissions_of(contributor),
        (None, Some(compound), _) => keys::submissions_about(compound),
        (None, None, Some(state)) => keys::submissions_in(state),
        (None, None, None) => keys::all_submissions(),
    };
    walk(db, &prefix, true, window, |id| {
        let view = submission(db, id)?.ok_or_else(|| format!("submission {id} has no row"))?;
        let wanted = filter.state.is_none_or(|state| view.state == state)
            && compound
                .as_ref()
                .is_none_or(|key| keys::compound_key(&view.compound) == *key);
        Ok(wanted.then_some(view))
    })
}

pub(crate) fn records(
    db: &sled::Db,
    filter: &RecordFilter,
    window: &Window,
) -> Answer<Slice<RecordView>> {
    let compound = filter.compound.as_deref().map(keys::compound_key);
    let (prefix, backwards) = match (&compound, filter.order) {
        (Some(compound), RecordOrder::LatticeEnergy) => (keys::records_by_energy(compound), false),
        (Some(compound), RecordOrder::Newest) => (keys::records_about(compound), true),
        (None, _) => (keys::all_records(), true),
    };
    walk(db, &prefix, backwards, window, |id| {
        let view = record(db, id)?.ok_or_else(|| format!("record {id} has no row"))?;
        Ok(fits(filter, &view).then_some(view))
    })
}

fn fits(filter: &RecordFilter, view: &RecordView) -> bool {
    let same = |wanted: &Option<String>, found: &str| wanted.as_ref().is_none_or(|w| w == found);
    (filter.include_retired || !view.retired)
        && same(&filter.form, &view.form)
        && same(&filter.level, &view.summary.level)
        && same(&filter.energy_level, &view.summary.energy_level)
        && same(&filter.contributor, &view.contributor)
        && filter
            .lattice_energy_max_kj_per_mol
            .is_none_or(|max| view.summary.lattice_energy_kj_per_mol <= max)
}

pub(crate) fn compounds(db: &sled::Db, window: &Window) -> Answer<Slice<CompoundView>> {
    let mut slice = Slice {
        entries: Vec::new(),
        last_key: None,
    };
    for item in range(db, keys::COMPOUNDS, false, window.after.as_deref()) {
        let (key, value) = item?;
        if slice.entries.len() == window.size {
            return Ok(slice);
        }
        let row = CompoundRow::decode(value.as_slice()).map_err(words)?;
        slice.entries.push(row.into());
        slice.last_key = Some(key);
    }
    slice.last_key = None;
    Ok(slice)
}

/// Walks a list whose values are ids; `look` says what an entry becomes, if it is wanted.
fn walk<T>(
    db: &sled::Db,
    prefix: &[u8],
    backwards: bool,
    window: &Window,
    mut look: impl FnMut(SubmissionId) -> Answer<Option<T>>,
) -> Answer<Slice<T>> {
    let mut slice = Slice {
        entries: Vec::new(),
        last_key: None,
    };
    let items = range(db, prefix, backwards, window.after.as_deref());
    for (seen, item) in items.enumerate() {
        let (key, value) = item?;
        if slice.entries.len() == window.size || seen == PAGE_SCAN_MAX {
            return Ok(slice);
        }
        let id = value
            .try_into()
            .map(SubmissionId::from_bytes)
            .map_err(|_| "an id has 16 bytes".to_owned())?;
        slice.entries.extend(look(id)?);
        slice.last_key = Some(key);
    }
    slice.last_key = None;
    Ok(slice)
}

/// Entries under a prefix, behind a key, in either direction.
fn range(
    db: &sled::Db,
    prefix: &[u8],
    backwards: bool,
    after: Option<&[u8]>,
) -> Box<dyn Iterator<Item = Answer<Pair>>> {
    use std::ops::Bound::{Excluded, Included};
    if after.is_some_and(|after| !after.starts_with(prefix)) {
        // A made-up token must not lead into another list.
        return Box::new(std::iter::empty());
    }
    let low = prefix.to_vec();
    // Keys under a prefix end before the prefix with its last byte raised; no prefix here ends in 255.
    let mut high = prefix.to_vec();
    if let Some(last) = high.last_mut() {
        *last = last.saturating_add(1);
    }
    let iterator = match (after, backwards) {
        (None, _) => db.range::<Vec<u8>, _>((Included(low), Excluded(high))),
        (Some(after), false) => db.range::<Vec<u8>, _>((Excluded(after.to_vec()), Excluded(high))),
        (Some(after), true) => db.range::<Vec<u8>, _>((Included(low), Excluded(after.to_vec()))),
    };
    let owned = |item: sled::Result<(sled::IVec, sled::IVec)>| {
        item.map(|(key, value)| (key.to_vec(), value.to_vec()))
            .map_err(words)
    };
    if backwards {
        Box::new(iterator.rev().map(owned))
    } else {
        Box::new(iterator.map(owned))
    }
}

/// One digest over everything in the index.
pub(crate) fn fingerprint(db: &sled::Db) -> Answer<[u8; 32]> {
    let mut hasher = blake3::Hasher::new();
    for item in db.iter() {
        let (key, value) = item.map_err(words)?;
        for part in [&key, &value] {
            hasher.update(&(part.len() as u64).to_le_bytes());
            hasher.update(part);
        }
    }
    Ok(*hasher.finalize().as_bytes())
}
