//! The service: intake, work queue, catalogue and telemetry behind gRPC.
//!
//! Invariants: no physics here, a handler decodes, asks, encodes; the end of a caller's stream is never success; every
//! wait has a limit; CPU and store work run off the async threads; what was acknowledged is durable. The service trusts
//! nothing that arrives, and never listens beyond this machine unless its configuration says so in so many words.

pub mod command;
pub mod config;
mod core;
mod depot;
mod drain;
mod examiner;
mod facts;
pub mod failure;
mod fetch;
mod hub;
mod judge;
mod layers;
pub mod limits;
mod names;
mod ranking;
mod receive;
mod series_wire;
mod serve;
mod services;
mod uploads;
mod watch;
mod wire;
mod workers;

pub use config::{Config, ConfigError};
pub use core::OpenError;
pub use examiner::{Assay, Examiner};
pub use serve::{LocalService, ServeError, in_process, in_process_with, run, run_with};
