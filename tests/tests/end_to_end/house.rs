//! A server on a free port, and the client's commands against it.

use std::io::Write;
use std::path::{Path, PathBuf};
use std::sync::{Arc, Mutex};
use std::time::Duration;

use tarehouse_client::arguments::{Arguments, Command, ConnectArgs, FormatArgs};
use tarehouse_client::commands::Context;
use tarehouse_client::console::{Console, Format, Traits};
use tarehouse_client::exit::Exit;
use tarehouse_client::interrupt::Interrupt;
use tarehouse_client::retry::Pause;
use tarehouse_server::{Config, ServeError};
use tokio::net::TcpListener;
use tokio::sync::oneshot;
use tokio::task::JoinHandle;

/// Longest time that one command or the end of a server may take.
const PATIENCE: Duration = Duration::from_mins(2);

/// A running server.
pub(crate) struct House {
    pub(crate) url: String,
    stop: oneshot::Sender<()>,
    task: JoinHandle<Result<(), ServeError>>,
}

impl House {
    /// Serves the store in `store` on a free port of this machine.
    pub(crate) async fn open(store: &Path) -> Self {
        let listener = TcpListener::bind("127.0.0.1:0").await.unwrap();
        let url = format!("http://{}", listener.local_addr().unwrap());
        let mut config = Config::standard().unwrap();
        config.store = store.to_owned();
        config.workers = 2;
        config.grace = Duration::from_secs(5);
        let (stop, stopped) = oneshot::channel();
        let task = tokio::spawn(tarehouse_server::run(listener, config, async move {
            drop(stopped.await);
        }));
        Self { url, stop, task }
    }

    /// Stops the server in good order.
    pub(crate) async fn close(self) {
        self.stop.send(()).unwrap();
        let ended = tokio::time::timeout(PATIENCE, self.task).await;
        ended.expect("the server must stop").unwrap().unwrap();
    }

    /// The arguments that name this server.
    pub(crate) fn connect(&self) -> ConnectArgs {
        ConnectArgs {
            server: Some(self.url.clone()),
            local: None,
        }
    }
}

/// How a command ended and what it wrote.
#[derive(Debug)]
pub(crate) struct Ended {
    pub(crate) exit: Exit,
    pub(crate) out: String,
    pub(crate) err: String,
}

impl Ended {
    /// Its data, line by line where there are several documents.
    pub(crate) fn json(&self) -> serde_json::Value {
        serde_json::from_str(&self.out)
            .unwrap_or_else(|error| panic!("{error}: {}{}", self.out, self.err))
    }
}

/// Output that is JSON.
pub(crate) fn as_json() -> FormatArgs {
    FormatArgs {
        format: Format::Json,
    }
}

#[derive(Clone, Default)]
struct Written(Arc<Mutex<Vec<u8>>>);

impl Written {
    fn text(&self) -> String {
        String::from_utf8(self.0.lock().unwrap().clone()).unwrap()
    }
}

impl Write for Written {
    fn write(&mut self, bytes: &[u8]) -> std::io::Result<usize> {
        self.0.lock().unwrap().extend_from_slice(bytes);
        Ok(bytes.len())
    }

    fn flush(&mut self) -> std::io::Result<()> {
        Ok(())
    }
}

/// Runs a command to its end, as into pipes.
pub(crate) async fn tarehouse(command: Command) -> Ended {
    let (out, err) = (Written::default(), Written::default());
    let mut console = Console::new(
        Box::new(out.clone()),
        Box::new(err.clone()),
        Traits::pipes(),
    );
    let mut context = Context {
        console: &mut console,
        server_from_environment: None,
        pause: Pause::Clock,
        interrupt: Interrupt::never(),
    };
    let running = tarehouse_client::run_in(Arguments { command }, &mut context);
    let exit = tokio::time::timeout(PATIENCE, running)
        .await
        .expect("the command must end");
    Ended {
        exit,
        out: out.text(),
        err: err.text(),
    }
}

/// The folder of a demo package.
pub(crate) fn demo_package(name: &str) -> PathBuf {
    let packages = Path::new(env!("CARGO_MANIFEST_DIR")).join("../demo-data/packages");
    packages.join(name)
}

/// Files that a store has not finished: below `temp` and `partial`.
pub(crate) fn unfinished(store: &Path) -> Vec<PathBuf> {
    let mut found = Vec::new();
    let mut folders = vec![store.join("temp"), store.join("partial")];
    while let Some(folder) = folders.pop() {
        for entry in std::fs::read_dir(&folder).unwrap() {
            let path = entry.unwrap().path();
            if path.is_dir() {
                folders.push(path);
            } else {
                found.push(path);
            }
        }
    }
    found
}
