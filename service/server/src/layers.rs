//! What every call passes through before it reaches a service: time limits, oversize answers, panics, the principal.
//!
//! These layers see the method path. A check of who calls belongs here, beside [`identify`], not in an interceptor.

use std::any::Any;
use std::future::Future;
use std::pin::Pin;
use std::task::{Context, Poll};
use std::time::Duration;

use http::{Request, Response};
use tonic::body::Body;
use tonic::{Code, Status};
use tower::{Layer, Service};

use crate::config::Config;
use crate::failure::{Failure, reason};

/// Who acts. Without access control everyone who reaches the service is `local`.
#[derive(Debug, Clone, PartialEq, Eq)]
pub(crate) struct Principal(pub(crate) String);

/// The principal where there is no access control.
const LOCAL: &str = "local";

impl Principal {
    /// Who makes this call.
    pub(crate) fn of<T>(request: &tonic::Request<T>) -> Self {
        request
            .extensions()
            .get::<Self>()
            .cloned()
            .unwrap_or_else(|| Self(LOCAL.to_owned()))
    }
}

/// Time limits by kind of method.
#[derive(Debug, Clone, Copy)]
pub(crate) struct Deadlines {
    read: Duration,
    write: Duration,
    seal: Duration,
}

impl Deadlines {
    /// The limits of a configuration.
    pub(crate) fn of(config: &Config) -> Self {
        Self {
            read: config.read_deadline,
            write: config.write_deadline,
            seal: config.seal_deadline,
        }
    }

    /// The limit of a method; none for those that stream and watch over their own idle time.
    fn of_method(self, path: &str) -> Option<Duration> {
        let method = path.strip_prefix("/tarehouse.v1.")?;
        match method {
            "SubmissionService/SealSubmission" => Some(self.seal),
            "SubmissionService/CreateSubmission" | "SubmissionService/WithdrawSubmission" => {
                Some(self.write)
            }
            "TransferService/SendArray"
            | "TransferService/FetchArray"
            | "SubmissionService/WatchSubmission" => None,
            _ => Some(self.read),
        }
    }
}

/// Layer that names the principal and keeps a method's time limit.
#[derive(Debug, Clone, Copy)]
pub(crate) struct Gate(pub(crate) Deadlines);

impl<S> Layer<S> for Gate {
    type Service = Gated<S>;

    fn layer(&self, inner: S) -> Gated<S> {
        Gated {
            inner,
            deadlines: self.0,
        }
    }
}

/// A service behind the [`Gate`].
#[derive(Debug, Clone)]
pub(crate) struct Gated<S> {
    inner: S,
    deadlines: Deadlines,
}

type Answer<E> = Pin<Box<dyn Future<Output = Result<Response<Body>, E>> + Send>>;

impl<S> Service<Request<Body>> for Gated<S>
where
    S: Service<Request<Body>, Response = Response<Body>> + Clone + Send + 'static,
    S::Future: Send + 'static,
{
    type Response = Response<Body>;
    type Error = S::Error;
    type Future = Answer<S::Error>;

    fn poll_ready(&mut self, context: &mut Context<'_>) -> Poll<Result<(), Self::Error>> {
        self.inner.poll_ready(context)
    }

    fn call(&mut self, mut request: Request<Body>) -> Self::Future {
        let limit = self.deadlines.of_method(request.uri().path());
        let principal = identify(&request);
        request.extensions_mut().insert(principal);
        let answer = self.inner.call(request);
        Box::pin(async move {
            let answer = match limit {
                None => answer.await,
                Some(limit) => match tokio::time::timeout(limit, answer).await {
                    Ok(answer) => answer,
                    Err(_) => return Ok(late(limit).into_http()),
                },
            };
            answer.map(without_oversize)
        })
    }
}

/// Who calls: there is no access control, so that everyone is the same.
fn identify(_request: &Request<Body>) -> Principal {
    Principal(LOCAL.to_owned())
}

fn late(limit: Duration) -> Status {
    Failure::Late {
        reason: reason::DEADLINE_EXCEEDED,
        message: format!("not finished within {} s", limit.as_secs_f64()),
    }
    .into()
}

/// The framework answers a message beyond the decode limit with OUT_OF_RANGE, a code this service has no other use for.
fn without_oversize(answer: Response<Body>) -> Response<Body> {
    let refused = answer
        .headers()
        .get("grpc-status")
        .map(|value| Code::from_bytes(value.as_bytes()));
    match refused {
        Some(Code::OutOfRange) => too_large().into_http(),
        _ => answer,
    }
}

/// The answer to a message that is longer than the service reads.
pub(crate) fn too_large() -> Status {
    Failure::invalid(
        reason::MESSAGE_TOO_LARGE,
        "a message is longer than the service reads; GetServerInfo tells the limits",
    )
    .into()
}

/// Turns what an upload stream failed with into an answer.
pub(crate) fn stream_failure(status: Status) -> Status {
    match status.code() {
        Code::OutOfRange => too_large(),
        _ => status,
    }
}

/// The answer where a handler panicked.
#[allow(
    clippy::needless_pass_by_value,
    reason = "the layer that catches panics hands the payload over"
)]
pub(crate) fn panicked(payload: Box<dyn Any + Send + 'static>) -> Response<Body> {
    Status::from(Failure::internal(panic_text(payload.as_ref()))).into_http()
}

/// The words of a panic.
pub(crate) fn panic_text(payload: &(dyn Any + Send)) -> String {
    payload
        .downcast_ref::<String>()
        .cloned()
        .or_else(|| {
            payload
                .downcast_ref::<&str>()
                .map(|text| (*text).to_owned())
        })
        .unwrap_or_else(|| "a panic without words".to_owned())
}

#[cfg(test)]
mod tests {
    use std::convert::Infallible;

    use tower::ServiceExt as _;
    use tower_http::catch_panic::CatchPanicLayer;

    use super::*;

    #[test]
    fn streams_have_no_time_limit_and_everything_else_has() {
        let config = Config::standard().unwrap();
        let deadlines = Deadlines::of(&config);
        let of = |method: &str| deadlines.of_method(&format!("/tarehouse.v1.{method}"));
        assert_eq!(of("TransferService/SendArray"), None);
        assert_eq!(of("SubmissionService/WatchSubmission"), None);
        assert_eq!(
            of("SubmissionService/SealSubmission"),
            Some(config.seal_deadline)
        );
        assert_eq!(of("CatalogService/RankForms"), Some(config.read_deadline));
        assert_eq!(deadlines.of_method("/grpc.health.v1.Health/Watch"), None);
    }

    fn short() -> Deadlines {
        let (brief, long) = (Duration::from_millis(20), Duration::from_mins(1));
        Deadlines {
            read: brief,
            write: long,
            seal: long,
        }
    }

    async fn call<F>(path: &str, handler: fn(Request<Body>) -> F) -> Response<impl Sized>
    where
        F: Future<Output = Result<Response<Body>, Infallible>> + Send + 'static,
    {
        let gated = Gate(short()).layer(tower::service_fn(handler));
        let caught = CatchPanicLayer::custom(panicked).layer(gated);
        let request = Request::builder().uri(path).body(Body::empty()).unwrap();
        caught.oneshot(request).await.unwrap()
    }

    fn code<B>(answer: &Response<B>) -> Option<Code> {
        answer
            .headers()
            .get("grpc-status")
            .map(|value| Code::from_bytes(value.as_bytes()))
    }

    #[tokio::test]
    async fn a_method_out_of_time_is_answered_and_a_stream_is_not_timed() {
        let never = |_| std::future::pending();
        let answer = call("/tarehouse.v1.CatalogService/GetRecord", never).await;
        assert_eq!(code(&answer), Some(Code::DeadlineExceeded));
        let watch = call("/tarehouse.v1.SubmissionService/WatchSubmission", never);
        assert!(tokio::time::timeout(4 * short().read, watch).await.is_err());
    }

    #[tokio::test]
    async fn a_panic_is_answered_with_internal_and_without_its_words() {
        let answer = call("/tarehouse.v1.CatalogService/GetRecord", |_| async {
            panic!("the secret {}", 7)
        })
        .await;
        assert_eq!(code(&answer), Some(Code::Internal));
        let words = answer
            .headers()
            .get("grpc-message")
            .unwrap()
            .to_str()
            .unwrap();
        assert!(!words.contains("secret"), "{words}");
    }

    #[tokio::test]
    async fn the_principal_is_named_and_oversize_is_an_invalid_argument() {
        let answer = call(
            "/tarehouse.v1.CatalogService/GetRecord",
            |request| async move {
                assert_eq!(
                    request.extensions().get(),
                    Some(&Principal("local".to_owned()))
                );
                Ok(Status::out_of_range("decoded message length too large").into_http())
            },
        )
        .await;
        assert_eq!(code(&answer), Some(Code::InvalidArgument));
    }
}
