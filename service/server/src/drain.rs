//! The two steps of stopping: first no new work, then no work at all.

use tokio_util::sync::CancellationToken;

use crate::failure::Failure;

/// Tells every part of the service how far stopping has come. Clones share one state.
#[derive(Debug, Clone, Default)]
pub(crate) struct Drain {
    begun: CancellationToken,
    cut: CancellationToken,
}

impl Drain {
    /// Takes no new work from now on; watches end, running calls go on.
    pub(crate) fn begin(&self) {
        self.begun.cancel();
    }

    /// Ends running streams.
    pub(crate) fn cut(&self) {
        self.begun.cancel();
        self.cut.cancel();
    }

    /// Refuses new work once stopping has begun.
    pub(crate) fn admit(&self) -> Result<(), Failure> {
        if self.begun.is_cancelled() {
            return Err(Failure::draining());
        }
        Ok(())
    }

    /// Whether stopping has begun.
    pub(crate) fn has_begun(&self) -> bool {
        self.begun.is_cancelled()
    }

    /// Resolves when stopping begins.
    pub(crate) async fn until_begun(&self) {
        self.begun.cancelled().await;
    }

    /// Resolves when running streams must end.
    pub(crate) async fn until_cut(&self) {
        self.cut.cancelled().await;
    }
}
