//! Reads the reference files, and compares.

use std::collections::BTreeMap;

/// Rows of a comma-separated file as maps from column to text; lines with `#` are comments.
pub(crate) fn rows(text: &str) -> Vec<BTreeMap<&str, &str>> {
    let mut lines = text.lines().filter(|line| !line.starts_with('#'));
    let columns: Vec<&str> = lines.next().unwrap().split(',').collect();
    lines
        .map(|line| columns.iter().copied().zip(line.split(',')).collect())
        .collect()
}

/// A column of a row as a number.
pub(crate) fn number(row: &BTreeMap<&str, &str>, column: &str) -> f64 {
    row[column].parse().unwrap()
}

/// |found − expected| ≤ relative·|expected| + absolute.
#[track_caller]
pub(crate) fn assert_near(what: &str, found: f64, expected: f64, relative: f64, absolute: f64) {
    let allowed = relative * expected.abs() + absolute;
    assert!(
        (found - expected).abs() <= allowed,
        "{what}: {found:e} instead of {expected:e}, off by {:e}, allowed {allowed:e}",
        found - expected
    );
}
