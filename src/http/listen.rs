//! Accepting connections, as many as allowed, and ending them in order.

use std::future::Future;
use std::io;
use std::net::SocketAddr;
use std::pin::pin;
use std::sync::Arc;
use std::time::Duration;

use axum::Router;
use hyper::server::conn::http1;
use hyper_util::rt::{TokioIo, TokioTimer};
use hyper_util::service::TowerToHyperService;
use tokio::net::{TcpListener, TcpStream};
use tokio::sync::{Semaphore, watch};
use tokio::task::JoinSet;

use super::documents::Work;
use super::router::router;
use super::settings::{MOST_WAITING, Settings};
use super::stream::PatientStream;

/// Pause after the system refused a connection, for instance for want of file descriptors.
const ACCEPT_PAUSE: Duration = Duration::from_millis(50);
/// Threads of the asynchronous runtime: they only move bytes.
const RUNTIME_THREADS: usize = 2;
/// Stack of every thread (bytes).
const STACK: usize = 4 << 20;
/// Most header lines of a request.
const MOST_HEADERS: usize = 64;
/// Largest request head (bytes).
const HEAD_LIMIT: usize = 32 << 10;

/// A service that has its address, and waits to run.
pub struct Bound {
    listener: TcpListener,
    address: SocketAddr,
    settings: Settings,
    router: Router,
}

/// Takes the address; nothing is answered before [`Bound::run`].
///
/// # Errors
/// When the address is taken or not ours.
pub async fn bind(settings: Settings, work: Arc<dyn Work>) -> io::Result<Bound> {
    let listener = TcpListener::bind(settings.address).await?;
    let address = listener.local_addr()?;
    let router = router(settings.clone(), work);
    Ok(Bound { listener, address, settings, router })
}

/// The runtime that `settings` asks for.
///
/// # Errors
/// When the system grants no threads.
pub fn runtime(settings: &Settings) -> io::Result<tokio::runtime::Runtime> {
    tokio::runtime::Builder::new_multi_thread()
        .worker_threads(RUNTIME_THREADS)
        .max_blocking_threads(settings.workers.clamp(1, MOST_WAITING))
        .thread_name("underfoot")
        .thread_stack_size(STACK)
        .enable_all()
        .build()
}

impl Bound {
    /// The address in use, with the port the system picked.
    pub fn address(&self) -> SocketAddr {
        self.address
    }

    /// Serves until `stop` is ready; then takes no new requests, lets running ones finish within
    /// the grace, and calls off what is left.
    pub async fn run(self, stop: impl Future<Output = ()>) {
        let slots = Arc::new(Semaphore::new(self.settings.connections()));
        let (closing, closed) = watch::channel(false);
        let mut connections = JoinSet::new();
        let mut stop = pin!(stop);
        loop {
            let next = tokio::select! {
                () = &mut stop => break,
                next = self.accept(&slots) => next,
                Some(_) = connections.join_next() => continue,
            };
            let Some((stream, slot)) = next else { continue };
            let router = self.router.clone();
            let (settings, closed) = (self.settings.clone(), closed.clone());
            connections.spawn(async move {
                serve_one(stream, router, &settings, closed).await;
                drop(slot);
            });
        }
        drop(self.listener);
        let _ = closing.send(true);
        let finish = async { while connections.join_next().await.is_some() {} };
        if tokio::time::timeout(self.settings.grace, finish).await.is_err() {
            tracing::warn!(left = connections.len(), "connections still open after the grace: closing them");
            connections.shutdown().await;
        }
    }

    /// The next connection and its slot. Beyond the bound, clients wait in the system's backlog.
    async fn accept(&self, slots: &Arc<Semaphore>) -> Option<(TcpStream, tokio::sync::OwnedSemaphorePermit)> {
        let slot = Arc::clone(slots).acquire_owned().await.ok()?;
        match self.listener.accept().await {
            Ok((stream, _)) => Some((stream, slot)),
            Err(error) => {
                tracing::warn!(%error, "a connection could not be accepted");
                tokio::time::sleep(ACCEPT_PAUSE).await;
                None
            }
        }
    }
}

/// One connection, request after request. When the client hangs up, the future of its request is
/// dropped with everything in it, and the desk calls off the job.
async fn serve_one(stream: TcpStream, router: Router, settings: &Settings, mut closed: watch::Receiver<bool>) {
    let _ = stream.set_nodelay(true);
    let stream = TokioIo::new(PatientStream::new(stream, settings.stall_time));
    let connection = http1::Builder::new()
        .timer(TokioTimer::new())
        .header_read_timeout(settings.header_time)
        .max_headers(MOST_HEADERS)
        .max_buf_size(HEAD_LIMIT)
        .serve_connection(stream, TowerToHyperService::new(router));
    let mut connection = pin!(connection);
    let closing = async move { drop(closed.wait_for(|closing| *closing).await) };
    let ended = tokio::select! {
        ended = connection.as_mut() => ended,
        () = closing => {
            connection.as_mut().graceful_shutdown();
            connection.await
        }
    };
    if let Err(error) = ended {
        tracing::debug!(%error, "a connection ended early");
    }
}
