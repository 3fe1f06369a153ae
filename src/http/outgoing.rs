//! The webhook: events of all plants handed to its sender in order, and how far
//! it has come kept in the store.
//!
//! It goes on after the last event that was settled. The first time it starts at
//! the newest event there is: what happened before is told of by the routes.

use super::ambient::{Clock, Entropy};
use super::engine::Engine;
use super::events::notice;
use super::metrics::Metrics;
use super::trace::Trace;
use crate::store::{Store, StoreError};
use crate::webhook::{
    self, Answer, Handle, Http, Key, Meaning, Outcome, Post, Schedule, Sender, Settled, Signed,
    Stopped, Target, meaning,
};
use std::sync::Arc;
use std::time::Duration;
use tokio::sync::{mpsc, watch};

pub use crate::webhook::Unusable;

/// The name of the key in signatures.
const KEY: &str = "counterpoise";

/// Events that are read together.
const TOGETHER: usize = 64;

/// How long after a failure the store is asked again.
const RETRY: Duration = Duration::from_secs(1);

/// Where events go, signed with what, and when again.
#[derive(Clone, Debug)]
pub struct Hook {
    target: Target,
    key: Key,
    post: Http,
    /// When an event is tried again.
    pub schedule: Schedule,
}

impl Hook {
    /// A hook with the usual schedule. White space around the secret is no part
    /// of it: a file ends with a line feed.
    ///
    /// # Errors
    ///
    /// Where the address or the secret cannot be used.
    pub fn new(address: &str, secret: &[u8]) -> Result<Self, Unusable> {
        let target = Target::new(address)?;
        Ok(Hook {
            key: Key::new(KEY, secret.trim_ascii())?,
            post: Http::new(&target, None)?,
            schedule: Schedule::default(),
            target,
        })
    }

    /// The same, with the other end of an `https:` address held to these root
    /// certificates in PEM and no others.
    ///
    /// # Errors
    ///
    /// Where they cannot be read.
    pub fn trusting(self, roots: &[u8]) -> Result<Self, Unusable> {
        let post = Http::new(&self.target, Some(roots))?;
        Ok(Hook { post, ..self })
    }
}

/// Counts the attempts that fail.
struct Counted<P> {
    post: P,
    metrics: Arc<Metrics>,
}

impl<P: Post + Sync> Post for Counted<P> {
    async fn post(&self, request: Signed) -> Result<Answer, String> {
        let answer = self.post.post(request).await;
        let done = |answer: &Answer| matches!(meaning(answer.status), Meaning::Done);
        if !answer.as_ref().is_ok_and(done) {
            self.metrics.attempts_failed.inc();
        }
        answer
    }
}

/// Sends for as long as it is not dropped; what was not settled is sent after the
/// next start.
pub(super) async fn run(
    hook: Hook,
    store: Arc<dyn Store>,
    engine: Arc<Engine>,
    clock: Arc<dyn Clock>,
    entropy: Arc<dyn Entropy>,
    metrics: Arc<Metrics>,
) {
    let post = Counted {
        post: hook.post,
        metrics: Arc::clone(&metrics),
    };
    let told = engine.told();
    let after = starting_point(&*store).await;
    let (handle, queue) = webhook::queue(TOGETHER);
    let (settled, marks) = mpsc::unbounded_channel();
    let sender = Sender {
        target: hook.target,
        key: hook.key,
        schedule: hook.schedule,
        post,
        clock: move || clock.now(),
        jitter: || evenly(&*entropy),
        settled: |one: Settled| {
            let outcome = match one.outcome {
                Outcome::Delivered => "delivered",
                Outcome::GivenUp(_) => "given-up",
            };
            metrics.settled.get_or_create(&[("outcome", outcome)]).inc();
            // The other end is dropped together with this one.
            let _ = settled.send(one.id);
        },
    };
    tokio::join!(
        sender.run(queue),
        hand_over(&*store, &engine, &*entropy, told, after, handle),
        mark(&*store, marks)
    );
}

async fn starting_point(store: &dyn Store) -> i64 {
    let asked = || async {
        if let Some(delivered) = store.delivered().await? {
            return Ok(delivered);
        }
        let newest = store.newest_event().await?;
        store.set_delivered(newest).await?;
        Ok::<i64, StoreError>(newest)
    };
    loop {
        match asked().await {
            Ok(after) => return after,
            Err(error) => {
                tracing::warn!(%error, "the webhook waits for the store");
                tokio::time::sleep(RETRY).await;
            }
        }
    }
}

/// Reads the store in order, at the pace of the sender.
async fn hand_over(
    store: &dyn Store,
    engine: &Engine,
    entropy: &dyn Entropy,
    mut told: watch::Receiver<u64>,
    mut after: i64,
    handle: Handle,
) {
    loop {
        told.mark_unchanged();
        let events = match store.events_of_all(after, TOGETHER).await {
            Ok(events) => events,
            Err(error) => {
                tracing::warn!(%error, "the webhook waits for the store");
                tokio::time::sleep(RETRY).await;
                continue;
            }
        };
        if events.is_empty() && told.changed().await.is_err() {
            return;
        }
        for stored in events {
            after = stored.id;
            match notice(&stored) {
                Ok(mut notice) => {
                    let trace = engine.traces().of(after);
                    let trace = trace.unwrap_or_else(|| Arc::new(Trace::new(entropy)));
                    notice.trace = trace.headers();
                    if let Err(Stopped) = handle.put(notice).await {
                        return;
                    }
                }
                Err(error) => tracing::error!(id = after, %error, "an event cannot be read"),
            }
        }
    }
}

/// Keeps how far it has come. A mark that cannot be kept is made up for by the
/// next; until then a restart sends again what was settled since.
async fn mark(store: &dyn Store, mut marks: mpsc::UnboundedReceiver<i64>) {
    while let Some(mut settled) = marks.recv().await {
        while let Ok(later) = marks.try_recv() {
            settled = later;
        }
        if let Err(error) = store.set_delivered(settled).await {
            tracing::warn!(%error, settled, "how far the webhook has come could not be kept");
        }
    }
}

/// Evenly from 0 to 1, of 53 random bits.
fn evenly(entropy: &dyn Entropy) -> f64 {
    let bytes = entropy.ten_bytes();
    let bits = bytes[2..]
        .iter()
        .fold(0_u64, |sum, &b| (sum << 8) | u64::from(b));
    (bits >> 11) as f64 / (1_u64 << 53) as f64
}
