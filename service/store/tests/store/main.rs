//! Tests of the store as its users see it, on a real and on a simulated disk.

#![allow(
    clippy::unwrap_used,
    clippy::expect_used,
    clippy::panic,
    reason = "a test fails by panicking"
)]

mod damage;
mod faults;
mod fixture;
mod lifecycle;
mod lists;
mod model;
mod power;
mod requests;
mod sim_disk;
mod support;
mod uploads;
mod withdrawals;
