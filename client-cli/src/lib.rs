//! The `tarehouse` command: reads packages from disk, examines them here or sends them, and shows what came of it.
//!
//! Invariants: data goes to stdout, everything else to stderr, both through [`console::Console`]; the exit code says how
//! it ended; nothing invalid is ever sent; what the service or a package says is cleaned before a terminal shows it.
//! This crate judges nothing: verdicts come from `assay`, here or in the service.

pub mod arguments;
pub mod commands;
pub mod connect;
pub mod console;
pub mod exit;
pub mod failure;
pub mod interrupt;
pub mod package_folder;
pub mod progress;
pub mod render;
pub mod retry;
pub mod upload;
pub mod waiting;
pub mod wire_json;

use arguments::{Arguments, SERVER_VARIABLE};
use commands::Context;
use console::Console;
use exit::Exit;
use interrupt::Interrupt;
use retry::Pause;

/// Runs a command to its end and tells what went wrong on stderr.
pub async fn run(arguments: Arguments, console: &mut Console, interrupt: Interrupt) -> Exit {
    let mut context = Context {
        server_from_environment: std::env::var(SERVER_VARIABLE).ok(),
        pause: Pause::Clock,
        interrupt,
        console,
    };
    run_in(arguments, &mut context).await
}

/// As [`run`], in a given context.
pub async fn run_in(arguments: Arguments, context: &mut Context<'_>) -> Exit {
    match commands::run(arguments.command, context).await {
        Ok(exit) => exit,
        Err(failure) => {
            if !failure.is_quiet() {
                context.tell(&failure);
            }
            failure.exit()
        }
    }
}
