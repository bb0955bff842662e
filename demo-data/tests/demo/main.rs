//! Tests of the demo library: the potential, the constants made from it, and the committed packages.

#![allow(
    clippy::unwrap_used,
    clippy::panic,
    reason = "helpers of tests fail by panicking, as tests do"
)]

mod constants;
mod model;
mod noise;
mod packages;
mod stability;
