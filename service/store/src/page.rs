//! Page tokens: opaque to callers, tied to the list and filter that made them.

use std::fmt::Debug;

use crate::error::StoreError;
use crate::id::{from_hex, hex};
use crate::index::query::{Slice, Window};
use crate::limits::{PAGE_SIZE_DEFAULT, PAGE_SIZE_MAX};
use crate::view::{Page, PageRequest};

const TIE: usize = 8;
const CHECK: usize = 8;

fn short<const N: usize>(hash: &blake3::Hash) -> [u8; N] {
    let mut out = [0; N];
    for (to, from) in out.iter_mut().zip(hash.as_bytes()) {
        *to = *from;
    }
    out
}

/// What ties a token to a list and its filter.
fn tie(list: &str, filter: &dyn Debug) -> [u8; TIE] {
    short(&blake3::hash(format!("{list} {filter:?}").as_bytes()))
}

/// Where a page starts and how long it is.
pub(crate) fn window(
    list: &str,
    filter: &dyn Debug,
    request: &PageRequest,
) -> Result<Window, StoreError> {
    let size = match request.size {
        0 => PAGE_SIZE_DEFAULT,
        size => size.min(PAGE_SIZE_MAX),
    };
    if request.token.is_empty() {
        return Ok(Window { after: None, size });
    }
    let bytes = from_hex(&request.token).ok_or(StoreError::PageToken)?;
    let (check, body) = bytes.split_at_checked(CHECK).ok_or(StoreError::PageToken)?;
    if check != short::<CHECK>(&blake3::hash(body)) {
        return Err(StoreError::PageToken);
    }
    let (tied, key) = body.split_at_checked(TIE).ok_or(StoreError::PageToken)?;
    if tied != tie(list, filter) {
        return Err(StoreError::PageTokenFilter);
    }
    Ok(Window {
        after: Some(key.to_vec()),
        size,
    })
}

/// A page with its token.
pub(crate) fn page<T>(list: &str, filter: &dyn Debug, slice: Slice<T>) -> Page<T> {
    let next_token = slice.last_key.map_or_else(String::new, |key| {
        let mut body = tie(list, filter).to_vec();
        body.extend_from_slice(&key);
        let mut bytes = short::<CHECK>(&blake3::hash(&body)).to_vec();
        bytes.extend_from_slice(&body);
        hex(&bytes)
    });
    Page {
        entries: slice.entries,
        next_token,
    }
}
