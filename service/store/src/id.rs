//! Ids of submissions and the text form of digests.

use std::fmt;
use std::str::FromStr;

/// Id of a submission, and of the record it becomes: 16 random bytes, written as 32 lower-case hexadecimal digits.
#[derive(Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub struct SubmissionId([u8; 16]);

/// A text that is not an id.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
#[error("an id has 32 lower-case hexadecimal digits")]
pub struct IdError;

impl SubmissionId {
    /// A new random id.
    pub fn random() -> Self {
        Self(*uuid::Uuid::new_v4().as_bytes())
    }

    /// From its bytes.
    pub fn from_bytes(bytes: [u8; 16]) -> Self {
        Self(bytes)
    }

    /// Its bytes.
    pub fn as_bytes(&self) -> &[u8; 16] {
        &self.0
    }
}

impl fmt::Display for SubmissionId {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        self.0.iter().try_for_each(|byte| write!(f, "{byte:02x}"))
    }
}

impl fmt::Debug for SubmissionId {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        fmt::Display::fmt(self, f)
    }
}

impl FromStr for SubmissionId {
    type Err = IdError;

    fn from_str(text: &str) -> Result<Self, IdError> {
        let bytes = from_hex(text).ok_or(IdError)?;
        bytes.try_into().map(Self).map_err(|_| IdError)
    }
}

/// Lower-case hexadecimal digits of bytes.
pub(crate) fn hex(bytes: &[u8]) -> String {
    use fmt::Write;
    let mut text = String::with_capacity(bytes.len() * 2);
    for byte in bytes {
        let _ = write!(text, "{byte:02x}");
    }
    text
}

/// Bytes of lower-case hexadecimal digits.
pub(crate) fn from_hex(text: &str) -> Option<Vec<u8>> {
    fn digit(byte: u8) -> Option<u8> {
        match byte {
            b'0'..=b'9' => Some(byte - b'0'),
            b'a'..=b'f' => Some(byte - b'a' + 10),
            _ => None,
        }
    }
    let (pairs, rest) = text.as_bytes().as_chunks::<2>();
    if !rest.is_empty() {
        return None;
    }
    pairs
        .iter()
        .map(|[high, low]| Some(digit(*high)? << 4 | digit(*low)?))
        .collect()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn text_form_round_trips_and_rejects_others() {
        let id = SubmissionId::random();
        assert_eq!(id.to_string().parse(), Ok(id));
        assert_eq!(id.to_string().len(), 32);
        for bad in [
            "",
            "00",
            &"g".repeat(32),
            &"A".repeat(32),
            &"0".repeat(33),
            &"0".repeat(34),
        ] {
            assert_eq!(bad.parse::<SubmissionId>(), Err(IdError), "{bad}");
        }
    }

    #[test]
    fn hex_of_known_bytes() {
        assert_eq!(hex(&[0x00, 0x1f, 0xff]), "001fff");
        assert_eq!(from_hex("001fff"), Some(vec![0x00, 0x1f, 0xff]));
    }
}
