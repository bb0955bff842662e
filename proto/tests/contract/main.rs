//! Tests of the contract crate, in one binary.

#![allow(
    clippy::unwrap_used,
    clippy::expect_used,
    clippy::panic,
    reason = "a test fails by panicking"
)]

mod bad_packages;
mod descriptor;
mod digests;
mod json;
mod limits;
mod npy;
mod packages;
mod reports;
mod round_trip;
mod wrong_values;
