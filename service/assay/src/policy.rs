//! The policy: the file with every threshold. Its text is `deploy/policy.toml`, also built into the binary.

use serde::Deserialize;

use crate::submission::Digest;

/// Text of the built-in policy.
pub const BUILT_IN_TEXT: &str = include_str!("../../../deploy/policy.toml");

/// Every threshold of the judgement, with the digest of the text it was read from.
#[derive(Debug, Clone, PartialEq)]
pub struct Policy {
    /// BLAKE3 of the text.
    pub digest: Digest,
    /// The text.
    pub text: String,
    /// The values.
    pub limits: Limits,
}

/// Values of the policy file.
#[derive(Debug, Clone, PartialEq, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Limits {
    /// Temperatures of stored curves, K, ascending from 0.
    pub temperature_grid_k: Vec<f64>,
}

/// Why a policy could not be read.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
#[error("the policy could not be read: {detail}")]
pub struct PolicyError {
    /// What is wrong, with line and column.
    pub detail: String,
}

impl Policy {
    /// Reads a policy from its text.
    ///
    /// # Errors
    /// [`PolicyError`] with the place.
    pub fn parse(text: &str) -> Result<Self, PolicyError> {
        let limits = toml::from_str(text).map_err(|error| PolicyError {
            detail: error.to_string(),
        })?;
        Ok(Self {
            digest: *blake3::hash(text.as_bytes()).as_bytes(),
            text: text.to_owned(),
            limits,
        })
    }

    /// The policy that is built into the binary.
    ///
    /// # Errors
    /// Never in a released binary: a test reads it.
    pub fn built_in() -> Result<Self, PolicyError> {
        Self::parse(BUILT_IN_TEXT)
    }
}
