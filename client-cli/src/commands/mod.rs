//! The commands, one file each. A command asks, then renders; it judges nothing.

pub mod demo;
pub mod fetch;
pub mod list;
pub mod precheck;
pub mod rank;
pub mod report;
pub mod series;
pub mod submit;
pub mod watch;
pub mod withdraw;

use std::sync::{Arc, Mutex, PoisonError};

use crate::arguments::{Command, ConnectArgs};
use crate::connect::{Session, Target};
use crate::console::Console;
use crate::exit::Exit;
use crate::failure::Failure;
use crate::interrupt::Interrupt;
use crate::progress::Bars;
use crate::render;
use crate::retry::Pause;

/// What every command works with.
#[derive(Debug)]
pub struct Context<'a> {
    /// The two outputs.
    pub console: &'a mut Console,
    /// Address of the server as the environment names it.
    pub server_from_environment: Option<String>,
    /// How pauses pass.
    pub pause: Pause,
    /// Ctrl-C.
    pub interrupt: Interrupt,
}

impl Context<'_> {
    /// Bars on stderr, if it is a terminal.
    pub fn bars(&self) -> Bars {
        Bars::new(self.console.shows_progress())
    }

    /// Tells what went wrong on stderr.
    pub fn tell(&mut self, failure: &Failure) {
        let text = render::failure::to_text(failure, self.console.message_view());
        self.console.message(&text);
    }

    /// The service that the arguments or the environment name.
    ///
    /// # Errors
    /// [`Failure::Usage`] where neither does.
    pub fn target(&self, args: &ConnectArgs) -> Result<Target, Failure> {
        Target::choose(args, self.server_from_environment.as_deref())
    }

    /// As [`Context::target`], for commands that read: a store that is not there is not made.
    ///
    /// # Errors
    /// [`Failure::Usage`] where no service is named, [`Failure::NotFound`] where there is no store.
    pub fn existing_target(&self, args: &ConnectArgs) -> Result<Target, Failure> {
        let target = self.target(args)?;
        match &target {
            Target::Local(dir) if !dir.is_dir() => Err(Failure::NotFound {
                what: format!("there is no store in {}", dir.display()),
                next: "check the folder; `tarehouse submit PACKAGE --local DIR` makes a store."
                    .to_owned(),
            }),
            Target::Local(_) | Target::Server(_) => Ok(target),
        }
    }
}

/// What to tell somebody who stops the command: changes while it runs.
#[derive(Debug, Clone, Default)]
pub struct ResumeNote(Arc<Mutex<String>>);

impl ResumeNote {
    /// Replaces the note.
    pub fn set(&self, text: impl Into<String>) {
        *self.0.lock().unwrap_or_else(PoisonError::into_inner) = text.into();
    }

    /// The note as it stands.
    pub fn text(&self) -> String {
        self.0
            .lock()
            .unwrap_or_else(PoisonError::into_inner)
            .clone()
    }
}

/// Runs a command.
///
/// # Errors
/// Why it ended early.
pub async fn run(command: Command, context: &mut Context<'_>) -> Result<Exit, Failure> {
    match command {
        Command::Precheck(args) => precheck::run(args, context).await,
        Command::Submit(args) => submit::run(args, context).await,
        Command::Watch(args) => watch::run(args, context).await,
        Command::Withdraw(args) => withdraw::run(args, context).await,
        Command::Report(args) => report::run(args, context).await,
        Command::List(args) => list::run(args, context).await,
        Command::Fetch(args) => fetch::run(args, context).await,
        Command::Rank(args) => rank::run(args, context).await,
        Command::Series(args) => series::run(args, context).await,
        Command::VolumeSeries(args) => series::run_volumes(args, context).await,
        Command::Demo(args) => demo::run(args, context).await,
    }
}

/// Opens a session, does `work` in it until it is done or interrupted, and closes the session in every case.
///
/// # Errors
/// Those of the work; those of closing where the work went well.
pub async fn in_session<T>(
    target: Target,
    context: &mut Context<'_>,
    note: &ResumeNote,
    work: impl AsyncFnOnce(&Session, &mut Context<'_>) -> Result<T, Failure>,
) -> Result<T, Failure> {
    let interrupt = context.interrupt.clone();
    let is_local = matches!(target, Target::Local(_));
    let session = if is_local {
        // A store that is being opened cannot be let go half-way: another process would find it in use.
        Session::open(target).await?
    } else {
        tokio::select! {
            session = Session::open(target) => session?,
            () = interrupt.clone().raised() => return Err(interrupted(note)),
        }
    };
    let done = tokio::select! {
        biased;
        () = interrupt.raised() => Err(interrupted(note)),
        done = work(&session, context) => done,
    };
    if is_local && matches!(done, Err(Failure::Interrupted { .. })) {
        context
            .console
            .message("Stopping: the store is being closed. Ctrl-C again ends at once.");
    }
    let closed = session.close().await;
    let value = done?;
    closed?;
    Ok(value)
}

fn interrupted(note: &ResumeNote) -> Failure {
    Failure::Interrupted {
        resume: note.text(),
    }
}
