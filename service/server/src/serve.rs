//! Running the service: on a listener, or inside another process over memory.
//!
//! Both ways run the same services behind the same layers and stop in the same order: health says NOT_SERVING, no new
//! work is taken, no connection is accepted, watches end, running calls and examinations have the grace time, then
//! streams are cut, and the store is closed.

use std::future::Future;
use std::path::Path;
use std::sync::Arc;
use std::time::Duration;

use http::header::{AUTHORIZATION, COOKIE, HeaderName};
use hyper_util::rt::TokioIo;
use tokio::io::{AsyncRead, AsyncWrite, DuplexStream};
use tokio::net::TcpListener;
use tokio::sync::mpsc;
use tokio::task::JoinHandle;
use tokio::time::{Instant, timeout, timeout_at};
use tokio_stream::Stream;
use tokio_stream::StreamExt as _;
use tokio_stream::wrappers::ReceiverStream;
use tokio_util::sync::CancellationToken;
use tonic::service::Routes;
use tonic::transport::server::{Connected, TcpIncoming};
use tonic::transport::{Channel, Endpoint, Server};
use tonic_health::ServingStatus;
use tonic_health::server::HealthReporter;
use tower_http::catch_panic::CatchPanicLayer;
use tower_http::request_id::{MakeRequestUuid, PropagateRequestIdLayer, SetRequestIdLayer};
use tower_http::sensitive_headers::SetSensitiveHeadersLayer;
use tower_http::trace::TraceLayer;

use crate::config::Config;
use crate::core::{Core, OpenError};
use crate::examiner::{Assay, Examiner};
use crate::layers::{Deadlines, Gate, panicked};
use crate::services;

/// Pause between two pings of a silent connection.
const KEEPALIVE_INTERVAL: Duration = Duration::from_secs(30);
/// How long a ping may stay unanswered.
const KEEPALIVE_TIMEOUT: Duration = Duration::from_secs(10);
/// Calls open on one connection at the same time.
const STREAMS_PER_CONNECTION_MAX: u32 = 256;
/// What cut streams may take to end.
const CUT_TIME: Duration = Duration::from_secs(1);
/// Bytes on their way in one direction of a connection inside the process.
const DUPLEX_BYTES: usize = 256 * 1024;
/// Connections inside the process that wait to be taken.
const DUPLEX_BACKLOG: usize = 16;

/// Why the service could not run.
#[derive(Debug, thiserror::Error)]
pub enum ServeError {
    /// The listener failed.
    #[error("the address cannot be used")]
    Listen(#[from] std::io::Error),
    /// The store cannot be opened.
    #[error("the store cannot be opened")]
    Open(#[from] OpenError),
    /// The contract's own description cannot be read.
    #[error("the description of the contract cannot be read")]
    Reflection(#[from] tonic_reflection::server::Error),
    /// The transport failed.
    #[error("the transport failed")]
    Transport(#[from] tonic::transport::Error),
    /// A sync failed: whether the last changes are durable is not known, and the process must end.
    #[error("the store takes no more changes because a sync failed")]
    Broken,
    /// The task that serves has ended without an answer.
    #[error("the serving task failed")]
    Task(#[from] tokio::task::JoinError),
}

/// Serves on `listener` until `shutdown` resolves, then drains.
///
/// # Errors
/// [`ServeError`].
pub async fn run(
    listener: TcpListener,
    config: Config,
    shutdown: impl Future<Output = ()> + Send + 'static,
) -> Result<(), ServeError> {
    run_with(listener, config, Arc::new(Assay), shutdown).await
}

/// As [`run`], with another examiner.
///
/// # Errors
/// [`ServeError`].
pub async fn run_with(
    listener: TcpListener,
    config: Config,
    examiner: Arc<dyn Examiner>,
    shutdown: impl Future<Output = ()> + Send + 'static,
) -> Result<(), ServeError> {
    let address = listener.local_addr()?;
    let core = Core::open(config, examiner).await?;
    tracing::info!(%address, "listening");
    let incoming = TcpIncoming::from(listener).with_nodelay(Some(true));
    serve_on(incoming, core, shutdown).await
}

/// Serves the store in `store_dir` inside this process; the channel reaches it over memory.
///
/// Connections are made as they are needed; the service runs until [`LocalService::shutdown`].
///
/// # Errors
/// [`ServeError`] where the store cannot be opened.
pub async fn in_process(
    store_dir: &Path,
    config: Config,
) -> Result<(Channel, LocalService), ServeError> {
    in_process_with(store_dir, config, Arc::new(Assay)).await
}

/// As [`in_process`], with another examiner.
///
/// # Errors
/// [`ServeError`] where the store cannot be opened.
pub async fn in_process_with(
    store_dir: &Path,
    mut config: Config,
    examiner: Arc<dyn Examiner>,
) -> Result<(Channel, LocalService), ServeError> {
    config.store = store_dir.to_owned();
    let core = Core::open(config, examiner).await?;
    let (dial, dialled) = mpsc::channel::<DuplexStream>(DUPLEX_BACKLOG);
    let incoming = ReceiverStream::new(dialled).map(Ok::<_, std::io::Error>);
    let stop = CancellationToken::new();
    let stopped = stop.clone();
    let task = tokio::spawn(serve_on(incoming, core, async move {
        stopped.cancelled().await;
    }));
    let connector = tower::service_fn(move |_: http::Uri| {
        let dial = dial.clone();
        async move {
            let (near, far) = tokio::io::duplex(DUPLEX_BYTES);
            dial.send(far)
                .await
                .map_err(|_| std::io::Error::other("the service in this process has stopped"))?;
            Ok::<_, std::io::Error>(TokioIo::new(near))
        }
    });
    let channel = Endpoint::from_static("http://in-process").connect_with_connector_lazy(connector);
    Ok((channel, LocalService { stop, task }))
}

/// A service that runs inside this process.
#[derive(Debug)]
pub struct LocalService {
    stop: CancellationToken,
    task: JoinHandle<Result<(), ServeError>>,
}

impl LocalService {
    /// Drains and stops the service; returns when the store is closed.
    ///
    /// # Errors
    /// What the service failed with.
    pub async fn shutdown(self) -> Result<(), ServeError> {
        self.stop.cancel();
        self.task.await?
    }
}

async fn serve_on<I, IO, IE>(
    incoming: I,
    core: Arc<Core>,
    shutdown: impl Future<Output = ()> + Send + 'static,
) -> Result<(), ServeError>
where
    I: Stream<Item = Result<IO, IE>> + Send + 'static,
    IO: AsyncRead + AsyncWrite + Connected + Unpin + Send + 'static,
    IE: Into<Box<dyn std::error::Error + Send + Sync>> + Send,
{
    let (health, routes) = routes(&core).await?;
    let closing = CancellationToken::new();
    let workers = core.start_workers();
    let server = transport(Arc::clone(&core), routes, incoming, closing.clone());
    let mut server = std::pin::pin!(server);
    let stopping = async {
        tokio::select! {
            () = shutdown => {}
            () = core.depot.until_broken() => tracing::error!("the store takes no more writes: stopping"),
        }
    };
    let early = tokio::select! {
        ended = &mut server => Some(ended),
        () = stopping => None,
    };
    stop_taking_work(&core, health).await;
    closing.cancel();
    let deadline = Instant::now() + core.config.grace;
    let ended = match early {
        Some(ended) => ended,
        None => ended_in_time(&core, &mut server, deadline).await,
    };
    core.drain.cut();
    if timeout_at(deadline, workers).await.is_err() {
        tracing::warn!(
            "an examination outlived the grace time: it is done again after the next start"
        );
    }
    core.close().await;
    ended?;
    if core.depot.is_broken() {
        return Err(ServeError::Broken);
    }
    Ok(())
}

/// Waits for running calls until `deadline`, then cuts their streams.
async fn ended_in_time(
    core: &Core,
    server: &mut (impl Future<Output = Result<(), tonic::transport::Error>> + Unpin),
    deadline: Instant,
) -> Result<(), tonic::transport::Error> {
    if let Ok(ended) = timeout_at(deadline, &mut *server).await {
        return ended;
    }
    tracing::warn!("calls outlived the grace time: cutting them");
    core.drain.cut();
    timeout(CUT_TIME, server).await.unwrap_or(Ok(()))
}

/// The transport with the layers of every call, outermost first; it stops accepting when `closing` is cancelled.
async fn transport<I, IO, IE>(
    core: Arc<Core>,
    routes: Routes,
    incoming: I,
    closing: CancellationToken,
) -> Result<(), tonic::transport::Error>
where
    I: Stream<Item = Result<IO, IE>> + Send + 'static,
    IO: AsyncRead + AsyncWrite + Connected + Unpin + Send + 'static,
    IE: Into<Box<dyn std::error::Error + Send + Sync>> + Send,
{
    let secret = [AUTHORIZATION, COOKIE, HeaderName::from_static("x-api-key")];
    Server::builder()
        .max_concurrent_streams(STREAMS_PER_CONNECTION_MAX)
        .http2_keepalive_interval(Some(KEEPALIVE_INTERVAL))
        .http2_keepalive_timeout(Some(KEEPALIVE_TIMEOUT))
        .layer(SetRequestIdLayer::x_request_id(MakeRequestUuid))
        .layer(SetSensitiveHeadersLayer::new(secret))
        .layer(TraceLayer::new_for_grpc())
        .layer(PropagateRequestIdLayer::x_request_id())
        .layer(CatchPanicLayer::custom(panicked))
        .layer(Gate(Deadlines::of(&core.config)))
        .add_routes(routes)
        .serve_with_incoming_shutdown(incoming, closing.cancelled_owned())
        .await
}

/// All services, and the reporter of their health.
async fn routes(core: &Arc<Core>) -> Result<(HealthReporter, Routes), ServeError> {
    let (reporter, health) = tonic_health::server::health_reporter();
    for name in health_names() {
        reporter
            .set_service_status(name, ServingStatus::Serving)
            .await;
    }
    let described = || {
        tonic_reflection::server::Builder::configure()
            .register_encoded_file_descriptor_set(tarehouse_proto::FILE_DESCRIPTOR_SET)
            .register_encoded_file_descriptor_set(tonic_health::pb::FILE_DESCRIPTOR_SET)
    };
    let mut routes = tonic::service::RoutesBuilder::default();
    routes
        .add_service(health)
        .add_service(described().build_v1()?)
        .add_service(described().build_v1alpha()?);
    services::add(&mut routes, core);
    Ok((reporter, routes.routes()))
}

/// What health speaks of: the whole, then each service.
fn health_names() -> impl Iterator<Item = &'static str> {
    std::iter::once("").chain(services::NAMES)
}

/// Says NOT_SERVING, refuses new work, and ends the watches, those of health among them.
async fn stop_taking_work(core: &Core, mut health: HealthReporter) {
    for name in health_names() {
        health
            .set_service_status(name, ServingStatus::NotServing)
            .await;
    }
    core.drain.begin();
    // Watches of health end with what they watch.
    for name in health_names() {
        health.clear_service_status(name).await;
    }
}
