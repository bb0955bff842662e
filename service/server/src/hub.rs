//! News of submissions: what the store says has changed and how far examinations are, for whoever watches.
//!
//! Invariants: news is a counter and the latest progress, never a queue, so that a slow watcher costs nothing and misses
//! nothing that still holds; an entry lives as long as somebody watches or an examination runs. Called from any thread.

use std::collections::HashMap;
use std::sync::{Arc, Mutex, MutexGuard, PoisonError};

use tarehouse_assay::Progress;
use tarehouse_store::SubmissionId;
use tokio::sync::watch;

/// How far an examination is.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(crate) struct Stage {
    /// What is being done.
    pub(crate) name: &'static str,
    /// Steps done.
    pub(crate) done: usize,
    /// Steps of the stage.
    pub(crate) total: usize,
    /// Which attempt, from 1.
    pub(crate) attempt: u32,
}

/// What is new about a submission.
#[derive(Debug, Clone, Copy, Default, PartialEq, Eq)]
pub(crate) struct News {
    /// Counts changes of the submission.
    pub(crate) changes: u64,
    /// Its running examination.
    pub(crate) stage: Option<Stage>,
}

type Boards = HashMap<SubmissionId, watch::Sender<News>>;

/// All boards on which news is written.
#[derive(Debug, Default)]
pub(crate) struct Hub {
    boards: Mutex<Boards>,
}

impl Hub {
    fn boards(&self) -> MutexGuard<'_, Boards> {
        // A panic between lock and unlock leaves a map that is still whole.
        self.boards.lock().unwrap_or_else(PoisonError::into_inner)
    }

    /// A view of the board of a submission, from now on.
    pub(crate) fn watch(&self, id: SubmissionId) -> watch::Receiver<News> {
        let mut boards = self.boards();
        boards.retain(|_, board| in_use(board));
        boards.entry(id).or_default().subscribe()
    }

    /// The submission has changed.
    pub(crate) fn changed(&self, id: SubmissionId) {
        if let Some(board) = self.boards().get(&id) {
            board.send_modify(|news| news.changes += 1);
        }
    }

    fn set_stage(&self, id: SubmissionId, stage: Option<Stage>) {
        let mut boards = self.boards();
        if stage.is_some() || boards.contains_key(&id) {
            boards
                .entry(id)
                .or_default()
                .send_modify(|news| news.stage = stage);
        }
        if stage.is_none() && boards.get(&id).is_some_and(|board| !in_use(board)) {
            boards.remove(&id);
        }
    }
}

fn in_use(board: &watch::Sender<News>) -> bool {
    board.receiver_count() > 0 || board.borrow().stage.is_some()
}

/// The progress of one attempt, written on its board; wiped when dropped.
#[derive(Debug)]
pub(crate) struct Reporter {
    hub: Arc<Hub>,
    id: SubmissionId,
    attempt: u32,
}

impl Reporter {
    /// Starts writing.
    pub(crate) fn new(hub: Arc<Hub>, id: SubmissionId, attempt: u32) -> Self {
        let reporter = Self { hub, id, attempt };
        reporter.advance("decode", 0, 1);
        reporter
    }
}

impl Progress for Reporter {
    fn advance(&self, stage: &'static str, done: usize, total: usize) {
        let attempt = self.attempt;
        let stage = Stage {
            name: stage,
            done,
            total,
            attempt,
        };
        self.hub.set_stage(self.id, Some(stage));
    }
}

impl Drop for Reporter {
    fn drop(&mut self) {
        self.hub.set_stage(self.id, None);
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_late_watcher_sees_the_stage_and_boards_go_when_nobody_needs_them() {
        let hub = Arc::new(Hub::default());
        let id = SubmissionId::from_bytes([7; 16]);
        let reporter = Reporter::new(Arc::clone(&hub), id, 2);
        reporter.advance("mesh", 3, 9);
        let board = hub.watch(id);
        let stage = board.borrow().stage.unwrap();
        assert_eq!(
            (stage.name, stage.done, stage.total, stage.attempt),
            ("mesh", 3, 9, 2)
        );
        drop(reporter);
        assert_eq!(board.borrow().stage, None);
        drop(board);
        drop(hub.watch(SubmissionId::from_bytes([8; 16])));
        assert!(!hub.boards().contains_key(&id));
    }

    #[test]
    fn changes_reach_every_watcher() {
        let hub = Hub::default();
        let id = SubmissionId::from_bytes([1; 16]);
        let boards: Vec<_> = (0..50).map(|_| hub.watch(id)).collect();
        hub.changed(id);
        hub.changed(SubmissionId::from_bytes([2; 16]));
        for board in boards {
            assert!(board.has_changed().unwrap());
            assert_eq!(board.borrow().changes, 1);
        }
    }
}
