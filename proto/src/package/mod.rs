//! The package format, version 1: pure functions on the bytes of `package.toml` and of its array files.
//!
//! A manifest is TOML 1.0, an array is a `.npy` file of little-endian float64 in C order. Reading collects every fault;
//! nothing here opens a file. Bad physics is no fault of a package: only what cannot be understood is.

mod violation;

pub mod digest;
pub mod manifest;
pub mod npy;

mod decode;
mod geometry;
mod reader;
mod sections;
mod write;

pub use decode::decode;
pub use digest::{ArrayIdentity, package_digest};
pub use manifest::{ArrayRole, ExpectedArray, Manifest, ManifestSummary, check_manifest};
pub use violation::{Violation, Violations};
pub use write::{Package, constants_as_declared, encode, encode_with_constants};

/// Value of the manifest's key `format`.
pub const FORMAT: &str = "tarehouse-package/1";
/// File name of the manifest.
pub const MANIFEST_FILE: &str = "package.toml";
