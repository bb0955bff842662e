//! The program itself: exit codes, streams, closed pipes.

use std::io::Read as _;
use std::process::{Command, Output, Stdio};

use crate::support::{demo_package, text};

fn command(words: &[&str]) -> Command {
    let mut command = Command::new(env!("CARGO_BIN_EXE_tarehouse"));
    command.args(words).env_remove("TAREHOUSE_SERVER");
    command
}

fn run(words: &[&str]) -> Output {
    command(words).output().unwrap()
}

#[test]
fn exit_codes_reach_the_shell_and_data_stays_on_stdout() {
    for (name, code) in [
        ("drosmelide-i", 0),
        ("pelquonol-alpha-unit", 3),
        ("drosmelide-v-unstable", 4),
    ] {
        let output = run(&["precheck", text(&demo_package(name))]);
        assert_eq!(output.status.code(), Some(code), "{name}");
        assert!(
            output.stderr.is_empty(),
            "{name}: nothing but data in a pipe"
        );
        let report: serde_json::Value = serde_json::from_slice(&output.stdout).unwrap();
        assert!(report["verdict"].as_str().unwrap().starts_with("VERDICT_"));
        assert!(report["findings"].as_array().unwrap().len() > 10);
    }
}

#[test]
fn without_a_service_the_usage_error_names_both_ways() {
    let output = run(&["list"]);
    assert_eq!(output.status.code(), Some(2));
    let message = String::from_utf8(output.stderr).unwrap();
    assert!(message.contains("--server URL") && message.contains("--local DIR"));
    assert!(output.stdout.is_empty());
    assert_eq!(run(&["fly"]).status.code(), Some(2));
}

#[test]
fn an_unreachable_server_is_unavailable_also_from_the_environment() {
    // Port 1 of this machine: nothing listens there.
    assert_eq!(
        run(&["list", "--server", "127.0.0.1:1"]).status.code(),
        Some(7)
    );
    let output = command(&["list"])
        .env("TAREHOUSE_SERVER", "http://127.0.0.1:1")
        .output()
        .unwrap();
    assert_eq!(output.status.code(), Some(7));
    let message = String::from_utf8(output.stderr).unwrap();
    assert!(message.contains("http://127.0.0.1:1") && message.contains("--local"));
}

#[test]
fn a_closed_pipe_ends_it_quietly() {
    let mut child = command(&["precheck", text(&demo_package("drosmelide-i"))])
        .stdout(Stdio::piped())
        .stderr(Stdio::piped())
        .spawn()
        .unwrap();
    drop(child.stdout.take());
    let status = child.wait().unwrap();
    assert_eq!(status.code(), Some(141));
    let mut message = String::new();
    child
        .stderr
        .take()
        .unwrap()
        .read_to_string(&mut message)
        .unwrap();
    assert_eq!(message, "");
}
