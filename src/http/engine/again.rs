//! Reconciling a finished batch again: with the decisions by hand that stand
//! now, with its field readings, under another revision.
//!
//! The new report takes the place of the present one, which stays as an older
//! version. Alarms and accusations are what was seen as it happened: nothing
//! here changes them.

use super::field::names;
use super::{Engine, Extended, FieldReadings, Outcome, compute, lane::Lane, parse};
use crate::access::Deed;
use crate::http::error::{Kind, Problem, count};
use crate::http::revisions::Revision;
use crate::pipeline::{self, Compiled, NoInfluences};
use crate::plant::{Action, Batch, ByHand, Fault};
use crate::report::{Influences, Report};
use crate::store::{Again, NewFieldReading, Removed, Stored, Ticket};
use std::sync::Arc;
use time::format_description::well_known::Rfc3339;

/// Most field readings that one batch takes.
const MOST_FIELD_READINGS: usize = 100;

/// A finished batch with all that its report was made from.
pub(super) struct Finished {
    pub ticket: Ticket,
    pub batch: Batch,
    pub report: Box<Report>,
    /// What it was made from has changed since the report.
    pending: bool,
    /// With the name of who entered them.
    entered: Vec<(String, FieldReadings)>,
}

impl Finished {
    fn readings(&self) -> impl Iterator<Item = &FieldReadings> {
        self.entered.iter().map(|(_, entry)| entry)
    }
}

/// What a batch is reconciled with.
enum Basis {
    /// The revision as it is.
    Plain(Arc<Revision>, Batch),
    /// With field readings.
    Extended(Box<Extended>),
}

impl Basis {
    fn compiled(&self) -> &Compiled {
        match self {
            Basis::Plain(revision, _) => &revision.compiled,
            Basis::Extended(extended) => &extended.compiled,
        }
    }

    fn batch(&self) -> &Batch {
        match self {
            Basis::Plain(_, batch) => batch,
            Basis::Extended(extended) => &extended.batch,
        }
    }
}

impl Engine {
    /// Reconciles a batch again, under its own revision unless another is named.
    /// Answers the number of the new version too.
    pub async fn again(
        self: &Arc<Self>,
        plant: &str,
        batch: &str,
        revision: Option<u32>,
        again: Again,
    ) -> Result<(Arc<Report>, u32), Problem> {
        let (engine, lane) = (Arc::clone(self), self.lane(plant));
        let (plant, batch) = (plant.to_owned(), batch.to_owned());
        self.detached(async move {
            let _turn = lane.turn.lock().await;
            let finished = engine.finished(&plant, &batch).await?;
            let number = revision.unwrap_or(finished.ticket.revision);
            let entered: Vec<FieldReadings> = finished.readings().cloned().collect();
            let basis = engine.basis(&finished, number, entered).await?;
            let basis = basis.map_err(|faults| {
                let detail = format!("the batch's field readings do not fit revision {number}");
                Problem::new(Kind::Unacceptable, detail).with_faults(faults)
            })?;
            engine.remake(&lane, finished.ticket, basis, again).await
        })
        .await?
    }

    /// Reconciles what a batch was made from last, where its report is of what
    /// came before, under the revision of that report.
    pub(super) async fn again_newest(
        self: &Arc<Self>,
        plant: &str,
        batch: &str,
        again: Again,
    ) -> Result<(), Problem> {
        let (engine, lane) = (Arc::clone(self), self.lane(plant));
        let (plant, batch) = (plant.to_owned(), batch.to_owned());
        self.detached(async move {
            let _turn = lane.turn.lock().await;
            let finished = engine.finished(&plant, &batch).await?;
            if !finished.pending {
                return Ok(());
            }
            let number = finished.report.revision;
            let entered: Vec<FieldReadings> = finished.readings().cloned().collect();
            let basis = match engine.basis(&finished, number, entered).await? {
                Ok(basis) => basis,
                // They fitted when they were entered; the batch goes before them.
                Err(_) => Basis::Plain(
                    engine.revisions.get(&plant, Some(number)).await?,
                    finished.batch.clone(),
                ),
            };
            engine.remake(&lane, finished.ticket, basis, again).await?;
            Ok(())
        })
        .await?
    }

    /// Keeps field readings of a batch and reconciles it again with them. What
    /// was entered before is not entered twice.
    pub async fn enter(
        self: &Arc<Self>,
        plant: &str,
        batch: &str,
        new: FieldReadings,
        again: Again,
        deed: Deed,
    ) -> Outcome {
        let (engine, lane) = (Arc::clone(self), self.lane(plant));
        let (plant, batch) = (plant.to_owned(), batch.to_owned());
        self.detached(async move {
            let _turn = lane.turn.lock().await;
            let finished = engine.finished(&plant, &batch).await?;
            let number = finished.report.revision;
            let pair = (again.by.clone(), new.clone());
            let is_known = finished.entered.contains(&pair);
            let mut entered: Vec<FieldReadings> = finished.readings().cloned().collect();
            let before: usize = entered.iter().map(|entry| entry.readings.len()).sum();
            if is_known && engine.used(&finished).await? == before {
                return Ok(Arc::new(*finished.report));
            }
            if !is_known {
                if before + new.readings.len() > MOST_FIELD_READINGS {
                    let detail = format!("a batch takes {MOST_FIELD_READINGS} field readings");
                    return Err(Problem::new(Kind::Refused, detail));
                }
                entered.push(new.clone());
            }
            let basis = engine.basis(&finished, number, entered).await?;
            let basis = basis.map_err(|faults| {
                let faults = counted_from(before, faults);
                let detail = format!("{} in the field readings", count(&faults));
                Problem::new(Kind::Unacceptable, detail).with_faults(faults)
            })?;
            if !is_known {
                let json = serde_json::to_string(&new)
                    .map_err(|error| Problem::new(Kind::Internal, error.to_string()))?;
                let (by, at) = (again.by.clone(), again.at);
                let new = NewFieldReading {
                    json,
                    by,
                    at,
                    deed: Some(deed),
                };
                let kept = engine.store.add_field_reading(&plant, &batch, new).await?;
                kept.ok_or_else(|| no_batch(&plant, &batch))?;
            }
            let remade = engine.remake(&lane, finished.ticket, basis, again).await;
            remade.map(|(report, _)| report)
        })
        .await?
    }

    /// The readings that moved a value of the present report most.
    pub async fn influences(
        &self,
        plant: &str,
        batch: &str,
        of: String,
        quantity: Option<String>,
    ) -> Result<Influences, Problem> {
        let finished = self.finished(plant, batch).await?;
        let entered = self.entered_in(&finished).await?;
        let basis = self
            .basis(&finished, finished.report.revision, entered)
            .await?;
        let basis = basis.map_err(|faults| {
            tracing::error!(?faults, "stored field readings are refused");
            Problem::new(Kind::Internal, "stored field readings are refused now")
        })?;
        let by_hand = decisions_of(&finished.report, &finished.batch);
        let _worker = self.workers.acquire().await;
        let found = compute(move || {
            let (compiled, batch) = (basis.compiled(), basis.batch());
            pipeline::influences(compiled, batch, &by_hand, &of, quantity.as_deref())
        })
        .await?;
        found.map_err(|none| match none {
            NoInfluences::Unknown(what) => Problem::new(Kind::NotFound, what),
            none => Problem::new(Kind::Refused, none.to_string()),
        })
    }

    pub(super) async fn finished(&self, plant: &str, batch: &str) -> Result<Finished, Problem> {
        let report = match self.store.batch(plant, batch).await? {
            Some(Stored::Done(report)) => report,
            Some(Stored::Pending(_)) => {
                return Err(Problem::new(
                    Kind::Refused,
                    format!("batch \"{batch}\" is not finished yet"),
                ));
            }
            Some(Stored::Removed(gone)) => return Err(removed(batch, &gone)),
            None => return Err(no_batch(plant, batch)),
        };
        let inbox = self.store.inbox(plant, batch).await?;
        let inbox = inbox.ok_or_else(|| no_batch(plant, batch))?;
        let rows = self.store.field_readings(plant, batch).await?;
        let entered = rows.into_iter().map(|row| {
            let entry = serde_json::from_str(&row.json);
            entry.map(|entry| (row.by, entry)).map_err(|error| {
                tracing::error!(%error, id = row.id, "an unreadable field reading");
                Problem::new(Kind::Internal, "a stored field reading cannot be read")
            })
        });
        Ok(Finished {
            pending: inbox.pending,
            entered: entered.collect::<Result<_, _>>()?,
            batch: parse(inbox.body, inbox.received).await?.1?.batch,
            ticket: inbox.ticket,
            report,
        })
    }

    /// How many field readings the present report was made with.
    async fn used(&self, finished: &Finished) -> Result<usize, Problem> {
        let (plant, number) = (&finished.ticket.plant, finished.report.revision);
        let revision = self.revisions.get(plant, Some(number)).await?;
        let names = names(revision.compiled.plant(), &finished.batch);
        let tags = &finished.report.tags;
        Ok(names.take_while(|name| tags.contains_key(name)).count())
    }

    /// The field readings that the present report was made with.
    pub(super) async fn entered_in(
        &self,
        finished: &Finished,
    ) -> Result<Vec<FieldReadings>, Problem> {
        let used = self.used(finished).await?;
        let mut taken = 0;
        let entered = finished.readings().take_while(|entry| {
            taken += entry.readings.len();
            taken <= used
        });
        Ok(entered.cloned().collect())
    }

    async fn basis(
        &self,
        finished: &Finished,
        number: u32,
        entered: Vec<FieldReadings>,
    ) -> Result<Result<Basis, Vec<Fault>>, Problem> {
        let (plant, batch) = (&finished.ticket.plant, finished.batch.clone());
        let revision = self.revisions.get(plant, Some(number)).await?;
        if entered.is_empty() {
            return Ok(Ok(Basis::Plain(revision, batch)));
        }
        let canonical = self.revisions.stored(plant, Some(number)).await?.canonical;
        compute(move || {
            let extended = Extended::new(&revision.compiled, &canonical, batch, &entered)?;
            Ok(Basis::Extended(Box::new(extended)))
        })
        .await
    }

    /// Reconciles, and puts the result in the place of the present one. To be
    /// called in the plant's turn, so that versions follow one another.
    async fn remake(
        &self,
        lane: &Lane,
        ticket: Ticket,
        basis: Basis,
        again: Again,
    ) -> Result<(Arc<Report>, u32), Problem> {
        let by_hand = self.decisions(lane).await?;
        let worker = self.workers.acquire().await;
        let metrics = Arc::clone(&self.metrics);
        let reconcile = move || pipeline::reconcile_with(basis.compiled(), basis.batch(), &by_hand);
        let report = compute(move || metrics.reconciled(reconcile)).await?;
        drop(worker);
        let report = Arc::new(report);
        let batch = ticket.batch.clone();
        let kept = self
            .store
            .finish_again(ticket, Arc::clone(&report), again)
            .await?;
        let version = kept.ok_or_else(|| {
            Problem::new(
                Kind::Refused,
                format!("batch \"{batch}\" is not finished yet"),
            )
        })?;
        Ok((report, version))
    }
}

/// Faults at the places of the readings of this request; what was entered before
/// was accepted then.
fn counted_from(before: usize, mut faults: Vec<Fault>) -> Vec<Fault> {
    for fault in &mut faults {
        let rest = fault.path.strip_prefix("/readings/");
        let parts = rest.map(|rest| match rest.split_once('/') {
            Some((at, rest)) => (at, format!("/{rest}")),
            None => (rest, String::new()),
        });
        if let Some((at, rest)) = parts
            && let Ok(at) = at.parse::<usize>()
            && at >= before
        {
            fault.path = format!("/readings/{}{rest}", at - before);
        }
    }
    faults
}

/// The decisions by hand that a report was made with.
pub(super) fn decisions_of(report: &Report, batch: &Batch) -> Vec<ByHand> {
    let decisions = report.by_hand.iter().map(|done| ByHand {
        id: done.id,
        tag: done.tag.clone(),
        action: done.offset.map_or(Action::OutOfService, Action::Offset),
        from: batch.start,
        until: None,
        reason: done.reason.clone(),
        by: done.by.clone(),
    });
    decisions.collect()
}

/// The answer where retention has removed a batch's report.
pub(in crate::http) fn removed(batch: &str, removed: &Removed) -> Problem {
    let at = removed.at.format(&Rfc3339).unwrap_or_default();
    let verdict = serde_json::to_value(removed.verdict).unwrap_or_default();
    Problem::new(
        Kind::Gone,
        format!(
            "the report of batch \"{batch}\" and what was sent for it were removed on {at}, as the \
             plant's retention says; kept are its name, digest, period and verdict ({}), and the \
             hourly and daily means",
            verdict.as_str().unwrap_or_default()
        ),
    )
}

/// The answer where a batch is not known.
pub(in crate::http) fn no_batch(plant: &str, batch: &str) -> Problem {
    Problem::new(
        Kind::NotFound,
        format!("there is no batch \"{batch}\" of plant \"{plant}\""),
    )
}
