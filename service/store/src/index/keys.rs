//! Keys of the index. Their byte order is the order of lists.
//!
//! ```text
//! 0 applied                                    number and hash of the last change
//! s id                                         submission
//! l a 0 seq | l s state 0 seq                  submissions: all, by state,
//! l c contributor 0 seq | l m compound 0 seq   by contributor, by compound
//! r id                                         record
//! q a 0 seq | q m compound 0 seq               records: all, by compound,
//! q e compound 0 energy seq                    by compound and lattice energy
//! c compound | f compound 0 form               compounds; count of records of a form
//! ```
//! Texts hold no zero byte: intake lets no control characters in. Numbers are big-endian.

use crate::id::SubmissionId;
use crate::state::State;

/// Key of the applied number.
pub(crate) const APPLIED: &[u8] = b"\0applied";
/// What all compounds start with.
pub(crate) const COMPOUNDS: &[u8] = b"c";

/// Compound name as it is compared: lower case, single blanks.
pub(crate) fn compound_key(name: &str) -> String {
    name.split_whitespace()
        .map(str::to_lowercase)
        .collect::<Vec<_>>()
        .join(" ")
}

fn joined(head: &[u8], text: &[u8], tail: &[&[u8]]) -> Vec<u8> {
    let mut key = Vec::with_capacity(head.len() + text.len() + 24);
    key.extend_from_slice(head);
    key.extend_from_slice(text);
    key.push(0);
    for part in tail {
        key.extend_from_slice(part);
    }
    key
}

pub(crate) fn submission(id: SubmissionId) -> Vec<u8> {
    [b"s".as_slice(), id.as_bytes()].concat()
}

pub(crate) fn record(id: SubmissionId) -> Vec<u8> {
    [b"r".as_slice(), id.as_bytes()].concat()
}

pub(crate) fn compound(key: &str) -> Vec<u8> {
    [COMPOUNDS, key.as_bytes()].concat()
}

pub(crate) fn form(compound_key: &str, form: &str) -> Vec<u8> {
    joined(b"f", compound_key.as_bytes(), &[form.as_bytes()])
}

/// A list of submissions, as the prefix of its keys.
pub(crate) fn all_submissions() -> Vec<u8> {
    joined(b"la", b"", &[])
}

pub(crate) fn submissions_in(state: State) -> Vec<u8> {
    joined(b"ls", &[state.code()], &[])
}

pub(crate) fn submissions_of(contributor: &str) -> Vec<u8> {
    joined(b"lc", contributor.as_bytes(), &[])
}

pub(crate) fn submissions_about(compound_key: &str) -> Vec<u8> {
    joined(b"lm", compound_key.as_bytes(), &[])
}

pub(crate) fn all_records() -> Vec<u8> {
    joined(b"qa", b"", &[])
}

pub(crate) fn records_about(compound_key: &str) -> Vec<u8> {
    joined(b"qm", compound_key.as_bytes(), &[])
}

pub(crate) fn records_by_energy(compound_key: &str) -> Vec<u8> {
    joined(b"qe", compound_key.as_bytes(), &[])
}

/// A list's key: its prefix and the number of a change.
pub(crate) fn numbered(mut prefix: Vec<u8>, seq: u64) -> Vec<u8> {
    prefix.extend_from_slice(&seq.to_be_bytes());
    prefix
}

/// Key of a record in the list by energy.
pub(crate) fn ranked(mut prefix: Vec<u8>, energy: f64, seq: u64) -> Vec<u8> {
    prefix.extend_from_slice(&ordered(energy));
    prefix.extend_from_slice(&seq.to_be_bytes());
    prefix
}

/// Bytes of a number that compare as the numbers do (−0 before +0; all finite numbers and infinities).
pub(crate) fn ordered(value: f64) -> [u8; 8] {
    let bits = value.to_bits();
    // Negative: flip everything, so that larger magnitudes come first; positive: flip the sign bit, to come after.
    let flipped = if bits >> 63 == 1 {
        !bits
    } else {
        bits | 1 << 63
    };
    flipped.to_be_bytes()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn ordered_bytes_compare_as_numbers() {
        let values = [
            f64::NEG_INFINITY,
            f64::MIN,
            -1234.5,
            -1.0,
            -f64::MIN_POSITIVE,
            -0.0,
            0.0,
            f64::MIN_POSITIVE,
            1e-3,
            1.0,
            1234.5,
            f64::MAX,
            f64::INFINITY,
        ];
        for pair in values.windows(2) {
            assert!(ordered(pair[0]) < ordered(pair[1]), "{pair:?}");
        }
    }

    #[test]
    fn compounds_compare_without_case_and_blanks() {
        assert_eq!(compound_key("  Velnaric   ACID "), "velnaric acid");
    }
}
