//! Trying again: how often, how long, and for which errors.
//!
//! An error that says when to come back (RetryInfo) is a queue, and is waited for; one that does not is a broken
//! connection, and is given up after a few attempts. Every other error is final.

use std::future::Future;
use std::sync::{Arc, Mutex, PoisonError};
use std::time::Duration;

use tonic::{Code, Status};
use tonic_types::StatusExt as _;

use crate::failure::is_transport;

/// Attempts after errors that do not say when to come back; anything that succeeds in between starts the count anew.
const BLIND_ATTEMPTS_MAX: u32 = 6;
/// First pause without advice; it doubles.
const BLIND_PAUSE: Duration = Duration::from_millis(200);
/// Longest pause without advice.
const BLIND_PAUSE_MAX: Duration = Duration::from_secs(10);
/// Shortest and longest pause taken from advice.
const ADVICE_MIN: Duration = Duration::from_millis(50);
/// Longest pause taken from advice.
const ADVICE_MAX: Duration = Duration::from_mins(1);
/// How long advice is followed in all.
const ADVICE_PATIENCE: Duration = Duration::from_hours(1);

/// How pauses pass.
#[derive(Debug, Clone, Default)]
pub enum Pause {
    /// On the clock.
    #[default]
    Clock,
    /// Not at all; their lengths are noted. For tests.
    Noted(Arc<Mutex<Vec<Duration>>>),
}

impl Pause {
    async fn pass(&self, length: Duration) {
        match self {
            Self::Clock => tokio::time::sleep(length).await,
            Self::Noted(lengths) => {
                lengths
                    .lock()
                    .unwrap_or_else(PoisonError::into_inner)
                    .push(length);
                tokio::task::yield_now().await;
            }
        }
    }
}

/// Counts attempts at one thing.
#[derive(Debug, Clone)]
pub struct Retry {
    pause: Pause,
    blind_attempts: u32,
    advised: Duration,
}

impl Retry {
    /// A fresh count.
    pub fn new(pause: Pause) -> Self {
        Self {
            pause,
            blind_attempts: 0,
            advised: Duration::ZERO,
        }
    }

    /// Something went well: broken connections are counted anew.
    pub fn progressed(&mut self) {
        self.blind_attempts = 0;
    }

    /// Waits as the error asks.
    ///
    /// # Errors
    /// The error itself, where trying again is of no use.
    pub async fn wait_after(&mut self, status: Status) -> Result<(), Status> {
        match self.pause_after(&status) {
            Some(length) => {
                self.pause.pass(length).await;
                Ok(())
            }
            None => Err(status),
        }
    }

    /// How long to wait after this error; nothing where it is final.
    fn pause_after(&mut self, status: &Status) -> Option<Duration> {
        if !is_worth_retrying(status) {
            return None;
        }
        let advice = status
            .get_error_details()
            .retry_info()
            .and_then(|info| info.retry_delay);
        if let Some(advice) = advice {
            let length = advice.clamp(ADVICE_MIN, ADVICE_MAX);
            self.advised += length;
            return (self.advised <= ADVICE_PATIENCE).then_some(length);
        }
        self.blind_attempts += 1;
        let doublings = self.blind_attempts - 1;
        (self.blind_attempts < BLIND_ATTEMPTS_MAX)
            .then(|| (BLIND_PAUSE * 2_u32.saturating_pow(doublings)).min(BLIND_PAUSE_MAX))
    }
}

/// Whether the same request may succeed later without anybody changing it.
pub fn is_worth_retrying(status: &Status) -> bool {
    match status.code() {
        Code::Unavailable => true,
        Code::Unknown | Code::Internal | Code::Cancelled => is_transport(status),
        Code::Ok
        | Code::InvalidArgument
        | Code::DeadlineExceeded
        | Code::NotFound
        | Code::AlreadyExists
        | Code::PermissionDenied
        | Code::ResourceExhausted
        | Code::FailedPrecondition
        | Code::Aborted
        | Code::OutOfRange
        | Code::Unimplemented
        | Code::DataLoss
        | Code::Unauthenticated => false,
    }
}

/// Calls until it succeeds or fails for good.
///
/// # Errors
/// The last error.
pub async fn retrying<T, F, Fut>(pause: &Pause, mut call: F) -> Result<T, Status>
where
    F: FnMut() -> Fut,
    Fut: Future<Output = Result<T, Status>>,
{
    let mut retry = Retry::new(pause.clone());
    loop {
        match call().await {
            Ok(answer) => return Ok(answer),
            Err(status) => retry.wait_after(status).await?,
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use tonic_types::ErrorDetails;

    fn noted() -> (Pause, Arc<Mutex<Vec<Duration>>>) {
        let lengths = Arc::new(Mutex::new(Vec::new()));
        (Pause::Noted(Arc::clone(&lengths)), lengths)
    }

    #[tokio::test]
    async fn a_broken_connection_is_tried_a_few_times_with_growing_pauses() {
        let (pause, lengths) = noted();
        let mut calls = 0;
        let answer = retrying(&pause, || {
            calls += 1;
            async { Err::<(), _>(Status::unavailable("gone")) }
        })
        .await;
        assert_eq!(answer.unwrap_err().code(), Code::Unavailable);
        assert_eq!(calls, BLIND_ATTEMPTS_MAX);
        let lengths = lengths.lock().unwrap();
        assert!(lengths.windows(2).all(|pair| pair[1] == 2 * pair[0]));
    }

    #[tokio::test]
    async fn advice_is_followed_far_longer_than_blind_attempts() {
        let (pause, lengths) = noted();
        let mut calls = 0;
        let answer = retrying(&pause, || {
            calls += 1;
            let answer = if calls <= 50 {
                let details = ErrorDetails::with_retry_info(Some(Duration::from_secs(3)));
                Err(Status::with_error_details(
                    Code::Unavailable,
                    "full",
                    details,
                ))
            } else {
                Ok(calls)
            };
            async { answer }
        })
        .await;
        assert_eq!(answer.unwrap(), 51);
        assert_eq!(*lengths.lock().unwrap(), vec![Duration::from_secs(3); 50]);
    }

    #[tokio::test]
    async fn a_final_error_is_not_tried_again() {
        let (pause, lengths) = noted();
        for code in [
            Code::InvalidArgument,
            Code::ResourceExhausted,
            Code::Internal,
        ] {
            let answer = retrying(&pause, || async { Err::<(), _>(Status::new(code, "no")) }).await;
            assert_eq!(answer.unwrap_err().code(), code);
        }
        assert!(lengths.lock().unwrap().is_empty());
    }
}
