//! States of a submission and the moves between them. Pure: what may happen, not who may do it.

use std::fmt;

use tarehouse_assay::report::Verdict;

/// Where a submission stands.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub enum State {
    /// Arrays are still being sent.
    Draft,
    /// Complete, waiting for or under examination.
    Queued,
    /// In the catalogue.
    Accepted,
    /// Waits for a curator.
    Held,
    /// Turned down.
    Rejected,
    /// Given back to the contributor by a curator.
    Returned,
    /// Taken back by the contributor.
    Withdrawn,
    /// Was in the catalogue; taken out by a curator or superseded.
    Retired,
}

/// What can be done to a submission.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Verb {
    /// The contributor says that everything is there.
    Seal,
    /// An examination ended with a verdict.
    Conclude(Verdict),
    /// An examination crashed; the last attempt of those allowed or not.
    Crash {
        /// No attempt is left.
        last: bool,
    },
    /// The contributor takes it back.
    Withdraw,
    /// A curator or a newer submission takes it out of the catalogue.
    Retire,
}

/// A move that the state does not allow.
#[derive(Debug, Clone, Copy, PartialEq, Eq, thiserror::Error)]
#[error("a submission that is {from} cannot be {verb}")]
pub struct ForbiddenTransition {
    /// State it is in.
    pub from: State,
    /// What was asked.
    pub verb: Verb,
}

impl State {
    /// All states, in the order of their codes.
    pub const ALL: &'static [Self] = &[
        Self::Draft,
        Self::Queued,
        Self::Accepted,
        Self::Held,
        Self::Rejected,
        Self::Returned,
        Self::Withdrawn,
        Self::Retired,
    ];

    /// State after a verb.
    ///
    /// # Errors
    /// [`ForbiddenTransition`].
    pub fn after(self, verb: Verb) -> Result<Self, ForbiddenTransition> {
        match (self, verb) {
            (Self::Draft, Verb::Seal) | (Self::Queued, Verb::Crash { last: false }) => {
                Ok(Self::Queued)
            }
            (Self::Queued, Verb::Conclude(Verdict::Accept)) => Ok(Self::Accepted),
            (Self::Queued, Verb::Conclude(Verdict::Hold) | Verb::Crash { last: true }) => {
                Ok(Self::Held)
            }
            (Self::Queued, Verb::Conclude(Verdict::Reject)) => Ok(Self::Rejected),
            (
                Self::Draft | Self::Queued | Self::Held | Self::Rejected | Self::Returned,
                Verb::Withdraw,
            ) => Ok(Self::Withdrawn),
            (Self::Accepted, Verb::Retire) => Ok(Self::Retired),
            (from, verb) => Err(ForbiddenTransition { from, verb }),
        }
    }

    /// Whether a watch ends here.
    pub fn is_final(self) -> bool {
        !matches!(self, Self::Draft | Self::Queued)
    }

    /// Number stored on disk; only ever appended to.
    pub(crate) fn code(self) -> u8 {
        match self {
            Self::Draft => 1,
            Self::Queued => 2,
            Self::Accepted => 3,
            Self::Held => 4,
            Self::Rejected => 5,
            Self::Returned => 6,
            Self::Withdrawn => 7,
            Self::Retired => 8,
        }
    }

    /// State of a stored number.
    pub(crate) fn from_code(code: u32) -> Option<Self> {
        Self::ALL
            .iter()
            .copied()
            .find(|state| u32::from(state.code()) == code)
    }
}

impl fmt::Display for State {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(match self {
            Self::Draft => "draft",
            Self::Queued => "queued",
            Self::Accepted => "accepted",
            Self::Held => "held",
            Self::Rejected => "rejected",
            Self::Returned => "returned",
            Self::Withdrawn => "withdrawn",
            Self::Retired => "retired",
        })
    }
}

impl fmt::Display for Verb {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(match self {
            Self::Seal => "sealed",
            Self::Conclude(_) => "judged",
            Self::Crash { .. } => "put back after a crash",
            Self::Withdraw => "withdrawn",
            Self::Retire => "retired",
        })
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    const VERBS: [Verb; 8] = [
        Verb::Seal,
        Verb::Conclude(Verdict::Accept),
        Verb::Conclude(Verdict::Hold),
        Verb::Conclude(Verdict::Reject),
        Verb::Crash { last: false },
        Verb::Crash { last: true },
        Verb::Withdraw,
        Verb::Retire,
    ];

    #[test]
    fn the_whole_table_is_as_written() {
        use State::{Accepted, Draft, Held, Queued, Rejected, Retired, Returned, Withdrawn};
        let allowed = [
            (
                Draft,
                vec![
                    Some(Queued),
                    None,
                    None,
                    None,
                    None,
                    None,
                    Some(Withdrawn),
                    None,
                ],
            ),
            (
                Queued,
                vec![
                    None,
                    Some(Accepted),
                    Some(Held),
                    Some(Rejected),
                    Some(Queued),
                    Some(Held),
                    Some(Withdrawn),
                    None,
                ],
            ),
            (
                Accepted,
                vec![None, None, None, None, None, None, None, Some(Retired)],
            ),
            (
                Held,
                vec![None, None, None, None, None, None, Some(Withdrawn), None],
            ),
            (
                Rejected,
                vec![None, None, None, None, None, None, Some(Withdrawn), None],
            ),
            (
                Returned,
                vec![None, None, None, None, None, None, Some(Withdrawn), None],
            ),
            (Withdrawn, vec![None; 8]),
            (Retired, vec![None; 8]),
        ];
        assert_eq!(allowed.len(), State::ALL.len());
        for (from, row) in allowed {
            for (verb, expected) in VERBS.into_iter().zip(row) {
                let found = from.after(verb);
                match expected {
                    Some(to) => assert_eq!(found, Ok(to), "{from} {verb:?}"),
                    None => assert_eq!(found, Err(ForbiddenTransition { from, verb })),
                }
            }
        }
    }

    #[test]
    fn codes_are_distinct_and_read_back() {
        for (index, state) in State::ALL.iter().enumerate() {
            assert_eq!(usize::from(state.code()), index + 1);
            assert_eq!(State::from_code(u32::from(state.code())), Some(*state));
        }
        assert_eq!(State::from_code(0), None);
        assert_eq!(State::from_code(9), None);
    }
}
