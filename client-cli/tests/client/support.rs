//! A console that remembers, and packages to send.

use std::fs;
use std::io::Write;
use std::path::{Path, PathBuf};
use std::sync::{Arc, Mutex};

use clap::Parser as _;
use tarehouse_client::arguments::Arguments;
use tarehouse_client::commands::Context;
use tarehouse_client::console::{Console, Traits};
use tarehouse_client::exit::Exit;
use tarehouse_client::interrupt::Interrupt;
use tarehouse_client::retry::Pause;

/// Text that was written.
#[derive(Debug, Clone, Default)]
pub(crate) struct Written(Arc<Mutex<Vec<u8>>>);

impl Written {
    pub(crate) fn text(&self) -> String {
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

/// How a command ended and what it wrote.
#[derive(Debug)]
pub(crate) struct Ended {
    pub(crate) exit: Exit,
    pub(crate) out: String,
    pub(crate) err: String,
}

/// Runs a command line inside this process, as into pipes.
pub(crate) async fn tarehouse(words: &[&str]) -> Ended {
    tarehouse_with(words, Interrupt::never()).await
}

pub(crate) async fn tarehouse_with(words: &[&str], interrupt: Interrupt) -> Ended {
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
        interrupt,
    };
    let words = ["tarehouse"].iter().chain(words);
    let arguments = Arguments::try_parse_from(words).unwrap();
    let exit = tarehouse_client::run_in(arguments, &mut context).await;
    Ended {
        exit,
        out: out.text(),
        err: err.text(),
    }
}

/// A package of the demo.
pub(crate) fn demo_package(name: &str) -> PathBuf {
    let folder = Path::new(env!("CARGO_MANIFEST_DIR")).join("../demo-data/packages");
    folder.join(name)
}

/// Text of a path.
pub(crate) fn text(path: &Path) -> &str {
    path.to_str().unwrap()
}

/// A copy of a package that a test may spoil.
pub(crate) fn copy_of(name: &str, folder: &Path) -> PathBuf {
    let to = folder.join(name);
    fs::create_dir(&to).unwrap();
    for entry in fs::read_dir(demo_package(name)).unwrap() {
        let from = entry.unwrap().path();
        fs::copy(&from, to.join(from.file_name().unwrap())).unwrap();
    }
    to
}

/// Replaces text in a manifest that must hold it.
pub(crate) fn edit_manifest(package: &Path, from: &str, to: &str) {
    let path = package.join("package.toml");
    let manifest = fs::read_to_string(&path).unwrap();
    assert!(manifest.contains(from), "{from} is not in the manifest");
    fs::write(path, manifest.replacen(from, to, 1)).unwrap();
}
