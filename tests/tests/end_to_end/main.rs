//! The whole way, end to end: the real examination behind a real server on 127.0.0.1, spoken to by the client's own
//! commands and, for what no client of ours would send, by bare calls.
//!
//! Each server has a free port and a store of its own; nothing here sleeps, every wait has a bound.

#![allow(
    clippy::unwrap_used,
    clippy::expect_used,
    clippy::panic,
    reason = "helpers of tests, outside test functions; a panic is how a test fails"
)]

#[cfg(test)]
mod bare;
#[cfg(test)]
mod contents;
#[cfg(test)]
mod house;
#[cfg(test)]
mod malformed;
#[cfg(test)]
mod whole_way;
