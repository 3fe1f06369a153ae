//! The service as HTTP: routes, shapes at the edge, problem documents.
//!
//! [`App`] holds what every request needs; [`router`] makes the routes from it.
//! Handlers take apart, call and convert; the way of a batch is in `engine`,
//! and `error` alone knows status codes.

mod access;
mod accusations;
mod again;
mod alarms;
mod ambient;
mod audit;
mod backfills;
mod batches;
mod body;
mod by_hand;
mod engine;
mod error;
mod events;
mod field;
mod fields;
mod headers;
mod means;
mod metrics;
mod observe;
mod openapi;
mod operation;
mod outgoing;
mod params;
mod plants;
mod readings;
mod replays;
mod revisions;
mod series;
pub mod shapes;
mod streamed;
mod tidy;
mod trace;

pub use access::{Peer, is_loopback};
pub use ambient::{Clock, Entropy, SystemClock, SystemEntropy};
pub use error::{Kind, Problem};
pub use openapi::document;
pub use outgoing::{Hook, Unusable};

use crate::access::Rate;
use crate::store::{Store, StoreError};
use access::{Gate, Who};
use axum::http::header;
use axum::middleware::from_fn_with_state;
use engine::Engine;
use metrics::Metrics;
use std::sync::Arc;
use std::time::Duration;
use tokio::sync::Semaphore;
use tokio_util::sync::CancellationToken;
use tower_http::catch_panic::CatchPanicLayer;
use tower_http::compression::{CompressionLayer, DefaultPredicate, Predicate};

/// What one request, and all of them together, may take.
#[derive(Clone, Debug, PartialEq)]
pub struct Limits {
    /// Requests with a body that are worked on at once; more are refused.
    pub in_flight: usize,
    /// Connections at once; more wait.
    pub connections: usize,
    /// Clients that listen to events at once; more are refused.
    pub listeners: usize,
    /// Batches that are reconciled at once.
    pub workers: usize,
    /// Bytes of accepted batches that nobody waits for (`Prefer: respond-async`)
    /// and that are not finished; more are refused, or wait where they come in a
    /// stream.
    pub waiting: usize,
    /// Backfills whose content comes in at once; more are refused.
    pub backfills: usize,
    /// Bytes of one document (plant file or batch) after decompression.
    pub document: usize,
    /// Bytes of a stream of batches after decompression.
    pub stream: usize,
    /// How long a client may take for its headers, and again for its body.
    pub read_timeout: Duration,
    /// Requests a second of a token that has no rate of its own.
    pub token_rate: Rate,
    /// How long what is known of the tokens is good for without asking whether
    /// another program has changed them; a second at most.
    pub token_freshness: Duration,
}

impl Default for Limits {
    fn default() -> Self {
        Limits {
            in_flight: 64,
            connections: 1024,
            listeners: 256,
            workers: std::thread::available_parallelism().map_or(1, usize::from),
            waiting: 64 << 20,
            backfills: 4,
            document: 4 << 20,
            stream: 32 << 20,
            read_timeout: Duration::from_secs(10),
            token_rate: Rate::USUAL,
            token_freshness: Duration::from_millis(250),
        }
    }
}

/// What every request needs.
#[derive(Clone)]
pub struct App {
    store: Arc<dyn Store>,
    engine: Arc<Engine>,
    gate: Arc<Gate>,
    clock: Arc<dyn Clock>,
    entropy: Arc<dyn Entropy>,
    limits: Arc<Limits>,
    metrics: Arc<Metrics>,
    permits: Arc<Semaphore>,
    backfills: Arc<Semaphore>,
    listeners: Arc<Semaphore>,
    /// Ends what would never end by itself.
    ending: CancellationToken,
}

impl App {
    /// Puts the service together.
    pub fn new(
        store: Arc<dyn Store>,
        clock: Arc<dyn Clock>,
        entropy: Arc<dyn Entropy>,
        limits: Limits,
    ) -> Self {
        let metrics = Arc::new(Metrics::new(&*store, openapi::paths()));
        let of_engine = Arc::clone(&metrics);
        let engine = Engine::new(Arc::clone(&store), Arc::clone(&clock), &limits, of_engine);
        let gate = Gate::new(
            Arc::clone(&store),
            Arc::clone(&clock),
            limits.token_rate,
            limits.token_freshness,
        );
        App {
            engine: Arc::new(engine),
            gate: Arc::new(gate),
            listeners: Arc::new(Semaphore::new(limits.listeners)),
            ending: CancellationToken::new(),
            permits: Arc::new(Semaphore::new(limits.in_flight)),
            backfills: Arc::new(Semaphore::new(limits.backfills)),
            limits: Arc::new(limits),
            metrics,
            store,
            clock,
            entropy,
        }
    }

    /// Where everything is kept.
    pub fn store(&self) -> &Arc<dyn Store> {
        &self.store
    }

    /// What requests may take.
    pub fn limits(&self) -> &Limits {
        &self.limits
    }

    /// Whether there are no tokens, so that this machine alone is answered.
    ///
    /// # Errors
    ///
    /// Where the store cannot be read.
    pub async fn is_open(&self) -> Result<bool, StoreError> {
        self.gate.is_open().await
    }

    /// Waits until an answer that goes on has to end: with the service, or when
    /// whoever asked would not be let in any more.
    fn until_over(&self, who: &Who) -> impl Future<Output = ()> + Send + 'static {
        let (ending, gate, who) = (self.ending.clone(), Arc::clone(&self.gate), who.clone());
        async move {
            tokio::select! {
                () = ending.cancelled() => {}
                () = gate.until_void(&who) => {}
            }
        }
    }

    /// Finishes every batch that was accepted and has no result.
    ///
    /// # Errors
    ///
    /// Where the store cannot be read; it can be called again.
    pub async fn resume(&self) -> Result<(), StoreError> {
        self.engine.resume().await
    }

    /// Ends shelvings in time, looking at the clock every `tick`; for ever.
    pub async fn pass_time(&self, tick: Duration) {
        events::pass_time(Arc::clone(&self.engine), tick).await;
    }

    /// Keeps the store tidy, looking each so often; for ever.
    pub async fn keep_tidy(&self, every: Duration) {
        let (store, engine) = (Arc::clone(&self.store), Arc::clone(&self.engine));
        tidy::run(store, engine, Arc::clone(&self.clock), every).await;
    }

    /// Makes the batches of periods and works off replays; for ever. Where there
    /// is nothing to do, the clock is looked at every `tick`.
    pub async fn work_off(&self, tick: Duration) {
        Arc::clone(&self.engine).work_off(tick).await;
    }

    /// Sends events to the webhook; for ever.
    pub async fn send_out(&self, hook: Hook) {
        let (store, engine) = (Arc::clone(&self.store), Arc::clone(&self.engine));
        let (clock, entropy) = (Arc::clone(&self.clock), Arc::clone(&self.entropy));
        let metrics = Arc::clone(&self.metrics);
        outgoing::run(hook, store, engine, clock, entropy, metrics).await;
    }

    /// Ends the answers that go on for as long as their clients listen.
    pub fn end_streams(&self) {
        self.ending.cancel();
    }

    /// Waits until everything that was accepted is finished.
    pub async fn drain(&self) {
        self.engine.drain().await;
    }

    /// An answer to a request whose headers did not come in time; such a
    /// request never reaches a route.
    pub fn headers_too_slow(&self) -> Vec<u8> {
        let instance = ambient::request_id(&*self.clock, &*self.entropy);
        let problem = Problem::new(Kind::Timeout, "the request's headers did not come in time");
        error::raw_response(&problem.at(&instance), &instance)
    }
}

/// All routes.
pub fn router(app: App) -> axum::Router {
    let (routes, document) = openapi::routes().split_for_parts();
    // Its badge would have another host read the document.
    let no_badge = utoipa_swagger_ui::Config::default().validator_url("none");
    let docs = utoipa_swagger_ui::SwaggerUi::new("/docs")
        .config(no_badge)
        .url("/openapi.json", document);
    // A strong entity tag names one exact sequence of bytes, so what carries
    // one is sent as it is.
    let untagged = |_, _, headers: &axum::http::HeaderMap, _: &axum::http::Extensions| {
        !headers.contains_key(header::ETAG)
    };
    routes
        .with_state(app.clone())
        .layer(from_fn_with_state(app.clone(), access::guard))
        .merge(docs)
        .layer(CompressionLayer::new().compress_when(DefaultPredicate::new().and(untagged)))
        .layer(CatchPanicLayer::custom(error::panicked))
        .layer(from_fn_with_state(app, observe::observe))
}
