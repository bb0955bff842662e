//! Why a command did not do what was asked: what was attempted, where it failed, what to do next.

use std::io;
use std::path::{Path, PathBuf};

use tonic::{Code, Status};

use crate::exit::Exit;

/// Why a command ended early. `Display` says what happened; [`crate::render::failure`] adds details and the next step.
#[derive(Debug, thiserror::Error)]
pub enum Failure {
    /// The arguments contradict each other, or something that a command needs was not given.
    #[error("{what}")]
    Usage {
        /// What is wrong.
        what: String,
        /// What to do next.
        next: String,
    },
    /// A package that cannot be read.
    #[error("{folder} is not a package that can be submitted")]
    InvalidPackage {
        /// The folder, as given.
        folder: String,
        /// Every violation, each with file, key and index.
        violations: Vec<String>,
    },
    /// A file that could not be read or written.
    #[error("could not {attempted} {}", path.display())]
    File {
        /// What was attempted, as a verb.
        attempted: &'static str,
        /// The file.
        path: PathBuf,
        /// What the system said.
        #[source]
        source: io::Error,
    },
    /// A policy file that could not be read.
    #[error("{origin} is not a policy")]
    Policy {
        /// File or server.
        origin: String,
        /// The reader's words, with line and column.
        detail: String,
    },
    /// No connection to the service.
    #[error("could not connect to {server}")]
    Connect {
        /// Its address.
        server: String,
        /// What the transport said.
        detail: String,
    },
    /// The embedded store could not be opened.
    #[error("could not open the store in {}", dir.display())]
    LocalStore {
        /// Its folder.
        dir: PathBuf,
        /// What it said.
        detail: String,
    },
    /// The service answered with an error.
    #[error("could not {attempted}")]
    Service {
        /// What was attempted, as a verb with its object.
        attempted: String,
        /// The answer.
        status: Box<Status>,
    },
    /// The service did not keep the contract.
    #[error("the service sent something that makes no sense: {0}")]
    Contract(String),
    /// What arrived is not what was announced.
    #[error("{what} arrived damaged: {detail}; nothing was written")]
    Damaged {
        /// What was fetched.
        what: String,
        /// How it differs.
        detail: String,
    },
    /// No such thing among what the service returned.
    #[error("{what}")]
    NotFound {
        /// What is missing.
        what: String,
        /// What to do next.
        next: String,
    },
    /// Waiting took longer than allowed.
    #[error("{name} has no verdict after {waited_s} s")]
    Patience {
        /// The submission.
        name: String,
        /// How long was waited, s.
        waited_s: u64,
    },
    /// Nothing could be computed, or a part of the program failed.
    #[error("{attempted} failed: {detail}")]
    Internal {
        /// What was being done.
        attempted: &'static str,
        /// What is known.
        detail: String,
    },
    /// Output could not be written.
    #[error("could not write the output")]
    Output(#[from] io::Error),
    /// Ctrl-C.
    #[error("stopped")]
    Interrupted {
        /// How to go on.
        resume: String,
    },
}

impl Failure {
    /// A file could not be read or written.
    pub fn file(attempted: &'static str, path: &Path, source: io::Error) -> Self {
        Self::File {
            attempted,
            path: path.to_owned(),
            source,
        }
    }

    /// The service answered with an error.
    pub fn service(attempted: impl Into<String>, status: Status) -> Self {
        Self::Service {
            attempted: attempted.into(),
            status: Box::new(status),
        }
    }

    /// A part of the answer that the contract promises is missing.
    pub fn missing(what: &str) -> Self {
        Self::Contract(format!("{what} is missing from an answer"))
    }

    /// The exit code.
    pub fn exit(&self) -> Exit {
        match self {
            Self::Usage { .. } | Self::InvalidPackage { .. } | Self::Policy { .. } => Exit::Usage,
            Self::File { source, .. } => match source.kind() {
                io::ErrorKind::NotFound | io::ErrorKind::AlreadyExists => Exit::Usage,
                io::ErrorKind::PermissionDenied => Exit::NotAllowed,
                _ => Exit::Internal,
            },
            Self::Connect { .. } | Self::LocalStore { .. } => Exit::Unavailable,
            Self::Service { status, .. } => {
                if status.code() == Code::Unknown && is_transport(status) {
                    Exit::Unavailable
                } else {
                    Exit::from_grpc(status.code())
                }
            }
            Self::NotFound { .. } => Exit::NotFound,
            Self::Patience { .. } => Exit::Deadline,
            Self::Output(error) if error.kind() == io::ErrorKind::BrokenPipe => Exit::OutputClosed,
            Self::Contract(_) | Self::Damaged { .. } | Self::Internal { .. } | Self::Output(_) => {
                Exit::Internal
            }
            Self::Interrupted { .. } => Exit::Interrupted,
        }
    }

    /// Whether it ends the program without a word.
    pub fn is_quiet(&self) -> bool {
        self.exit() == Exit::OutputClosed
    }
}

/// Whether a status stems from the connection and not from the service.
pub fn is_transport(status: &Status) -> bool {
    std::error::Error::source(status).is_some()
}
