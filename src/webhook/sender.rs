//! Sending events one after another, each until it is taken or given up.

use super::schedule::{Meaning, Schedule, meaning, retry_after};
use super::signature::{Signed, sign};
use super::target::{Key, Target};
use crate::alarms::Event;
use serde::{Deserialize, Serialize};
use std::future::Future;
use time::OffsetDateTime;
use tokio::sync::mpsc;
use utoipa::ToSchema;

/// A numbered event: the body of a request.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct Notice {
    /// Number of the event, increasing.
    pub id: i64,
    /// The event.
    #[serde(flatten)]
    pub event: Event,
    /// Headers that tell which trace it belongs to.
    #[serde(skip)]
    pub trace: Vec<(&'static str, String)>,
}

/// An event that is not sent again. Everything up to it is settled: delivery
/// resumes after it.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Settled {
    /// Number of the event.
    pub id: i64,
    /// How it ended.
    pub outcome: Outcome,
}

/// How the sending of an event ended.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Outcome {
    /// It was taken.
    Delivered,
    /// The receiver refused it with this status; 0 where it could not be written
    /// as JSON.
    GivenUp(u16),
}

/// An answer of the receiver.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Answer {
    /// Status.
    pub status: u16,
    /// Value of `Retry-After`.
    pub retry_after: Option<String>,
}

/// Who posts.
pub trait Post {
    /// Posts a request, and answers, or says why there is no answer.
    fn post(&self, request: Signed) -> impl Future<Output = Result<Answer, String>> + Send;
}

/// The sender of one webhook. [`Sender::run`] does the work.
#[derive(Debug)]
pub struct Sender<P, C, J, S> {
    /// Where to.
    pub target: Target,
    /// Signed with.
    pub key: Key,
    /// When to try again.
    pub schedule: Schedule,
    /// Who posts.
    pub post: P,
    /// What time it is.
    pub clock: C,
    /// Draws evenly from 0 to 1.
    pub jitter: J,
    /// Is told of every settled event, in order.
    pub settled: S,
}

/// Where events for a sender are put.
#[derive(Clone, Debug)]
pub struct Handle(mpsc::Sender<Notice>);

/// Events of a sender, in order.
#[derive(Debug)]
pub struct Queue(mpsc::Receiver<Notice>);

/// The queue is full: the event is still in the store, to be read again later.
#[derive(Clone, Copy, Debug, PartialEq, Eq, thiserror::Error)]
#[error("the queue of the webhook is full")]
pub struct Full;

/// The sender has ended.
#[derive(Clone, Copy, Debug, PartialEq, Eq, thiserror::Error)]
#[error("the webhook no longer sends")]
pub struct Stopped;

/// A queue with this many places, at least one.
pub fn queue(places: usize) -> (Handle, Queue) {
    let (handle, queue) = mpsc::channel(places.max(1));
    (Handle(handle), Queue(queue))
}

impl Handle {
    /// Waits for a place: for whoever reads events from the store in order.
    ///
    /// # Errors
    ///
    /// Where the sender has ended.
    pub async fn put(&self, notice: Notice) -> Result<(), Stopped> {
        self.0.send(notice).await.map_err(|_| Stopped)
    }

    /// Does not wait.
    ///
    /// # Errors
    ///
    /// Where there is no place, or the sender has ended.
    pub fn offer(&self, notice: Notice) -> Result<(), Full> {
        self.0.try_send(notice).map_err(|_| Full)
    }
}

impl<P, C, J, S> Sender<P, C, J, S>
where
    P: Post,
    C: Fn() -> OffsetDateTime,
    J: FnMut() -> f64,
    S: FnMut(Settled),
{
    /// Sends until every handle is gone and the queue is empty. It may be dropped
    /// at any time: what was not settled is to be put again.
    pub async fn run(mut self, mut queue: Queue) {
        while let Some(notice) = queue.0.recv().await {
            let id = notice.id;
            let outcome = match serde_json::to_vec(&notice) {
                Ok(body) => self.deliver(id, &body, &notice.trace).await,
                Err(error) => {
                    tracing::error!(id, %error, "an event cannot be written as JSON");
                    Outcome::GivenUp(0)
                }
            };
            (self.settled)(Settled { id, outcome });
        }
    }

    async fn deliver(&mut self, id: i64, body: &[u8], trace: &[(&'static str, String)]) -> Outcome {
        let mut failed = 0_u32;
        loop {
            // Signed anew: receivers refuse signatures that are old.
            let mut request = sign(&self.target, &self.key, body, (self.clock)());
            request.trace = trace.to_vec();
            let answer = self.post.post(request).await;
            let host = self.target.host();
            let asked = match answer {
                Ok(Answer {
                    status,
                    retry_after: asked,
                }) => match meaning(status) {
                    Meaning::Done => return Outcome::Delivered,
                    Meaning::GivenUp => {
                        tracing::error!(
                            id,
                            host,
                            status,
                            "the webhook's receiver refuses an event"
                        );
                        return Outcome::GivenUp(status);
                    }
                    Meaning::Again => {
                        tracing::warn!(id, host, status, "the webhook's receiver is not ready");
                        asked
                    }
                },
                Err(reason) => {
                    tracing::warn!(id, host, reason, "the webhook's receiver does not answer");
                    None
                }
            };
            failed = failed.saturating_add(1);
            let wait = self.schedule.wait(failed, (self.jitter)());
            let asked = asked.and_then(|value| retry_after(&value, (self.clock)()));
            tokio::time::sleep(wait.max(asked.unwrap_or_default())).await;
        }
    }
}
