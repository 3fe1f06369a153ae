//! Connections: accepting them, their time limits, and an orderly end.
//!
//! The accept loop is ours because a client that never ends its headers has to
//! be cut and told so, and because an orderly end has an order: stop accepting,
//! let connections finish their requests, finish what was accepted, write the
//! database back.

mod stall;
mod tls;

use crate::http::{App, Clock, Entropy, Peer, is_loopback, router};
use crate::store::{Health, Store, StoreError};
use axum::Router;
use hyper::body::Incoming;
use hyper::server::conn::http1;
use hyper::service::service_fn;
use hyper_util::rt::{TokioIo, TokioTimer};
use stall::Stalling;
use std::future::poll_fn;
use std::io;
use std::net::SocketAddr;
use std::pin::Pin;
use std::sync::Arc;
use std::task::Poll;
use std::time::Duration;
use tokio::io::{AsyncRead, AsyncReadExt, AsyncWrite, AsyncWriteExt};
use tokio::net::{TcpListener, TcpStream};
use tokio::sync::Semaphore;
use tokio::task::{JoinHandle, JoinSet};
use tokio::time::{Instant, timeout, timeout_at};
use tokio_rustls::TlsAcceptor;
use tokio_rustls::server::TlsStream;
use tokio_util::sync::CancellationToken;
use tokio_util::task::TaskTracker;
use tower::ServiceExt;

pub use tls::{Tls, TlsError};

pub use crate::http::{Hook, Limits, Problem, SystemClock, SystemEntropy, Unusable};

/// How long a closed connection is read from, so that the client gets the
/// answer to a body that it was still sending.
const LINGER: Duration = Duration::from_secs(1);

/// How long a client may leave an answer unread.
const UNREAD: Duration = Duration::from_secs(30);

/// How often the store is looked over for days that are over.
const TIDIED_EVERY: Duration = Duration::from_secs(300);

/// Largest request line with headers, in bytes.
const LARGEST_HEAD: usize = 64 << 10;

/// The OpenAPI document of the service, as JSON.
///
/// # Errors
///
/// Where it cannot be written as JSON.
pub fn openapi() -> Result<String, serde_json::Error> {
    serde_json::to_string_pretty(&crate::http::document())
}

/// How a server is set up.
#[derive(Clone, Debug)]
pub struct Options {
    /// Where to listen; port 0 takes a free one.
    pub listen: SocketAddr,
    /// What requests may take.
    pub limits: Limits,
    /// How long an orderly end may take.
    pub grace: Duration,
    /// How often the clock is looked at for shelvings that end and periods that are due.
    pub tick: Duration,
    /// Where events of alarms are sent.
    pub webhook: Option<Hook>,
    /// What TLS is spoken with; none is spoken without.
    pub tls: Option<Tls>,
}

/// Why a server ended.
#[derive(Debug, thiserror::Error)]
pub enum ServerError {
    /// The address cannot be listened on.
    #[error("cannot listen on {address}: {error}")]
    Listen {
        /// The address.
        address: SocketAddr,
        /// What the operating system says.
        error: io::Error,
    },
    /// There are no tokens, and others could reach the address.
    #[error(
        "there are no tokens yet, so {0} is not listened on: whoever reaches it could read and \
         write everything. Make a token first (`counterpoise token make --help`), or listen on \
         127.0.0.1"
    )]
    Open(SocketAddr),
    /// The database did not keep what it was given.
    #[error("ended because the database failed: {0}")]
    Store(String),
    /// The database could not be closed in order.
    #[error(transparent)]
    Close(#[from] StoreError),
    /// What was accepted could not be finished in time. It is on disk and will
    /// be finished at the next start.
    #[error(
        "not everything that was accepted could be finished in time; it will be at the next start"
    )]
    Unfinished,
    /// The server's own task broke off.
    #[error("the server broke off")]
    Broken,
}

/// A running server.
pub struct Server {
    address: SocketAddr,
    stop: CancellationToken,
    task: JoinHandle<Result<(), ServerError>>,
}

impl Server {
    /// Starts listening, and finishing what was accepted before.
    ///
    /// # Errors
    ///
    /// Where the address cannot be listened on, or must not be because there are
    /// no tokens.
    pub async fn start(
        options: Options,
        store: Arc<dyn Store>,
        clock: Arc<dyn Clock>,
        entropy: Arc<dyn Entropy>,
    ) -> Result<Server, ServerError> {
        let refused = |error| ServerError::Listen {
            address: options.listen,
            error,
        };
        let app = App::new(store, clock, entropy, options.limits);
        if app.is_open().await? {
            if !is_loopback(options.listen.ip()) {
                return Err(ServerError::Open(options.listen));
            }
            tracing::warn!(
                "open: there are no tokens, so whoever is on this machine can read and write \
                 everything, and nobody else anything; `counterpoise token make` makes one"
            );
        }
        let listener = TcpListener::bind(options.listen).await.map_err(refused)?;
        let address = listener.local_addr().map_err(refused)?;
        let stop = CancellationToken::new();
        let aside = Aside::start(&app, options.tick, options.webhook, options.tls.clone());
        let entrance = Entrance {
            listener,
            tls: options.tls,
        };
        let task = tokio::spawn(run(entrance, app, aside, stop.clone(), options.grace));
        Ok(Server {
            address,
            stop,
            task,
        })
    }

    /// Where it listens.
    pub fn address(&self) -> SocketAddr {
        self.address
    }

    /// What ends it in order, from anywhere.
    pub fn stopper(&self) -> CancellationToken {
        self.stop.clone()
    }

    /// Waits until it has ended.
    ///
    /// # Errors
    ///
    /// Where it did not end in order.
    pub async fn ended(self) -> Result<(), ServerError> {
        self.task.await.map_err(|_| ServerError::Broken)?
    }
}

/// What goes on beside the requests until the end; aborted when it is dropped.
struct Aside(JoinSet<()>);

impl Aside {
    fn start(app: &App, tick: Duration, webhook: Option<Hook>, tls: Option<Tls>) -> Self {
        let mut tasks = JoinSet::new();
        let [a, b, c, d, e] = std::array::from_fn(|_| app.clone());
        tasks.spawn(resume_whenever_ready(a));
        tasks.spawn(async move { b.pass_time(tick).await });
        tasks.spawn(async move { d.keep_tidy(TIDIED_EVERY).await });
        tasks.spawn(async move { e.work_off(tick).await });
        if let Some(hook) = webhook {
            tasks.spawn(async move { c.send_out(hook).await });
        }
        if let Some(tls) = tls {
            tasks.spawn(tls.keep_up(tick));
        }
        Aside(tasks)
    }
}

/// Where connections come in.
struct Entrance {
    listener: TcpListener,
    tls: Option<Tls>,
}

async fn run(
    entrance: Entrance,
    app: App,
    mut aside: Aside,
    stop: CancellationToken,
    grace: Duration,
) -> Result<(), ServerError> {
    let connections = TaskTracker::new();
    let failure = tokio::select! {
        () = accept(entrance, &app, &stop, &connections) => None,
        reason = failed(&app) => Some(reason),
    };
    stop.cancel();
    app.end_streams();
    aside.0.shutdown().await;
    connections.close();
    let deadline = Instant::now() + grace;
    let quiet = async {
        connections.wait().await;
        app.drain().await;
    };
    let finished = timeout_at(deadline, quiet).await;
    if let Some(reason) = failure {
        return Err(ServerError::Store(reason));
    }
    app.store().close().await?;
    finished.map_err(|_| ServerError::Unfinished)
}

/// Accepts until told to stop.
async fn accept(
    entrance: Entrance,
    app: &App,
    stop: &CancellationToken,
    connections: &TaskTracker,
) {
    let Entrance { listener, tls } = entrance;
    let slots = Arc::new(Semaphore::new(app.limits().connections));
    let router = router(app.clone());
    loop {
        let slot = Arc::clone(&slots).acquire_owned();
        let next = async { (slot.await, listener.accept().await) };
        let accepted = tokio::select! {
            () = stop.cancelled() => return,
            accepted = next => accepted,
        };
        match accepted {
            (Ok(slot), Ok((stream, peer))) => {
                let (router, app, stop) = (router.clone(), app.clone(), stop.clone());
                let acceptor = tls.as_ref().map(Tls::acceptor);
                connections.spawn(async move {
                    // Answers are written whole; waiting for more to send only delays them.
                    let _ = stream.set_nodelay(true);
                    let stream = Stalling::new(stream, UNREAD);
                    let peer = Peer(peer);
                    match acceptor {
                        None => serve(stream, peer, router, &app, &stop).await,
                        Some(acceptor) => {
                            if let Some(stream) = greeted(stream, &acceptor, &app, &stop).await {
                                serve(stream, peer, router, &app, &stop).await;
                            }
                        }
                    }
                    drop(slot);
                });
            }
            (_, Err(error)) => {
                // Out of file descriptors, most likely: others have to close first.
                tracing::warn!(%error, "a connection could not be accepted");
                tokio::time::sleep(Duration::from_millis(100)).await;
            }
            (Err(_), _) => return,
        }
    }
}

/// A connection after its TLS handshake, which may take as long as headers may;
/// `None` of one that is cut, as whoever speaks without TLS is.
async fn greeted(
    stream: Stalling<TcpStream>,
    acceptor: &TlsAcceptor,
    app: &App,
    stop: &CancellationToken,
) -> Option<TlsStream<Stalling<TcpStream>>> {
    let handshake = timeout(app.limits().read_timeout, acceptor.accept(stream));
    tokio::select! {
        () = stop.cancelled() => None,
        shaken = handshake => match shaken {
            Ok(Ok(stream)) => Some(stream),
            Ok(Err(error)) => {
                tracing::debug!(%error, "no TLS");
                None
            }
            Err(_) => None,
        },
    }
}

/// Serves one connection until it ends.
async fn serve<S: AsyncRead + AsyncWrite + Unpin>(
    stream: S,
    peer: Peer,
    router: Router,
    app: &App,
    stop: &CancellationToken,
) {
    let service = service_fn(move |mut request: hyper::Request<Incoming>| {
        request.extensions_mut().insert(peer);
        Box::pin(router.clone().oneshot(request))
    });
    let mut connection = http1::Builder::new()
        .timer(TokioTimer::new())
        .header_read_timeout(app.limits().read_timeout)
        .max_buf_size(LARGEST_HEAD)
        .serve_connection(TokioIo::new(stream), service);
    let mut stopping = std::pin::pin!(stop.cancelled());
    let mut stopped = false;
    let ended = poll_fn(|context| {
        if !stopped && stopping.as_mut().poll(context).is_ready() {
            stopped = true;
            Pin::new(&mut connection).graceful_shutdown();
        }
        match connection.poll_without_shutdown(context) {
            Poll::Ready(ended) => Poll::Ready(ended),
            Poll::Pending => Poll::Pending,
        }
    })
    .await;
    let parts = connection.into_parts();
    let mut stream = parts.io.into_inner();
    let half_a_head = !parts.read_buf.is_empty();
    if ended.is_err_and(|error| error.is_timeout()) && half_a_head {
        let _ = stream.write_all(&app.headers_too_slow()).await;
    }
    // A close while the client is still sending resets the connection, and the
    // client may never see the answer.
    let _ = stream.shutdown().await;
    if stopped {
        return;
    }
    let mut scrap = [0; 16 << 10];
    let drained = async { while matches!(stream.read(&mut scrap).await, Ok(1..)) {} };
    let _ = timeout(LINGER, drained).await;
}

/// Finishes accepted batches at the start, and again whenever the database has
/// recovered.
async fn resume_whenever_ready(app: App) {
    let mut health = app.store().health();
    loop {
        if health
            .wait_for(|health| *health == Health::Ready)
            .await
            .is_err()
        {
            return;
        }
        if let Err(error) = app.resume().await {
            tracing::error!(%error, "what was accepted before cannot be read");
        }
        if health.changed().await.is_err() {
            return;
        }
    }
}

/// Waits for the failure that nothing can be trusted after.
async fn failed(app: &App) -> String {
    let mut health = app.store().health();
    loop {
        let now = health.borrow_and_update().clone();
        if let Health::Failed(reason) = now {
            return reason;
        }
        if health.changed().await.is_err() {
            // A store that is gone without having failed was closed by us.
            std::future::pending::<()>().await;
        }
    }
}
