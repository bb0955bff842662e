//! Between the messages of the wire and the words of the domain. Nothing is lost either way, but the sign of a
//! zero, which the wire format does not keep.

mod names;
mod report;

pub use names::{
    digest_from_hex, digest_to_hex, likely_cause_names, limits_message, rule_by_name, rule_names,
};

/// Why a message is not what the contract promises.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
pub enum ConvertError {
    /// A message field that must be there.
    #[error("{0} is missing")]
    Missing(&'static str),
    /// An enum value that is unspecified or not known.
    #[error("{field}: {value} is not a known value")]
    UnknownEnum {
        /// Field.
        field: &'static str,
        /// Number found.
        value: i32,
    },
    /// A rule that is not known.
    #[error("\"{0}\" is not a known rule")]
    UnknownRule(String),
    /// A digest that is not 64 hexadecimal digits.
    #[error("{0} is not 64 lower-case hexadecimal digits")]
    Digest(&'static str),
    /// A list of fixed length of another length.
    #[error("{field}: {found} entries, {expected} are wanted")]
    Length {
        /// Field.
        field: &'static str,
        /// Entries wanted.
        expected: usize,
        /// Entries found.
        found: usize,
    },
}
