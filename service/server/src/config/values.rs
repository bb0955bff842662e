//! Readers of single settings. Durations need units, numbers have a range; each error says what is wanted.

use std::net::SocketAddr;
use std::path::PathBuf;
use std::str::FromStr as _;
use std::time::Duration;

use super::LogFormat;

/// Most workers that a configuration may ask for.
const WORKERS_MAX: usize = 256;

/// A socket address.
pub(super) struct Address;

impl Address {
    /// Reads `address:port`.
    pub(super) fn parse(word: &str) -> Result<SocketAddr, String> {
        word.parse()
            .map_err(|_| format!("\"{word}\" is no address with a port, such as 127.0.0.1:7417"))
    }
}

/// A whole number from the first to the second bound.
#[derive(Clone, Copy)]
pub(super) struct Count(pub(super) usize, pub(super) usize);

impl Count {
    /// A reader within these bounds.
    pub(super) fn parser(self) -> impl FnOnce(&str) -> Result<usize, String> {
        let Self(least, most) = self;
        move |word| match word.replace('_', "").parse() {
            Ok(count) if (least..=most).contains(&count) => Ok(count),
            _ => Err(format!(
                "\"{word}\" is no whole number from {least} to {most}"
            )),
        }
    }
}

/// A duration from the first to the second bound, s.
#[derive(Clone, Copy)]
pub(super) struct Seconds(pub(super) u64, pub(super) u64);

impl Seconds {
    /// A reader within these bounds.
    pub(super) fn parser(self) -> impl FnOnce(&str) -> Result<Duration, String> {
        let Self(least, most) = self;
        move |word| {
            let wanted = || {
                format!(
                    "\"{word}\" is no duration with a unit (ms, s, min, h) from {least} s to {most} s"
                )
            };
            let at = word
                .find(|c: char| !c.is_ascii_digit())
                .ok_or_else(wanted)?;
            let (digits, unit) = word.split_at(at);
            let millis_per_unit = match unit.trim() {
                "ms" => 1,
                "s" => 1000,
                "min" => 60_000,
                "h" => 3_600_000,
                _ => return Err(wanted()),
            };
            let count: u64 = digits.parse().map_err(|_| wanted())?;
            let millis = count.checked_mul(millis_per_unit).ok_or_else(wanted)?;
            if (least * 1000..=most * 1000).contains(&millis) {
                Ok(Duration::from_millis(millis))
            } else {
                Err(wanted())
            }
        }
    }
}

/// One of the given words.
pub(super) fn one_of(word: &str, words: &[&'static str]) -> Result<&'static str, String> {
    words
        .iter()
        .find(|known| **known == word)
        .copied()
        .ok_or_else(|| format!("\"{word}\" is not one of {}", words.join(", ")))
}

/// A path that is not empty.
pub(super) fn path(word: &str) -> Result<PathBuf, String> {
    if word.trim().is_empty() {
        return Err("a folder is wanted".to_owned());
    }
    Ok(PathBuf::from(word))
}

/// `cores`, or a number of workers.
pub(super) fn workers(word: &str) -> Result<usize, String> {
    if word == "cores" {
        return Ok(std::thread::available_parallelism().map_or(1, usize::from));
    }
    Count(1, WORKERS_MAX).parser()(word).map_err(|error| format!("{error}, nor \"cores\""))
}

/// Directives of the log.
pub(super) fn log_filter(word: &str) -> Result<String, String> {
    tracing_subscriber::EnvFilter::from_str(word)
        .map(|_| word.to_owned())
        .map_err(|error| format!("\"{word}\": {error}"))
}

/// Shape of the log.
pub(super) fn log_format(word: &str) -> Result<LogFormat, String> {
    Ok(match one_of(word, &["text", "json"])? {
        "json" => LogFormat::Json,
        _ => LogFormat::Text,
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn durations_need_a_unit_and_a_range() {
        let read = |word: &str| Seconds(1, 600).parser()(word);
        assert_eq!(read("1 s"), Ok(Duration::from_secs(1)));
        assert_eq!(read("10min"), Ok(Duration::from_mins(10)));
        assert_eq!(read("1500 ms"), Ok(Duration::from_millis(1500)));
        for bad in [
            "15",
            "",
            "s",
            "601 s",
            "999 ms",
            "3 days",
            "99999999999999999999 s",
            "-3 s",
        ] {
            assert!(read(bad).is_err(), "{bad}");
        }
    }

    #[test]
    fn counts_keep_to_their_bounds() {
        let read = |word: &str| Count(2, 1000).parser()(word);
        assert_eq!(read("2"), Ok(2));
        assert_eq!(read("1_000"), Ok(1000));
        assert!(read("1").is_err() && read("1001").is_err() && read("two").is_err());
    }
}
