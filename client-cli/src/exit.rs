//! Exit codes: what a script learns without reading a line.
//!
//! The numbers are part of the contract with scripts and never change. Of many outcomes the worst counts, in the order
//! of [`Exit::gravity`], which is not the order of the numbers: a verdict, however bad, is milder than no verdict.

use tarehouse_proto::v1::{State, Verdict};
use tonic::Code;

/// How a command ended.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub enum Exit {
    /// Accepted, or done.
    Done,
    /// A fault of the program or of the service.
    Internal,
    /// Wrong arguments, or a package that cannot be read.
    Usage,
    /// The verdict is reject.
    Rejected,
    /// The verdict is hold.
    Held,
    /// There is no such thing.
    NotFound,
    /// The caller may not do this.
    NotAllowed,
    /// The service cannot be reached, or takes no work now.
    Unavailable,
    /// The answer did not come in time.
    Deadline,
    /// The state of the thing forbids it.
    Conflict,
    /// The caller has used up a share.
    Quota,
    /// The reader of the output went away, as if ended by SIGPIPE.
    OutputClosed,
    /// Ctrl-C, as if ended by SIGINT.
    Interrupted,
}

impl Exit {
    /// All of them.
    pub const ALL: [Self; 13] = [
        Self::Done,
        Self::Internal,
        Self::Usage,
        Self::Rejected,
        Self::Held,
        Self::NotFound,
        Self::NotAllowed,
        Self::Unavailable,
        Self::Deadline,
        Self::Conflict,
        Self::Quota,
        Self::OutputClosed,
        Self::Interrupted,
    ];

    /// The number that the shell sees.
    pub fn code(self) -> u8 {
        match self {
            Self::Done => 0,
            Self::Internal => 1,
            Self::Usage => 2,
            Self::Rejected => 3,
            Self::Held => 4,
            Self::NotFound => 5,
            Self::NotAllowed => 6,
            Self::Unavailable => 7,
            Self::Deadline => 8,
            Self::Conflict => 9,
            Self::Quota => 10,
            Self::OutputClosed => 141,
            Self::Interrupted => 130,
        }
    }

    /// How bad it is among others, 0 = best: first verdicts, then what kept a package from getting one.
    pub fn gravity(self) -> u8 {
        match self {
            Self::Done => 0,
            Self::Held => 1,
            Self::Rejected => 2,
            Self::Usage => 3,
            Self::Conflict => 4,
            Self::NotFound => 5,
            Self::Quota => 6,
            Self::Deadline => 7,
            Self::Unavailable => 8,
            Self::NotAllowed => 9,
            Self::Internal => 10,
            Self::OutputClosed => 11,
            Self::Interrupted => 12,
        }
    }

    /// The worse of two.
    #[must_use]
    pub fn worse(self, other: Self) -> Self {
        if other.gravity() > self.gravity() {
            other
        } else {
            self
        }
    }

    /// The worst of many; [`Exit::Done`] of none.
    pub fn worst(all: impl IntoIterator<Item = Self>) -> Self {
        all.into_iter().fold(Self::Done, Self::worse)
    }

    /// What a verdict means for a script.
    pub fn from_verdict(verdict: Verdict) -> Self {
        match verdict {
            Verdict::Accept => Self::Done,
            Verdict::Hold => Self::Held,
            Verdict::Reject => Self::Rejected,
            Verdict::Unspecified => Self::Internal,
        }
    }

    /// What the state of a submission means for a script that wanted it accepted.
    ///
    /// A draft or queued submission has no verdict yet, which is no failure.
    pub fn from_state(state: State) -> Self {
        match state {
            State::Draft | State::Queued | State::Accepted | State::Retired => Self::Done,
            State::Held => Self::Held,
            State::Rejected | State::Returned => Self::Rejected,
            State::Withdrawn => Self::Conflict,
            State::Unspecified => Self::Internal,
        }
    }

    /// What an error of the service means for a script.
    pub fn from_grpc(code: Code) -> Self {
        match code {
            Code::InvalidArgument | Code::OutOfRange => Self::Usage,
            Code::NotFound => Self::NotFound,
            Code::PermissionDenied | Code::Unauthenticated => Self::NotAllowed,
            Code::Unavailable | Code::Cancelled => Self::Unavailable,
            Code::DeadlineExceeded => Self::Deadline,
            Code::Aborted | Code::AlreadyExists | Code::FailedPrecondition => Self::Conflict,
            Code::ResourceExhausted => Self::Quota,
            Code::Ok | Code::Unknown | Code::Unimplemented | Code::Internal | Code::DataLoss => {
                Self::Internal
            }
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_numbers_are_those_that_scripts_know() {
        // Source: the design's list of client exit codes; 130 and 141 as shells report SIGINT and SIGPIPE.
        let codes: Vec<u8> = Exit::ALL.iter().map(|exit| exit.code()).collect();
        assert_eq!(codes, [0, 1, 2, 3, 4, 5, 6, 7, 8, 9, 10, 141, 130]);
    }

    #[test]
    fn of_many_the_worst_counts_whatever_their_order() {
        assert_eq!(Exit::worst([]), Exit::Done);
        assert_eq!(Exit::worst([Exit::Held, Exit::Done]), Exit::Held);
        assert_eq!(Exit::worst([Exit::Held, Exit::Rejected]), Exit::Rejected);
        assert_eq!(Exit::worst([Exit::Usage, Exit::Rejected]), Exit::Usage);
        assert_eq!(Exit::worst([Exit::Internal, Exit::Quota]), Exit::Internal);
    }

    #[test]
    fn no_two_outcomes_weigh_the_same() {
        let mut gravities: Vec<u8> = Exit::ALL.iter().map(|exit| exit.gravity()).collect();
        gravities.sort_unstable();
        gravities.dedup();
        assert_eq!(gravities.len(), Exit::ALL.len());
    }

    #[test]
    fn a_verdict_and_the_state_that_follows_from_it_agree() {
        for (verdict, state) in [
            (Verdict::Accept, State::Accepted),
            (Verdict::Hold, State::Held),
            (Verdict::Reject, State::Rejected),
        ] {
            assert_eq!(Exit::from_verdict(verdict), Exit::from_state(state));
        }
    }
}
