//! The way to a service: over the network, or inside this process.
//!
//! Both ways end in the same channel, so that no command knows the difference.

use std::path::{Path, PathBuf};
use std::time::Duration;

use tarehouse_proto::v1::catalog_service_client::CatalogServiceClient;
use tarehouse_proto::v1::server_service_client::ServerServiceClient;
use tarehouse_proto::v1::submission_service_client::SubmissionServiceClient;
use tarehouse_proto::v1::transfer_service_client::TransferServiceClient;
use tarehouse_server::{Config, LocalService};
use tonic::Request;
use tonic::transport::{Channel, Endpoint};

use crate::arguments::{ConnectArgs, SERVER_VARIABLE};
use crate::failure::Failure;

/// How long a connection may take to be made.
const CONNECT_TIMEOUT: Duration = Duration::from_secs(10);
/// How long a single answer may take.
const ANSWER_TIMEOUT: Duration = Duration::from_mins(1);
/// How long sealing may take: the service decodes the whole package.
const SEAL_TIMEOUT: Duration = Duration::from_mins(10);
/// Pause between two pings of a silent connection.
const KEEPALIVE_INTERVAL: Duration = Duration::from_secs(30);
/// How long a ping may stay unanswered.
const KEEPALIVE_TIMEOUT: Duration = Duration::from_secs(10);
/// Largest single answer, bytes: a report with all its curves, a full page of a list.
const ANSWER_BYTES_MAX: usize = 64 * 1024 * 1024;

/// Which service to speak to.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Target {
    /// A server at an address.
    Server(String),
    /// A store opened inside this process.
    Local(PathBuf),
}

impl Target {
    /// Chooses between the arguments and the environment; an argument wins.
    ///
    /// # Errors
    /// [`Failure::Usage`] where neither names a service.
    pub fn choose(args: &ConnectArgs, from_environment: Option<&str>) -> Result<Self, Failure> {
        let from_environment = from_environment
            .map(str::trim)
            .filter(|text| !text.is_empty());
        match (&args.local, args.server.as_deref().or(from_environment)) {
            (Some(dir), _) => Ok(Self::Local(dir.clone())),
            (None, Some(url)) => Ok(Self::Server(address(url)?)),
            (None, None) => Err(Failure::Usage {
                what: "no service was named".to_owned(),
                next: format!(
                    "give --server URL (or set {SERVER_VARIABLE}) for a server, or --local DIR for a store on this \
                     machine."
                ),
            }),
        }
    }

    /// The arguments that name this target, for a command that a person may type.
    pub fn as_arguments(&self) -> String {
        match self {
            Self::Server(url) => format!("--server {url}"),
            Self::Local(dir) => format!("--local {}", dir.display()),
        }
    }

    /// What becomes of a sealed submission when this process ends.
    pub fn without_you(&self) -> &'static str {
        match self {
            Self::Server(_) => "The service goes on without you",
            Self::Local(_) => "The store keeps what was sent and goes on when it is opened again",
        }
    }
}

/// An address with its scheme; `http` where none is written.
fn address(url: &str) -> Result<String, Failure> {
    match url.split_once("://") {
        None => Ok(format!("http://{url}")),
        Some(("http", rest)) if !rest.is_empty() => Ok(url.to_owned()),
        Some((scheme, _)) => Err(Failure::Usage {
            what: format!("{url} cannot be used: this version speaks http, not {scheme}"),
            next: "give an address such as http://127.0.0.1:7417.".to_owned(),
        }),
    }
}

/// An open way to a service.
#[derive(Debug)]
pub struct Session {
    channel: Channel,
    target: Target,
    local: Option<LocalService>,
}

impl Session {
    /// Connects, or opens the store.
    ///
    /// # Errors
    /// [`Failure::Connect`], [`Failure::LocalStore`].
    pub async fn open(target: Target) -> Result<Self, Failure> {
        let (channel, local) = match &target {
            Target::Server(url) => (connect(url).await?, None),
            Target::Local(dir) => {
                let (channel, service) = open_local(dir).await?;
                (channel, Some(service))
            }
        };
        Ok(Self {
            channel,
            target,
            local,
        })
    }

    /// A session over a channel that stands already; closing it leaves the other end alone.
    pub fn over(channel: Channel, target: Target) -> Self {
        Self {
            channel,
            target,
            local: None,
        }
    }

    /// What it speaks to.
    pub fn target(&self) -> &Target {
        &self.target
    }

    /// Submissions.
    pub fn submissions(&self) -> SubmissionServiceClient<Channel> {
        SubmissionServiceClient::new(self.channel.clone())
            .max_decoding_message_size(ANSWER_BYTES_MAX)
    }

    /// Arrays.
    pub fn transfers(&self) -> TransferServiceClient<Channel> {
        TransferServiceClient::new(self.channel.clone()).max_decoding_message_size(ANSWER_BYTES_MAX)
    }

    /// The shared list.
    pub fn catalog(&self) -> CatalogServiceClient<Channel> {
        CatalogServiceClient::new(self.channel.clone()).max_decoding_message_size(ANSWER_BYTES_MAX)
    }

    /// The server itself.
    pub fn server(&self) -> ServerServiceClient<Channel> {
        ServerServiceClient::new(self.channel.clone()).max_decoding_message_size(ANSWER_BYTES_MAX)
    }

    /// Ends the session; a service inside this process stops and closes its store.
    ///
    /// # Errors
    /// Where the store could not be closed.
    pub async fn close(self) -> Result<(), Failure> {
        let Self { channel, local, .. } = self;
        drop(channel);
        match local {
            None => Ok(()),
            Some(service) => service.shutdown().await.map_err(|error| Failure::Internal {
                attempted: "closing the store",
                detail: chain(&error),
            }),
        }
    }
}

async fn connect(url: &str) -> Result<Channel, Failure> {
    let failed = |error: tonic::transport::Error| Failure::Connect {
        server: url.to_owned(),
        detail: chain(&error),
    };
    Endpoint::from_shared(url.to_owned())
        .map_err(failed)?
        .connect_timeout(CONNECT_TIMEOUT)
        .http2_keep_alive_interval(KEEPALIVE_INTERVAL)
        .keep_alive_timeout(KEEPALIVE_TIMEOUT)
        .connect()
        .await
        .map_err(failed)
}

async fn open_local(dir: &Path) -> Result<(Channel, LocalService), Failure> {
    let failed = |detail: String| Failure::LocalStore {
        dir: dir.to_owned(),
        detail,
    };
    let config = Config::standard().map_err(|error| failed(chain(&error)))?;
    tarehouse_server::in_process(dir, config)
        .await
        .map_err(|error| failed(chain(&error)))
}

/// An error with all its causes in one line.
pub fn chain(error: &dyn std::error::Error) -> String {
    let mut text = error.to_string();
    let mut source = error.source();
    while let Some(cause) = source {
        text.push_str(": ");
        text.push_str(&cause.to_string());
        source = cause.source();
    }
    text
}

/// A request with the usual time limit.
pub fn asking<T>(message: T) -> Request<T> {
    with_limit(message, ANSWER_TIMEOUT)
}

/// A request for sealing.
pub fn sealing<T>(message: T) -> Request<T> {
    with_limit(message, SEAL_TIMEOUT)
}

fn with_limit<T>(message: T, limit: Duration) -> Request<T> {
    let mut request = Request::new(message);
    request.set_timeout(limit);
    request
}

/// A resource name from what a person types: a bare id belongs to `collection`.
pub fn resource_name(collection: &str, typed: &str) -> String {
    let typed = typed.trim();
    if typed.contains('/') {
        typed.to_owned()
    } else {
        format!("{collection}/{typed}")
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn args(server: Option<&str>, local: Option<&str>) -> ConnectArgs {
        ConnectArgs {
            server: server.map(str::to_owned),
            local: local.map(PathBuf::from),
        }
    }

    #[test]
    fn arguments_win_over_the_environment() {
        let environment = Some("http://environment:1");
        assert_eq!(
            Target::choose(&args(None, Some("dir")), environment).unwrap(),
            Target::Local("dir".into())
        );
        assert_eq!(
            Target::choose(&args(Some("http://given:2"), None), environment).unwrap(),
            Target::Server("http://given:2".to_owned())
        );
        assert_eq!(
            Target::choose(&args(None, None), environment).unwrap(),
            Target::Server("http://environment:1".to_owned())
        );
    }

    #[test]
    fn without_a_service_both_ways_are_named() {
        for environment in [None, Some(""), Some("  ")] {
            let failure = Target::choose(&args(None, None), environment).unwrap_err();
            assert_eq!(failure.exit(), crate::exit::Exit::Usage);
            let Failure::Usage { next, .. } = failure else {
                panic!("another failure");
            };
            assert!(next.contains("--server") && next.contains("--local"));
        }
    }

    #[test]
    fn an_address_needs_no_scheme_and_takes_no_strange_one() {
        assert_eq!(address("localhost:7417").unwrap(), "http://localhost:7417");
        assert!(address("ftp://x").is_err());
        assert!(address("https://x").is_err());
        assert!(address("http://").is_err());
    }

    #[test]
    fn bare_ids_get_their_collection() {
        assert_eq!(resource_name("submissions", " abc "), "submissions/abc");
        assert_eq!(resource_name("submissions", "records/abc"), "records/abc");
    }
}
