//! The contract: messages and services of `tarehouse.v1`, their proto JSON, and the package format.
//!
//! Invariants: nothing here reads or writes a file or a socket; conversions between wire and domain lose nothing; what
//! came from outside is never trusted to be as large, as short or as finite as it says.

pub mod convert;
pub mod json;
pub mod limits;
pub mod package;
pub mod v1;

pub use v1::FILE_DESCRIPTOR_SET;
