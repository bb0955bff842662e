//! What is wrong with a package: one entry a fault, each with its place; all are reported at once.

use std::fmt;

use crate::limits;

/// One fault of a package.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Violation {
    /// File of the package.
    pub file: String,
    /// Key path with indices, as in `crystal.positions[3]`, or index of an array as in `[0, 1, 2, 0, 0]`; empty for the
    /// file as a whole.
    pub key: String,
    /// Line of the manifest, from 1, where one is known.
    pub line: Option<usize>,
    /// What is wrong, and what is wanted.
    pub message: String,
}

impl fmt::Display for Violation {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "{}: ", self.file)?;
        if !self.key.is_empty() {
            write!(f, "{}: ", self.key)?;
        }
        f.write_str(&self.message)?;
        match self.line {
            Some(line) => write!(f, " (line {line})"),
            None => Ok(()),
        }
    }
}

/// All faults of a package, in the order of finding; never empty where it is an `Err`.
///
/// The list is cut at [`limits::VIOLATIONS`]; what was cut is counted.
#[derive(Debug, Clone, Default, PartialEq, Eq)]
pub struct Violations {
    listed: Vec<Violation>,
    unlisted_count: usize,
}

impl std::error::Error for Violations {}

impl Violations {
    /// The faults listed.
    pub fn listed(&self) -> &[Violation] {
        &self.listed
    }

    /// Number of faults that are not listed.
    pub fn unlisted_count(&self) -> usize {
        self.unlisted_count
    }

    /// Number of all faults.
    pub fn count(&self) -> usize {
        self.listed.len() + self.unlisted_count
    }

    /// Whether there are none.
    pub fn is_empty(&self) -> bool {
        self.count() == 0
    }

    pub(crate) fn is_full(&self) -> bool {
        limits::VIOLATIONS.check_len(self.listed.len() + 1).is_err()
    }

    pub(crate) fn push(&mut self, violation: Violation) {
        if self.is_full() {
            self.unlisted_count += 1;
        } else {
            self.listed.push(violation);
        }
    }

    pub(crate) fn add(&mut self, file: &str, key: impl Into<String>, message: impl Into<String>) {
        self.push(Violation {
            file: file.to_owned(),
            key: key.into(),
            line: None,
            message: message.into(),
        });
    }
}

impl fmt::Display for Violations {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        for (k, violation) in self.listed.iter().enumerate() {
            let gap = if k == 0 { "" } else { "\n" };
            write!(f, "{gap}{violation}")?;
        }
        match self.unlisted_count {
            0 => Ok(()),
            count => write!(f, "\nand {count} more"),
        }
    }
}
