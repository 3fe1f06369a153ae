//! Events of alarms as they happen: server-sent events (WHATWG HTML, "Server-sent
//! events") that resume where a client left off.
//!
//! A stream reads the store, at the pace of its client: whatever is told of an
//! event only wakes it. So nothing is kept in memory for a client that is slow,
//! and nothing can be lost between what was before and what comes next.

use super::App;
use super::access::Who;
use super::engine::Engine;
use super::error::{Kind, Problem, count};
use super::params::{Address, Params};
use crate::alarms::Event;
use crate::plant::{Fault, Severity};
use crate::store::{Store, StoreError, StoredEvent};
use crate::webhook::Notice;
use axum::extract::State;
use axum::http::{HeaderMap, HeaderName, Uri, header};
use axum::response::sse::{self, KeepAlive, Sse};
use axum::response::{IntoResponse, Response};
use futures::{Stream, StreamExt};
use std::convert::Infallible;
use std::sync::Arc;
use std::time::Duration;
use tokio::sync::{OwnedSemaphorePermit, watch};

/// Events that are read together.
const TOGETHER: usize = 64;

/// How often a stream without events shows that it is there.
const SIGN_OF_LIFE: Duration = Duration::from_secs(15);

/// After how long a client that lost its stream should come back.
const COME_BACK: Duration = Duration::from_secs(2);

const LAST_EVENT_ID: HeaderName = HeaderName::from_static("last-event-id");

/// Listen to the events of a plant's alarms.
///
/// Server-sent events: `id` is the number of the event, `event` its kind, `data`
/// the event as JSON. The stream begins with the events after `Last-Event-ID`
/// (or `after`, where the header cannot be set), else with those from now on.
/// Whoever lists the alarms first gives the list's `last_event`. It ends when
/// the service does, and a client that comes back with the last number it has
/// seen misses nothing and gets nothing twice.
#[utoipa::path(
    get, path = "/v1/plants/{plant}/alarms/events", operation_id = "listen_to_alarms", tag = "alarms",
    params(
        ("plant" = String, Path, description = "Name of the plant", example = "tarn-mill"),
        ("Last-Event-ID" = Option<i64>, Header, description = "Number of the last event seen", minimum = 0),
        ("after" = Option<i64>, Query, description = "The same, where the header cannot be set; the header goes before it", minimum = 0),
    ),
    responses(
        (status = 200, description = "The events, for as long as the client listens", body = Notice, content_type = "text/event-stream"),
        (status = 400, description = "No number of an event", body = Problem, content_type = "application/problem+json"),
        (status = 404, description = "There is no such plant", body = Problem, content_type = "application/problem+json"),
        (status = 429, description = "As many clients listen as can", body = Problem, content_type = "application/problem+json", headers(("Retry-After" = u32, description = "Seconds"))),
        (status = "default", description = "Any other problem", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn listen(
    State(app): State<App>,
    Address(plant): Address<String>,
    who: Who,
    uri: Uri,
    headers: HeaderMap,
) -> Result<Response, Problem> {
    let after = starting_point(&uri, &headers)?;
    app.engine.revisions().know(&plant).await?;
    let place = Arc::clone(&app.listeners).try_acquire_owned();
    let place = place
        .map_err(|_| Problem::new(Kind::Overloaded, "as many clients as can be are listening"))?;
    // Before the newest number is read: what comes between wakes it.
    let told = app.engine.told_of(&plant);
    let after = match after {
        Some(after) => after,
        None => app.store.newest_event().await?,
    };
    let reader = Reader {
        store: Arc::clone(&app.store),
        plant,
        after,
        told,
        _place: place,
    };
    let events = reader.events().take_until(app.until_over(&who));
    let alive = KeepAlive::new().interval(SIGN_OF_LIFE).text("alive");
    // Nothing on the way may hold it back or keep it.
    let headers = [(header::CACHE_CONTROL, "no-store")];
    Ok((headers, Sse::new(events).keep_alive(alive)).into_response())
}

/// The number after which to begin, where the client gave one.
fn starting_point(uri: &Uri, headers: &HeaderMap) -> Result<Option<i64>, Problem> {
    let mut params = Params::new(uri);
    let mend = "the number of an event, from 0";
    let whole = |text: &str| text.parse().ok().filter(|&number: &i64| number >= 0);
    let after = params.choose("after", mend, whole);
    params.finish()?;
    let Some(sent) = headers.get(LAST_EVENT_ID) else {
        return Ok(after);
    };
    let number = sent.to_str().ok().and_then(|text| whole(text.trim()));
    number.map(Some).ok_or_else(|| {
        let faults = vec![Fault {
            severity: Severity::Error,
            path: "Last-Event-ID".to_owned(),
            line: None,
            column: None,
            what: "this is no number of an event".to_owned(),
            mend: "send the id of the last event seen, or leave the header out".to_owned(),
        }];
        let detail = format!("{} in the headers", count(&faults));
        Problem::new(Kind::BadParameter, detail).with_faults(faults)
    })
}

/// Where a client is in the events of a plant.
struct Reader {
    store: Arc<dyn Store>,
    plant: String,
    after: i64,
    told: watch::Receiver<u64>,
    _place: OwnedSemaphorePermit,
}

impl Reader {
    /// Events without end, or until they cannot be read: then the client comes
    /// back.
    fn events(self) -> impl Stream<Item = Result<sse::Event, Infallible>> + Send {
        let greeting = sse::Event::default().retry(COME_BACK).comment("listening");
        let parts = futures::stream::unfold(self, |mut reader| async move {
            let part = reader.next_part().await;
            let part = part.inspect_err(|error| tracing::warn!(%error, "events cannot be read"));
            Some((part.ok()?, reader))
        });
        let events = parts.flat_map(futures::stream::iter).map(|e| sent(&e));
        futures::stream::iter([greeting]).chain(events).map(Ok)
    }

    async fn next_part(&mut self) -> Result<Vec<StoredEvent>, StoreError> {
        loop {
            // Before the store is read: what comes meanwhile wakes it again.
            self.told.mark_unchanged();
            let events = self.store.events(&self.plant, self.after, TOGETHER);
            let events = events.await?;
            if let Some(last) = events.last() {
                self.after = last.id;
                return Ok(events);
            }
            if self.told.changed().await.is_err() {
                return Err(StoreError::Unavailable("the service has ended".to_owned()));
            }
        }
    }
}

/// As it goes over the wire; an event that this version cannot read goes as it
/// is.
fn sent(stored: &StoredEvent) -> sse::Event {
    let event = sse::Event::default().id(stored.id.to_string());
    match notice(stored) {
        Ok(notice) => {
            let kind = serde_json::to_value(notice.event.kind).unwrap_or_default();
            let event = event.event(kind.as_str().unwrap_or("changed"));
            match serde_json::to_string(&notice) {
                Ok(json) => event.data(json),
                Err(_) => event.data(&stored.json),
            }
        }
        Err(_) => event.data(&stored.json),
    }
}

/// A stored event with its number.
pub(super) fn notice(stored: &StoredEvent) -> Result<Notice, serde_json::Error> {
    let event: Event = serde_json::from_str(&stored.json)?;
    Ok(Notice {
        id: stored.id,
        event,
        trace: Vec::new(),
    })
}

/// Ends shelvings in time, for as long as it runs.
pub(super) async fn pass_time(engine: Arc<Engine>, tick: Duration) {
    let mut met = false;
    loop {
        if !met {
            let meeting = engine.meet_all().await;
            met = meeting.is_ok();
        }
        engine.pass_time().await;
        tokio::time::sleep(tick).await;
    }
}
