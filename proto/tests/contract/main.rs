//! Tests of the contract crate, in one binary.

mod bad_packages;
mod descriptor;
mod digests;
mod json;
mod limits;
mod npy;
mod packages;
mod reports;
mod round_trip;
