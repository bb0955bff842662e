//! What the command `tarehouse-server` does around the service: arguments, log, signals, exit codes.

use std::ffi::OsString;
use std::future::Future;
use std::io::Write as _;
use std::path::{Path, PathBuf};
use std::process::ExitCode;

use tracing_subscriber::EnvFilter;

use crate::config::{Config, LogFormat};
use crate::failure::with_sources;

/// Exit code of a bad configuration or a bad command line.
pub const EXIT_CONFIGURATION: u8 = 64;

/// Longest configuration file that is read, bytes.
const FILE_BYTES_MAX: u64 = 64 * 1024;

const HELP: &str = "\
tarehouse-server: weighs uploaded force constants before they enter a shared database

Usage: tarehouse-server [--config FILE] [--check]

  --config FILE  configuration; without it a service on 127.0.0.1 with its store in ./tarehouse-store
  --check        read the configuration, say whether it can be used, and end
  --version      print the version
  --help         print this

Exit codes: 0 ended as asked, 1 failed, 64 bad configuration or command line.
";

/// Why the command ends before the service starts.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Refusal {
    /// The caller asked for words only.
    Words(String),
    /// Command line or configuration cannot be used.
    Bad(String),
}

impl Refusal {
    /// Writes the words where they belong and gives the exit code.
    pub fn tell(&self) -> ExitCode {
        match self {
            Self::Words(words) => {
                // Whoever closed the pipe does not want the words.
                let _ = write!(std::io::stdout(), "{words}");
                ExitCode::SUCCESS
            }
            Self::Bad(words) => {
                let _ = writeln!(std::io::stderr(), "tarehouse-server: {words}");
                ExitCode::from(EXIT_CONFIGURATION)
            }
        }
    }
}

/// Reads the command line and the configuration that it names.
///
/// # Errors
/// [`Refusal`]: words that were asked for, or what cannot be used.
pub fn configuration(arguments: impl Iterator<Item = OsString>) -> Result<Config, Refusal> {
    let (mut file, mut check) = (None, false);
    let mut arguments = arguments;
    while let Some(argument) = arguments.next() {
        match argument.to_str() {
            Some("--help" | "-h") => return Err(Refusal::Words(HELP.to_owned())),
            Some("--version" | "-V") => {
                let version = format!("tarehouse-server {}\n", env!("CARGO_PKG_VERSION"));
                return Err(Refusal::Words(version));
            }
            Some("--check") => check = true,
            Some("--config") => {
                let value = arguments
                    .next()
                    .ok_or_else(|| Refusal::Bad("--config needs the name of a file".to_owned()))?;
                file = Some(PathBuf::from(value));
            }
            _ => {
                let words = format!("{} is not understood; see --help", argument.display());
                return Err(Refusal::Bad(words));
            }
        }
    }
    let config = match file {
        None => Config::standard().map_err(|error| Refusal::Bad(error.to_string()))?,
        Some(file) => {
            read(&file).map_err(|words| Refusal::Bad(format!("{}: {words}", file.display())))?
        }
    };
    if check {
        return Err(Refusal::Words("the configuration can be used\n".to_owned()));
    }
    Ok(config)
}

fn read(file: &Path) -> Result<Config, String> {
    let length = std::fs::metadata(file)
        .map_err(|error| error.to_string())?
        .len();
    if length > FILE_BYTES_MAX {
        return Err(format!("longer than {FILE_BYTES_MAX} bytes"));
    }
    let text = std::fs::read_to_string(file).map_err(|error| error.to_string())?;
    let folder = file.parent().unwrap_or(Path::new(""));
    Config::parse(&text, folder).map_err(|error| error.to_string())
}

/// Starts the log on standard error.
pub fn telemetry(config: &Config) {
    let filter = EnvFilter::new(&config.log_filter);
    let log = tracing_subscriber::fmt()
        .with_env_filter(filter)
        .with_writer(std::io::stderr);
    // A log that somebody else has started stays as it is.
    let _ = match config.log_format {
        LogFormat::Text => log.with_ansi(false).try_init(),
        LogFormat::Json => log.json().try_init(),
    };
}

/// Resolves at the first SIGINT or SIGTERM.
///
/// # Errors
/// Where the system lets nobody listen for signals.
pub fn stop_signal() -> std::io::Result<impl Future<Output = ()> + Send + 'static> {
    use tokio::signal::unix::{SignalKind, signal};
    let mut interrupt = signal(SignalKind::interrupt())?;
    let mut terminate = signal(SignalKind::terminate())?;
    Ok(async move {
        tokio::select! {
            _ = interrupt.recv() => tracing::info!("SIGINT: stopping"),
            _ = terminate.recv() => tracing::info!("SIGTERM: stopping"),
        }
    })
}

/// Writes why the service failed and gives the exit code.
pub fn failed(error: &dyn std::error::Error) -> ExitCode {
    let words = with_sources(error);
    let _ = writeln!(std::io::stderr(), "tarehouse-server: {words}");
    ExitCode::FAILURE
}

#[cfg(test)]
mod tests {
    use super::*;

    fn ask(arguments: &[&str]) -> Result<Config, Refusal> {
        configuration(arguments.iter().map(OsString::from))
    }

    #[test]
    fn a_bad_file_is_named_with_its_line() {
        let folder = tempfile::tempdir().unwrap();
        let file = folder.path().join("service.toml");
        std::fs::write(&file, "\n\nlisten = \"nowhere\"\n").unwrap();
        let Err(Refusal::Bad(words)) = ask(&["--config", file.to_str().unwrap()]) else {
            panic!("must be refused");
        };
        assert!(
            words.contains("service.toml") && words.contains("line 3: listen"),
            "{words}"
        );
    }

    #[test]
    fn a_store_is_found_beside_its_configuration() {
        let folder = tempfile::tempdir().unwrap();
        let file = folder.path().join("service.toml");
        std::fs::write(&file, "store = \"here\"\n").unwrap();
        let config = ask(&["--config", file.to_str().unwrap()]).unwrap();
        assert_eq!(config.store, folder.path().join("here"));
    }

    #[test]
    fn unknown_words_and_missing_files_are_refused() {
        assert!(matches!(ask(&["--port"]), Err(Refusal::Bad(_))));
        assert!(matches!(ask(&["--config"]), Err(Refusal::Bad(_))));
        assert!(matches!(
            ask(&["--config", "/no/such"]),
            Err(Refusal::Bad(_))
        ));
        assert!(matches!(ask(&["--help"]), Err(Refusal::Words(_))));
        assert!(matches!(ask(&["--check"]), Err(Refusal::Words(_))));
    }
}
