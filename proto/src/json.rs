//! Proto JSON of the contract's messages: field names as in the `.proto` files, enum values by name, 64-bit integers as
//! strings, and fields that hold their default value printed too. A field declared `optional` that is absent stays
//! absent.
//!
//! Source: "ProtoJSON Format" (protobuf.dev). Floating-point numbers have the fewest digits that read back exactly;
//! those that are not finite are the strings `"NaN"`, `"Infinity"` and `"-Infinity"`.

use std::sync::LazyLock;

use prost::{Message, Name};
use prost_reflect::{DescriptorError, DescriptorPool, DynamicMessage, SerializeOptions};
use serde_json::Serializer;

/// How JSON is laid out.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub enum Layout {
    /// On one line.
    #[default]
    Compact,
    /// Indented, one field a line.
    Pretty,
}

/// Why a message could not be written as JSON.
#[derive(Debug, thiserror::Error)]
pub enum JsonError {
    /// The description of the contract cannot be read; it is built in, and a test reads it.
    #[error("the description of the contract cannot be read")]
    Description(#[source] &'static DescriptorError),
    /// The contract has no such message.
    #[error("the contract has no message \"{0}\"")]
    UnknownMessage(String),
    /// The bytes are not such a message.
    #[error("the bytes are not a message \"{name}\"")]
    Bytes {
        /// Full name of the message.
        name: String,
        /// What the decoder says.
        #[source]
        source: prost::DecodeError,
    },
    /// The message could not be written.
    #[error("the message could not be written as JSON")]
    Write(#[source] serde_json::Error),
}

static POOL: LazyLock<Result<DescriptorPool, DescriptorError>> =
    LazyLock::new(|| DescriptorPool::decode(crate::FILE_DESCRIPTOR_SET));

/// The contract's description, for reflection.
///
/// # Errors
/// Never in a released binary: a test reads it.
pub fn descriptor_pool() -> Result<&'static DescriptorPool, JsonError> {
    POOL.as_ref().map_err(JsonError::Description)
}

/// JSON of a message.
///
/// # Errors
/// [`JsonError`].
pub fn to_json<M: Message + Name>(message: &M, layout: Layout) -> Result<String, JsonError> {
    bytes_to_json(&M::full_name(), &message.encode_to_vec(), layout)
}

/// JSON of an encoded message of the full name `name`, e.g. `tarehouse.v1.Report`.
///
/// # Errors
/// [`JsonError`].
pub fn bytes_to_json(name: &str, bytes: &[u8], layout: Layout) -> Result<String, JsonError> {
    let descriptor = descriptor_pool()?
        .get_message_by_name(name)
        .ok_or_else(|| JsonError::UnknownMessage(name.to_owned()))?;
    let message = DynamicMessage::decode(descriptor, bytes).map_err(|source| JsonError::Bytes {
        name: name.to_owned(),
        source,
    })?;
    let options = SerializeOptions::new()
        .use_proto_field_name(true)
        .skip_default_fields(false)
        .stringify_64_bit_integers(true)
        .use_enum_numbers(false);
    let mut out = Vec::new();
    match layout {
        Layout::Compact => message.serialize_with_options(&mut Serializer::new(&mut out), &options),
        Layout::Pretty => {
            message.serialize_with_options(&mut Serializer::pretty(&mut out), &options)
        }
    }
    .map_err(JsonError::Write)?;
    Ok(String::from_utf8_lossy(&out).into_owned())
}
