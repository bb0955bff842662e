//! Progress on stderr, only where stderr is a terminal; elsewhere nothing at all.

use std::time::Duration;

use indicatif::{MultiProgress, ProgressBar, ProgressDrawTarget, ProgressStyle};

use crate::render::text::clean;

/// How often a bar with an open end moves.
const TICK: Duration = Duration::from_millis(150);

/// All bars of a command.
#[derive(Debug, Clone)]
pub struct Bars {
    all: MultiProgress,
    is_shown: bool,
}

impl Bars {
    /// Bars that are shown, or not.
    pub fn new(is_shown: bool) -> Self {
        let target = if is_shown {
            ProgressDrawTarget::stderr_with_hz(10)
        } else {
            ProgressDrawTarget::hidden()
        };
        Self {
            all: MultiProgress::with_draw_target(target),
            is_shown,
        }
    }

    /// A bar for bytes on their way.
    pub fn bytes(&self, label: &str, total: u64) -> Bar {
        self.add(
            ProgressBar::new(total),
            "{prefix:24!} {wide_bar} {binary_bytes:>11} of {binary_total_bytes:<11}",
            label,
        )
    }

    /// A bar for steps of an examination, whose number comes later.
    pub fn steps(&self, label: &str) -> Bar {
        let bar = self.add(
            ProgressBar::new(0),
            "{prefix:24!} {wide_bar} {msg:>30}",
            label,
        );
        if self.is_shown {
            bar.0.enable_steady_tick(TICK);
        }
        bar
    }

    fn add(&self, bar: ProgressBar, template: &str, label: &str) -> Bar {
        if let Ok(style) = ProgressStyle::with_template(template) {
            bar.set_style(style.progress_chars("━╸ "));
        }
        bar.set_prefix(clean(label).into_owned());
        Bar(self.all.add(bar))
    }
}

/// One bar; it vanishes when it is dropped.
#[derive(Debug)]
pub struct Bar(ProgressBar);

impl Bar {
    /// Moves to a place.
    pub fn set(&self, done: u64) {
        self.0.set_position(done);
    }

    /// Shows a stage with its steps; 0 = their number is not known.
    pub fn stage(&self, stage: &str, done: u64, total: u64) {
        self.0.set_length(total.max(1));
        self.0.set_position(done);
        self.0.set_message(clean(stage).into_owned());
    }

    /// A handle that moves the same bar from elsewhere.
    pub fn handle(&self) -> Handle {
        Handle(self.0.clone())
    }
}

impl Drop for Bar {
    fn drop(&mut self) {
        self.0.finish_and_clear();
    }
}

/// Moves a bar that somebody else owns.
#[derive(Debug, Clone)]
pub struct Handle(ProgressBar);

impl Handle {
    /// Moves to a place.
    pub fn set(&self, done: u64) {
        self.0.set_position(done);
    }

    /// Moves to a place among so many.
    pub fn set_of(&self, done: u64, total: u64) {
        self.0.set_length(total);
        self.0.set_position(done);
    }
}

impl tarehouse_assay::Progress for Handle {
    fn advance(&self, stage: &'static str, done: usize, total: usize) {
        self.0.set_length(total.max(1) as u64);
        self.0.set_position(done as u64);
        self.0.set_message(stage);
    }
}
