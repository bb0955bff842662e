//! The service from outside: every call goes through the wire, over memory or over 127.0.0.1, with an examiner of the
//! test's choice.

#![allow(
    clippy::unwrap_used,
    clippy::expect_used,
    clippy::panic,
    reason = "a test that cannot go on says so by a panic"
)]

mod binary;
mod kept;
mod killed;
mod lists;
mod refusals;
mod running;
mod series;
mod support;
mod uploads;
mod whole;
