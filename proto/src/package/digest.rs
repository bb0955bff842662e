//! The package digest.
//!
//! BLAKE3 of the concatenation of
//!
//! 1. the bytes `tarehouse-package/1\n`,
//! 2. the bytes of `package.toml`,
//! 3. for each array file, in ascending order of the bytes of its name: length of the name in bytes (u64 little-endian),
//!    the name (UTF-8), length of the file in bytes (u64 little-endian), BLAKE3 of the file (32 bytes).

use tarehouse_assay::submission::Digest;

const DOMAIN: &[u8] = b"tarehouse-package/1\n";

/// What the package digest needs to know of an array file.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord)]
pub struct ArrayIdentity<'a> {
    /// File name.
    pub name: &'a str,
    /// Size of the whole file, bytes.
    pub size_bytes: u64,
    /// BLAKE3 of the whole file.
    pub digest: Digest,
}

impl<'a> ArrayIdentity<'a> {
    /// Name, size and digest of an array file at hand.
    pub fn of(name: &'a str, bytes: &[u8]) -> Self {
        Self {
            name,
            size_bytes: bytes.len() as u64,
            digest: *blake3::hash(bytes).as_bytes(),
        }
    }
}

/// Digest of a package; see the module documentation. `arrays` may come in any order.
pub fn package_digest(manifest: &[u8], arrays: &[ArrayIdentity<'_>]) -> Digest {
    let mut sorted: Vec<&ArrayIdentity<'_>> = arrays.iter().collect();
    sorted.sort_unstable();
    let mut hasher = blake3::Hasher::new();
    hasher.update(DOMAIN).update(manifest);
    for array in sorted {
        hasher
            .update(&(array.name.len() as u64).to_le_bytes())
            .update(array.name.as_bytes())
            .update(&array.size_bytes.to_le_bytes())
            .update(&array.digest);
    }
    *hasher.finalize().as_bytes()
}
