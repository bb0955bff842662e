//! Messages of the contract as proto JSON.

use prost::{Message, Name};
use tarehouse_proto::json::{Layout, to_json};

use crate::failure::Failure;

/// A message as indented JSON.
///
/// # Errors
/// [`Failure::Internal`]; never for a message of the contract.
pub fn pretty<M: Message + Name>(message: &M) -> Result<String, Failure> {
    to_json(message, Layout::Pretty).map_err(|error| failed(&error))
}

/// A message on one line.
///
/// # Errors
/// [`Failure::Internal`]; never for a message of the contract.
pub fn compact<M: Message + Name>(message: &M) -> Result<String, Failure> {
    to_json(message, Layout::Compact).map_err(|error| failed(&error))
}

/// A text as a JSON string.
pub fn quoted(text: &str) -> String {
    serde_json::Value::from(text).to_string()
}

fn failed(error: &dyn std::error::Error) -> Failure {
    Failure::Internal {
        attempted: "writing JSON",
        detail: crate::connect::chain(error),
    }
}
