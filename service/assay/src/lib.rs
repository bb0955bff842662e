//! Judgement: checks, soft-mode tags, free-energy bracket and verdict. No input or output, no async.

pub mod policy;
pub mod report;
pub mod submission;

pub use policy::Policy;
pub use report::Report;
pub use submission::Submission;

use std::fmt;

/// Version of the program that a report names.
pub const PROGRAM_VERSION: &str = env!("CARGO_PKG_VERSION");

/// Where an examination stands, for people who wait.
pub trait Progress: Sync {
    /// Called from any thread: `done` of `total` steps of the stage `stage` are finished.
    fn advance(&self, stage: &'static str, done: usize, total: usize);
}

/// Progress that nobody watches.
#[derive(Debug, Clone, Copy)]
pub struct Unwatched;

impl Progress for Unwatched {
    fn advance(&self, _stage: &'static str, _done: usize, _total: usize) {}
}

/// Why nothing could be computed. Bad physics is never an error: it is a report.
#[derive(Debug, Clone, PartialEq)]
pub enum ExamineError {
    /// An eigenproblem could not be solved.
    Eigenproblem {
        /// What was being computed.
        during: &'static str,
        /// The solver's words.
        detail: String,
    },
}

impl fmt::Display for ExamineError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Self::Eigenproblem { during, detail } => write!(f, "{during}: {detail}"),
        }
    }
}

impl std::error::Error for ExamineError {}

/// Examines a submission under a policy: the one entrance of this crate.
///
/// # Errors
/// Only where nothing could be computed.
pub fn examine(
    _submission: &Submission,
    _policy: &Policy,
    _progress: &dyn Progress,
) -> Result<Report, ExamineError> {
    Err(ExamineError::Eigenproblem {
        during: "examination",
        detail: "not built yet".to_owned(),
    })
}
