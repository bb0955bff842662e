//! Resource names, page tokens and the other small texts of requests.

use tarehouse_store::SubmissionId;

use crate::failure::Failure;
use crate::limits;

/// Name of a submission.
pub(crate) fn submission(id: SubmissionId) -> String {
    format!("submissions/{id}")
}

/// Name of a record.
pub(crate) fn record(id: SubmissionId) -> String {
    format!("records/{id}")
}

/// What a resource name stands for.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(crate) enum Resource {
    /// `submissions/{id}`.
    Submission(SubmissionId),
    /// `records/{id}`.
    Record(SubmissionId),
}

impl Resource {
    /// Reads either kind of name from the field `field`.
    pub(crate) fn parse(field: &str, name: &str) -> Result<Self, Failure> {
        let wanted = || {
            let message =
                "submissions/{id} or records/{id} is wanted, with 32 lower-case hexadecimal digits";
            Failure::field(field, message)
        };
        let (kind, id) = name.split_once('/').ok_or_else(wanted)?;
        let id: SubmissionId = id.parse().map_err(|_| wanted())?;
        match kind {
            "submissions" => Ok(Self::Submission(id)),
            "records" => Ok(Self::Record(id)),
            _ => Err(wanted()),
        }
    }
}

/// Reads `submissions/{id}` from the field `field`.
pub(crate) fn parse_submission(field: &str, name: &str) -> Result<SubmissionId, Failure> {
    match Resource::parse(field, name)? {
        Resource::Submission(id) => Ok(id),
        Resource::Record(_) => Err(Failure::field(field, "the name of a submission is wanted")),
    }
}

/// Reads `records/{id}` from the field `field`.
pub(crate) fn parse_record(field: &str, name: &str) -> Result<SubmissionId, Failure> {
    match Resource::parse(field, name)? {
        Resource::Record(id) => Ok(id),
        Resource::Submission(_) => Err(Failure::field(field, "the name of a record is wanted")),
    }
}

/// Holds a free text against the limit; empty means none.
pub(crate) fn optional_text(field: &str, text: String) -> Result<Option<String>, Failure> {
    if text.len() > limits::TEXT_BYTES_MAX {
        let message = format!("at most {} bytes are taken", limits::TEXT_BYTES_MAX);
        return Err(Failure::field(field, message));
    }
    Ok(Some(text).filter(|text| !text.is_empty()))
}

/// Entries of a page: the default for 0, never more than the maximum.
pub(crate) fn page_size(wanted: u32) -> usize {
    let size = match wanted {
        0 => limits::PAGE_SIZE_DEFAULT,
        more => more.min(limits::PAGE_SIZE_MAX),
    };
    size as usize
}

/// A page token that knows the filter it was made with.
pub(crate) mod token {
    use super::Failure;

    /// Digits of the filter's mark.
    const MARK_DIGITS: usize = 16;
    /// Longest token that is read, bytes.
    const TOKEN_BYTES_MAX: usize = 4096;

    /// Wraps `inner`, which may be empty for the end of the list.
    pub(crate) fn wrap(filter: &str, inner: &str) -> String {
        match inner {
            "" => String::new(),
            inner => inner
                .bytes()
                .fold(mark(filter), |token, byte| format!("{token}{byte:02x}")),
        }
    }

    /// Unwraps a token; empty stays empty.
    pub(crate) fn unwrap(filter: &str, token: &str) -> Result<String, Failure> {
        if token.is_empty() {
            return Ok(String::new());
        }
        let refuse = |message: &str| Failure::field("page_token", message);
        match token.split_at_checked(MARK_DIGITS) {
            _ if token.len() > TOKEN_BYTES_MAX => Err(refuse("not made by this service")),
            Some((found, inner)) if found == mark(filter) => {
                text_of(inner).ok_or_else(|| refuse("not made by this service"))
            }
            Some(_) => Err(refuse("made with another filter, or not by this service")),
            None => Err(refuse("not made by this service")),
        }
    }

    fn text_of(digits: &str) -> Option<String> {
        let (pairs, rest) = digits.as_bytes().as_chunks::<2>();
        let byte = |pair: &[u8; 2]| u8::from_str_radix(std::str::from_utf8(pair).ok()?, 16).ok();
        let bytes: Option<Vec<u8>> = pairs.iter().map(byte).collect();
        String::from_utf8(bytes.filter(|_| rest.is_empty())?).ok()
    }

    fn mark(filter: &str) -> String {
        let mut mark = blake3::hash(filter.as_bytes()).to_hex().to_string();
        mark.truncate(MARK_DIGITS);
        mark
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn names_round_trip_and_others_are_refused() {
        let id = SubmissionId::from_bytes([0xab; 16]);
        assert_eq!(parse_submission("name", &submission(id)), Ok(id));
        assert_eq!(parse_record("name", &record(id)), Ok(id));
        for bad in [
            "",
            "submissions/",
            "submissions",
            "drafts/00",
            "submissions/..",
            "records/xyz",
        ] {
            assert!(parse_submission("name", bad).is_err(), "{bad}");
        }
        assert!(parse_submission("name", &record(id)).is_err());
        assert!(parse_record("name", &submission(id)).is_err());
    }

    #[test]
    fn page_sizes_are_defaulted_and_clamped() {
        let max = limits::PAGE_SIZE_MAX;
        let found = [0, 1, max - 1, max, max + 1, u32::MAX].map(page_size);
        let max = max as usize;
        assert_eq!(
            found,
            [
                limits::PAGE_SIZE_DEFAULT as usize,
                1,
                max - 1,
                max,
                max,
                max
            ]
        );
    }

    #[test]
    fn a_token_belongs_to_its_filter() {
        let made = token::wrap("a", "inner");
        assert_eq!(token::unwrap("a", &made), Ok("inner".to_owned()));
        assert!(token::unwrap("b", &made).is_err());
        assert!(token::unwrap("a", "short").is_err());
        assert!(token::unwrap("a", &format!("{made}0")).is_err());
        assert!(token::unwrap("a", &made.replace("69", "xx")).is_err());
        assert_eq!(token::wrap("a", ""), "");
    }

    #[test]
    fn texts_keep_to_their_limit() {
        let of = |length: usize| optional_text("reason", "x".repeat(length));
        assert_eq!(of(0), Ok(None));
        assert!(of(limits::TEXT_BYTES_MAX).is_ok());
        assert!(of(limits::TEXT_BYTES_MAX + 1).is_err());
    }
}
