//! What a worker calls to judge a decoded package.

use tarehouse_assay::report::Report;
use tarehouse_assay::{ExamineError, Policy, Progress, Submission};
use tarehouse_physics::ForceConstants;

/// Judges decoded packages. Called on blocking threads, several at a time.
pub trait Examiner: Send + Sync + 'static {
    /// Examines one submission.
    ///
    /// # Errors
    /// Where nothing could be computed. A panic counts as a crashed attempt.
    fn examine(
        &self,
        submission: &Submission,
        policy: &Policy,
        progress: &dyn Progress,
    ) -> Result<Report, ExamineError>;

    /// The constants that frequencies are made from.
    fn projected_constants(&self, submission: &Submission, policy: &Policy) -> ForceConstants;
}

/// The examination of the house.
#[derive(Debug, Clone, Copy, Default)]
pub struct Assay;

impl Examiner for Assay {
    fn examine(
        &self,
        submission: &Submission,
        policy: &Policy,
        progress: &dyn Progress,
    ) -> Result<Report, ExamineError> {
        tarehouse_assay::examine(submission, policy, progress)
    }

    fn projected_constants(&self, submission: &Submission, policy: &Policy) -> ForceConstants {
        tarehouse_assay::projected_constants(submission, policy)
    }
}
