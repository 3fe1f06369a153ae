//! The one writer: many jobs per transaction, each answered after the commit.

use super::work::Work;
use super::{Hindrance, SqliteOptions, fault, open, sql};
use crate::store::{Health, Meters, StoreError};
use futures::FutureExt;
use futures::future::BoxFuture;
use sqlx::Connection;
use sqlx::sqlite::SqliteConnection;
use std::sync::Arc;
use std::time::Instant;
use tokio::sync::{OwnedSemaphorePermit, mpsc, oneshot, watch};
use tracing::{Instrument, Span};

/// What a caller gets after the commit.
type Answer<T> = Result<T, StoreError>;

/// What the writer is asked for.
pub(super) enum Message {
    Job(Box<dyn Job>),
    Hinder(Hindrance, oneshot::Sender<()>),
    Close(oneshot::Sender<Result<(), StoreError>>),
}

/// Work of any kind with the way to its answer.
pub(super) trait Job: Send {
    /// How many ordinary jobs it takes as long as.
    fn weight(&self) -> usize;

    /// Waits for what has to be there before the transaction begins.
    fn ready(&mut self) -> BoxFuture<'_, ()>;

    fn run<'a>(
        &'a mut self,
        on: &'a mut SqliteConnection,
    ) -> BoxFuture<'a, Result<(), sqlx::Error>>;

    /// Tells the caller what came of it, `error` where the transaction failed.
    fn answer(self: Box<Self>, error: Option<StoreError>);
}

/// A [`Work`] on its way through the queue.
pub(super) struct Task<W: Work> {
    work: W,
    output: Option<W::Output>,
    /// Given back with the answer.
    _place: Option<OwnedSemaphorePermit>,
    reply: oneshot::Sender<Answer<W::Output>>,
    /// Of the request that asked for it.
    span: Span,
}

impl<W: Work> Task<W> {
    /// The work as a job, and where its answer will arrive.
    pub fn queued(
        work: W,
        place: Option<OwnedSemaphorePermit>,
    ) -> (Box<dyn Job>, oneshot::Receiver<Answer<W::Output>>) {
        let (reply, done) = oneshot::channel();
        (
            Box::new(Task {
                work,
                output: None,
                _place: place,
                reply,
                span: Span::current(),
            }),
            done,
        )
    }
}

impl<W: Work> Job for Task<W> {
    fn weight(&self) -> usize {
        self.work.weight()
    }

    fn ready(&mut self) -> BoxFuture<'_, ()> {
        self.work.ready()
    }

    fn run<'a>(
        &'a mut self,
        on: &'a mut SqliteConnection,
    ) -> BoxFuture<'a, Result<(), sqlx::Error>> {
        let span = self.span.clone();
        async move {
            self.output = Some(self.work.run(on).await?);
            Ok(())
        }
        .instrument(span)
        .boxed()
    }

    fn answer(self: Box<Self>, error: Option<StoreError>) {
        let Task {
            output,
            reply,
            span,
            ..
        } = *self;
        let _of_the_request = span.enter();
        let answer = match (error, output) {
            (Some(error), _) => {
                tracing::warn!(%error, "not kept");
                Err(error)
            }
            (None, Some(output)) => {
                tracing::debug!("kept");
                Ok(output)
            }
            (None, None) => Err(StoreError::Unavailable("the work was not done".to_owned())),
        };
        // A caller that has gone away needs no answer; its work is done.
        let _ = reply.send(answer);
    }
}

/// The writer's own state.
pub(super) struct Writer {
    options: SqliteOptions,
    /// `None` after a failure, until opening again succeeds.
    connection: Option<SqliteConnection>,
    queue: mpsc::UnboundedReceiver<Message>,
    health: watch::Sender<Health>,
    hindrance: Hindrance,
    meters: Arc<Meters>,
}

impl Writer {
    pub fn new(
        options: SqliteOptions,
        connection: SqliteConnection,
        queue: mpsc::UnboundedReceiver<Message>,
        health: watch::Sender<Health>,
    ) -> Self {
        Writer {
            options,
            connection: Some(connection),
            queue,
            health,
            hindrance: Hindrance::default(),
            meters: Arc::default(),
        }
    }

    /// The same, counting its work there.
    pub fn counted_by(mut self, meters: Arc<Meters>) -> Self {
        self.meters = meters;
        self
    }

    /// Works until it is closed or everybody who could ask is gone.
    pub async fn run(mut self) {
        loop {
            let message = if self.connection.is_some() {
                self.queue.recv().await
            } else {
                match tokio::time::timeout(self.options.retry, self.queue.recv()).await {
                    Ok(message) => message,
                    Err(_) => {
                        self.reopen().await;
                        continue;
                    }
                }
            };
            match message {
                None => {
                    let _ = self.close().await;
                    return;
                }
                Some(Message::Job(job)) => {
                    if let Some(after) = self.group(job).await
                        && self.handle(after).await
                    {
                        return;
                    }
                }
                Some(other) => {
                    if self.handle(other).await {
                        return;
                    }
                }
            }
        }
    }

    /// Does what is no job; true where it was the last thing to do.
    async fn handle(&mut self, message: Message) -> bool {
        match message {
            Message::Job(job) => {
                self.commit(vec![job]).await;
                false
            }
            Message::Hinder(hindrance, reply) => {
                self.hindrance = hindrance;
                if let Some(connection) = &mut self.connection
                    && let Err(error) = open::hinder(connection, hindrance).await
                {
                    self.fail(&error).await;
                }
                let _ = reply.send(());
                false
            }
            Message::Close(reply) => {
                let _ = reply.send(self.close().await);
                true
            }
        }
    }

    /// Commits a job with all the jobs that wait behind it; returns the first
    /// message behind them that is no job.
    async fn group(&mut self, first: Box<dyn Job>) -> Option<Message> {
        let mut weight = first.weight();
        let mut jobs = vec![first];
        let mut other = None;
        while weight < self.options.group {
            match self.queue.try_recv() {
                Ok(Message::Job(job)) => {
                    weight = weight.saturating_add(job.weight());
                    jobs.push(job);
                }
                Ok(message) => {
                    other = Some(message);
                    break;
                }
                Err(_) => break,
            }
        }
        self.commit(jobs).await;
        other
    }

    async fn commit(&mut self, mut jobs: Vec<Box<dyn Job>>) {
        for job in &mut jobs {
            job.ready().await;
        }
        if self.connection.is_none() {
            self.reopen().await;
        }
        let started = Instant::now();
        let error = match &mut self.connection {
            None => Some(self.excuse()),
            Some(connection) => match transact(connection, &mut jobs).await {
                Ok(()) => None,
                Err(error) => {
                    let explained = fault::explain(&error);
                    self.fail(&error).await;
                    Some(explained)
                }
            },
        };
        self.meters
            .committed(jobs.len(), started.elapsed(), error.is_some());
        for job in jobs {
            job.answer(error.clone());
        }
    }

    fn excuse(&self) -> StoreError {
        match &*self.health.borrow() {
            Health::Ready => StoreError::Unavailable("the database is not open".to_owned()),
            Health::Unready(reason) | Health::Failed(reason) => {
                StoreError::Unavailable(reason.clone())
            }
        }
    }

    /// Drops the connection: after a full disk or an I/O error it can stay
    /// broken although the disk has recovered.
    async fn fail(&mut self, error: &sqlx::Error) {
        tracing::error!(%error, "the database refused a write");
        if let Some(connection) = self.connection.take() {
            let _ = connection.close_hard().await;
        }
        self.report(error);
    }

    fn report(&self, error: &sqlx::Error) {
        let reason = fault::explain(error).to_string();
        if matches!(&*self.health.borrow(), Health::Failed(_)) {
            return;
        }
        self.health.send_replace(if fault::is_fatal(error) {
            Health::Failed(reason)
        } else {
            Health::Unready(reason)
        });
    }

    async fn reopen(&mut self) {
        if matches!(&*self.health.borrow(), Health::Failed(_)) {
            return;
        }
        match open::again(&self.options, self.hindrance).await {
            Ok(connection) => {
                tracing::info!("the database takes writes again");
                self.connection = Some(connection);
                self.health.send_replace(Health::Ready);
            }
            Err(error) => self.report(&error),
        }
    }

    async fn close(&mut self) -> Result<(), StoreError> {
        let Some(mut connection) = self.connection.take() else {
            return Ok(());
        };
        let written = open::checkpoint(&mut connection).await;
        let closed = connection.close().await;
        written.and(closed).map_err(|error| fault::explain(&error))
    }
}

/// Runs the jobs in one transaction. On an error the connection is dropped by
/// the caller, which rolls back.
async fn transact(
    connection: &mut SqliteConnection,
    jobs: &mut [Box<dyn Job>],
) -> Result<(), sqlx::Error> {
    sqlx::query(sql::BEGIN).execute(&mut *connection).await?;
    for job in jobs {
        job.run(connection).await?;
    }
    sqlx::query(sql::COMMIT).execute(&mut *connection).await?;
    Ok(())
}
