//! The command `tarehouse-server` as a process: configuration, signals, exit codes.

use std::io::{BufRead as _, BufReader, Read as _};
use std::process::{Child, Command, Output, Stdio};

fn command() -> Command {
    let mut command = Command::new(env!("CARGO_BIN_EXE_tarehouse-server"));
    command.stdout(Stdio::piped()).stderr(Stdio::piped());
    command
}

fn with_configuration(text: &str) -> (tempfile::TempDir, Command) {
    let folder = tempfile::tempdir().unwrap();
    let file = folder.path().join("service.toml");
    std::fs::write(&file, text).unwrap();
    let mut command = command();
    command.arg("--config").arg(file);
    (folder, command)
}

fn words(output: &Output) -> String {
    String::from_utf8(output.stderr.clone()).unwrap()
}

#[test]
fn a_bad_configuration_ends_with_64_and_names_the_line() {
    let text = "store = \"store\"\n\n[stop]\ngrace = \"30\"\n";
    let (folder, mut command) = with_configuration(text);
    let output = command.output().unwrap();
    assert_eq!(output.status.code(), Some(64));
    assert!(
        words(&output).contains("line 4: stop.grace"),
        "{}",
        words(&output)
    );
    assert!(
        !folder.path().join("store").exists(),
        "nothing is made before all is checked"
    );
    let output = self::command().arg("--nonsense").output().unwrap();
    assert_eq!(output.status.code(), Some(64));
}

#[test]
fn an_address_in_use_is_a_failure_and_no_bad_configuration() {
    let taken = std::net::TcpListener::bind("127.0.0.1:0").unwrap();
    let address = taken.local_addr().unwrap();
    let (_folder, mut command) = with_configuration(&format!("listen = \"{address}\"\n"));
    let output = command.output().unwrap();
    assert_eq!(output.status.code(), Some(1), "{}", words(&output));
}

fn signal(child: &Child, name: &str) {
    let sent = Command::new("kill")
        .arg(name)
        .arg(child.id().to_string())
        .status()
        .unwrap();
    assert!(sent.success());
}

#[test]
fn both_signals_end_the_service_in_good_order() {
    for name in ["-TERM", "-INT"] {
        let (folder, mut command) = with_configuration("listen = \"127.0.0.1:0\"\n");
        let mut child = command.spawn().unwrap();
        let mut log = BufReader::new(child.stderr.take().unwrap());
        let mut line = String::new();
        while !line.contains("listening") {
            line.clear();
            assert_ne!(
                log.read_line(&mut line).unwrap(),
                0,
                "the service ended by itself"
            );
        }
        signal(&child, name);
        let mut rest = String::new();
        log.read_to_string(&mut rest).unwrap();
        assert_eq!(child.wait().unwrap().code(), Some(0), "{rest}");
        assert!(folder.path().join("tarehouse-store").is_dir());
    }
}
