//! Where output goes: data to stdout, progress and errors to stderr, both behind writers.
//!
//! Nothing else in this crate knows whether it writes to a terminal.

use std::io::{self, IsTerminal as _, Write};

use crate::render::text::{View, WIDTH_DEFAULT, WIDTH_MAX, WIDTH_MIN};

/// How data is written.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, clap::ValueEnum)]
pub enum Format {
    /// Tables on a terminal, JSON elsewhere.
    #[default]
    Auto,
    /// Tables.
    Table,
    /// JSON with the field names of the contract.
    Json,
}

/// Facts about the two outputs.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Traits {
    /// Stdout is a terminal.
    pub out_is_terminal: bool,
    /// Stderr is a terminal.
    pub err_is_terminal: bool,
    /// Columns, where known.
    pub width: Option<usize>,
    /// `NO_COLOR` is set and not empty (<https://no-color.org>), or the terminal is dumb.
    pub no_colour: bool,
}

impl Traits {
    /// Asks the system.
    pub fn detect() -> Self {
        let is_set = |name| std::env::var_os(name).is_some_and(|value| !value.is_empty());
        Self {
            out_is_terminal: io::stdout().is_terminal(),
            err_is_terminal: io::stderr().is_terminal(),
            width: terminal_size::terminal_size().map(|(width, _)| usize::from(width.0)),
            no_colour: is_set("NO_COLOR")
                || std::env::var_os("TERM").is_some_and(|term| term == "dumb"),
        }
    }

    /// Traits of two pipes.
    pub fn pipes() -> Self {
        Self {
            out_is_terminal: false,
            err_is_terminal: false,
            width: None,
            no_colour: true,
        }
    }
}

/// The two outputs.
pub struct Console {
    out: Box<dyn Write + Send>,
    err: Box<dyn Write + Send>,
    traits: Traits,
}

impl std::fmt::Debug for Console {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        f.debug_struct("Console")
            .field("traits", &self.traits)
            .finish_non_exhaustive()
    }
}

impl Console {
    /// A console over any writers.
    pub fn new(out: Box<dyn Write + Send>, err: Box<dyn Write + Send>, traits: Traits) -> Self {
        Self { out, err, traits }
    }

    /// The console of this process.
    pub fn of_process() -> Self {
        Self::new(
            Box::new(io::stdout()),
            Box::new(io::stderr()),
            Traits::detect(),
        )
    }

    /// Whether progress may be shown.
    pub fn shows_progress(&self) -> bool {
        self.traits.err_is_terminal
    }

    /// How data is laid out.
    pub fn view(&self) -> View {
        self.view_of(self.traits.out_is_terminal)
    }

    /// How messages on stderr are laid out.
    pub fn message_view(&self) -> View {
        self.view_of(self.traits.err_is_terminal)
    }

    fn view_of(&self, is_terminal: bool) -> View {
        let width = self
            .traits
            .width
            .filter(|_| is_terminal)
            .unwrap_or(WIDTH_DEFAULT);
        View {
            width: width.clamp(WIDTH_MIN, WIDTH_MAX),
            colour: is_terminal && !self.traits.no_colour,
        }
    }

    /// Whether `format` means JSON here.
    pub fn wants_json(&self, format: Format) -> bool {
        match format {
            Format::Json => true,
            Format::Table => false,
            Format::Auto => !self.traits.out_is_terminal,
        }
    }

    /// Writes data.
    ///
    /// # Errors
    /// What the writer says; a closed pipe ends the program quietly.
    pub fn data(&mut self, text: &str) -> io::Result<()> {
        self.out.write_all(text.as_bytes())?;
        if !text.ends_with('\n') {
            self.out.write_all(b"\n")?;
        }
        self.out.flush()
    }

    /// Writes a message for people to stderr. That it cannot be written is no reason to stop.
    pub fn message(&mut self, text: &str) {
        let end = if text.ends_with('\n') { "" } else { "\n" };
        let written = self
            .err
            .write_all(text.as_bytes())
            .and_then(|()| self.err.write_all(end.as_bytes()))
            .and_then(|()| self.err.flush());
        drop(written);
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn console(traits: Traits) -> Console {
        Console::new(Box::new(io::sink()), Box::new(io::sink()), traits)
    }

    #[test]
    fn tables_on_a_terminal_and_json_elsewhere() {
        let pipe = console(Traits::pipes());
        let terminal = console(Traits {
            out_is_terminal: true,
            ..Traits::pipes()
        });
        assert!(pipe.wants_json(Format::Auto));
        assert!(!terminal.wants_json(Format::Auto));
        assert!(terminal.wants_json(Format::Json));
        assert!(!pipe.wants_json(Format::Table));
    }

    #[test]
    fn colour_needs_a_terminal_and_no_objection() {
        let mut traits = Traits {
            out_is_terminal: true,
            err_is_terminal: false,
            width: Some(60),
            no_colour: false,
        };
        assert!(console(traits).view().colour);
        assert_eq!(console(traits).view().width, 60);
        assert!(!console(traits).message_view().colour);
        assert_eq!(console(traits).message_view().width, WIDTH_DEFAULT);
        traits.no_colour = true;
        assert!(!console(traits).view().colour);
        traits.width = Some(5);
        assert_eq!(console(traits).view().width, WIDTH_MIN);
    }
}
