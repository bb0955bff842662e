//! Configuration of the service: strings first, then values with units, all checked before anything is bound.
//!
//! Invariants: a [`Config`] that exists is usable; a bad text yields every complaint at once, each with its line;
//! every key has a default, so that an empty text is a service on 127.0.0.1 that keeps its store in `tarehouse-store`.
//! Never reads the environment; the only file it reads is the policy that the text names.

mod source;
mod values;

use std::net::SocketAddr;
use std::path::{Path, PathBuf};
use std::time::Duration;

use tarehouse_assay::Policy;

use source::Source;
use values::{Address, Count, Seconds};

/// Values the service runs with.
#[derive(Debug, Clone)]
pub struct Config {
    /// Where to listen.
    pub listen: SocketAddr,
    /// Folder of the store.
    pub store: PathBuf,
    /// Every threshold of the judgement.
    pub policy: Policy,
    /// Examinations at the same time.
    pub workers: usize,
    /// Submissions that may wait for an examination.
    pub queue_length_max: usize,
    /// Drafts that one principal may hold open.
    pub drafts_per_principal_max: usize,
    /// Records that one ranking reads; a ranking of more is refused.
    pub ranked_records_max: usize,
    /// Upload streams open at the same time.
    pub upload_streams_max: usize,
    /// How long a stream of the caller may be silent.
    pub stream_idle: Duration,
    /// Time for a call that reads.
    pub read_deadline: Duration,
    /// Time for a call that changes one thing.
    pub write_deadline: Duration,
    /// Time for sealing, which decodes the whole package.
    pub seal_deadline: Duration,
    /// Pause between two signs of life of a watch.
    pub heartbeat: Duration,
    /// How long a stopping service waits for running calls and examinations.
    pub grace: Duration,
    /// What the log shows.
    pub log_filter: String,
    /// Shape of the log.
    pub log_format: LogFormat,
}

/// Shape of the log on standard error.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum LogFormat {
    /// One line per event for people.
    Text,
    /// One JSON object per event.
    Json,
}

/// One complaint about a configuration.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Complaint {
    /// Line of the text, counted from 1; 0 where the key is not in the text.
    pub line: usize,
    /// Key, e.g. `work.workers`; empty where the text is no TOML.
    pub key: String,
    /// What is wrong and what is wanted.
    pub message: String,
}

impl std::fmt::Display for Complaint {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        match (self.line, self.key.as_str()) {
            (0, key) => write!(f, "{key}: {}", self.message),
            (line, "") => write!(f, "line {line}: {}", self.message),
            (line, key) => write!(f, "line {line}: {key}: {}", self.message),
        }
    }
}

/// All complaints about a configuration.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
#[error("the configuration cannot be used:\n{}", .0.iter().map(|c| format!("  {c}")).collect::<Vec<_>>().join("\n"))]
pub struct ConfigError(pub Vec<Complaint>);

/// The words that allow listening beyond this machine.
const BEYOND_LOOPBACK_ALLOWED: &str = "allow-without-protection";

impl Config {
    /// Reads a configuration from its TOML text; paths are taken relative to `folder`.
    ///
    /// # Errors
    /// [`ConfigError`] with every complaint.
    pub fn parse(text: &str, folder: &Path) -> Result<Self, ConfigError> {
        let mut source = Source::read(text)?;
        let listen = source.value("listen", "127.0.0.1:7417", Address::parse);
        let beyond = source.value("beyond_loopback", "refuse", |word| {
            values::one_of(word, &["refuse", BEYOND_LOOPBACK_ALLOWED])
        });
        let store = source.value("store", "tarehouse-store", values::path);
        let policy = source.value("policy", "built-in", |word| read_policy(word, folder));
        let workers = source.value("work.workers", "cores", values::workers);
        let queue = source.value(
            "work.queue_length_max",
            "1000",
            Count(1, 1_000_000).parser(),
        );
        let drafts = source.value(
            "work.drafts_per_principal_max",
            "200",
            Count(1, 100_000).parser(),
        );
        let ranked = source.value(
            "work.ranked_records_max",
            "2000",
            Count(1, 100_000).parser(),
        );
        let streams = source.value("transfer.upload_streams_max", "16", Count(1, 1024).parser());
        let idle = source.value("transfer.stream_idle", "30 s", Seconds(1, 600).parser());
        let read = source.value("deadline.read", "15 s", Seconds(1, 600).parser());
        let write = source.value("deadline.write", "60 s", Seconds(1, 600).parser());
        let seal = source.value("deadline.seal", "5 min", Seconds(1, 3600).parser());
        let heartbeat = source.value("watch.heartbeat", "10 s", Seconds(1, 300).parser());
        let grace = source.value("stop.grace", "30 s", Seconds(1, 3600).parser());
        let log_filter = source.value("log.filter", "info", values::log_filter);
        let log_format = source.value("log.format", "text", values::log_format);
        if let (Some(address), Some("refuse")) = (listen, beyond)
            && !address.ip().is_loopback()
        {
            source.complain(
                "listen",
                format!(
                    "{address} can be reached from other machines and this service has no protection of its own; \
                     listen on 127.0.0.1 or write beyond_loopback = \"{BEYOND_LOOPBACK_ALLOWED}\""
                ),
            );
        }
        let complaints = source.finish();
        if !complaints.is_empty() {
            return Err(ConfigError(complaints));
        }
        let built = (|| {
            Some(Self {
                listen: listen?,
                store: folder.join(store?),
                policy: policy?,
                workers: workers?,
                queue_length_max: queue?,
                drafts_per_principal_max: drafts?,
                ranked_records_max: ranked?,
                upload_streams_max: streams?,
                stream_idle: idle?,
                read_deadline: read?,
                write_deadline: write?,
                seal_deadline: seal?,
                heartbeat: heartbeat?,
                grace: grace?,
                log_filter: log_filter?,
                log_format: log_format?,
            })
        })();
        built.ok_or_else(|| ConfigError(Vec::new()))
    }

    /// The configuration of an empty text.
    ///
    /// # Errors
    /// [`ConfigError`]; never in a released binary: a test reads it.
    pub fn standard() -> Result<Self, ConfigError> {
        Self::parse("", Path::new(""))
    }
}

fn read_policy(word: &str, folder: &Path) -> Result<Policy, String> {
    if word == "built-in" {
        return Policy::built_in().map_err(|error| error.to_string());
    }
    let path = folder.join(word);
    let text = std::fs::read_to_string(&path)
        .map_err(|error| format!("{} cannot be read: {error}", path.display()))?;
    Policy::parse(&text).map_err(|error| format!("{}: {error}", path.display()))
}

#[cfg(test)]
mod tests {
    use super::*;

    fn complaints(text: &str) -> Vec<Complaint> {
        Config::parse(text, Path::new(""))
            .expect_err("must be refused")
            .0
    }

    #[test]
    fn the_empty_text_listens_on_this_machine_only() {
        let config = Config::standard().unwrap();
        assert!(config.listen.ip().is_loopback());
        assert!(config.workers >= 1);
    }

    #[test]
    fn the_annotated_file_states_the_defaults() {
        let text = include_str!("../../../deploy/service.toml");
        let annotated = Config::parse(text, Path::new("")).unwrap();
        assert_eq!(
            format!("{annotated:?}"),
            format!("{:?}", Config::standard().unwrap())
        );
    }

    #[test]
    fn every_complaint_comes_at_once_with_its_line() {
        let text =
            "listen = \"here\"\nnonsense = 1\n[work]\nworkers = \"0\"\n[deadline]\nread = \"15\"\n";
        let found: Vec<(usize, String)> = complaints(text)
            .into_iter()
            .map(|c| (c.line, c.key))
            .collect();
        let expected = [
            (1, "listen"),
            (2, "nonsense"),
            (4, "work.workers"),
            (6, "deadline.read"),
        ];
        assert_eq!(found, expected.map(|(line, key)| (line, key.to_owned())));
    }

    #[test]
    fn other_machines_only_when_said_in_so_many_words() {
        let found = complaints("\nlisten = \"0.0.0.0:7417\"\n");
        assert_eq!((found[0].line, found[0].key.as_str()), (2, "listen"));
        let words =
            format!("listen = \"0.0.0.0:7417\"\nbeyond_loopback = \"{BEYOND_LOOPBACK_ALLOWED}\"\n");
        assert!(Config::parse(&words, Path::new("")).is_ok());
    }

    #[test]
    fn broken_toml_names_its_line() {
        let found = complaints("store = \"a\"\nlisten = \n");
        assert_eq!(found[0].line, 2);
    }

    #[test]
    fn a_policy_that_is_not_there_is_a_complaint() {
        let found = complaints("policy = \"no-such-file.toml\"");
        assert_eq!(found[0].key, "policy");
    }
}
