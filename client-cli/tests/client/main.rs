//! The client from outside: what it shows, what it sends, how it ends.

#![allow(
    clippy::unwrap_used,
    clippy::panic,
    reason = "helpers of tests, outside test functions; a panic is how a test fails"
)]

mod binary;
mod fake;
mod local;
mod ranking;
mod report;
mod sending;
mod series;
mod support;
