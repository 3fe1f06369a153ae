//! Batches: taking one or many, listing, giving a report.

use super::body::{self, Permit, media_type};
use super::engine::{no_batch, removed};
use super::error::{Kind, Problem};
use super::headers::{encode, next_link, prefers_async, value};
use super::observe::RequestId;
use super::params::{Address, Params, cursor_text, with_cursor};
use super::{App, shapes};
use crate::report::{Report, Verdict};
use crate::store::{BatchLine, BatchQuery, Stored};
use axum::body::{Body, Bytes};
use axum::extract::{Request, State};
use axum::http::{HeaderName, StatusCode, Uri, header};
use axum::response::{IntoResponse, Response};
use axum::{Extension, Json};
use futures::StreamExt;
use serde::Serialize;
use std::convert::Infallible;
use std::sync::Arc;
use time::OffsetDateTime;
use utoipa::ToSchema;

/// The media type of a stream of JSON documents, one per line.
pub(super) const NDJSON: &str = "application/x-ndjson";

/// Lines of a stream that are worked on together: enough for the store to
/// commit many at once.
const LINES_TOGETHER: usize = 32;

/// A batch that is durable and not finished.
#[derive(Serialize, ToSchema)]
pub(super) struct Pending {
    /// The client's name for it.
    batch: String,
    /// The revision that it is reconciled with.
    revision: u32,
    /// `accepted`.
    #[schema(example = "accepted")]
    status: &'static str,
    /// Where its report will be.
    #[schema(example = "/v1/plants/tarn-mill/batches/2026-03-17T10%3A05Z")]
    location: String,
}

/// Batches, the latest period first.
#[derive(Serialize, ToSchema)]
pub(super) struct BatchList {
    batches: Vec<BatchItem>,
}

/// A batch in a list.
#[derive(Serialize, ToSchema)]
struct BatchItem {
    /// The client's name for it.
    batch: String,
    /// Start of the period, UTC.
    #[serde(with = "time::serde::rfc3339")]
    start: OffsetDateTime,
    /// End of the period, UTC.
    #[serde(with = "time::serde::rfc3339")]
    end: OffsetDateTime,
    /// The revision that it is reconciled with.
    revision: u32,
    /// Verdict; null while it is not finished.
    verdict: Option<Verdict>,
    /// Weighted sum of squared adjustments.
    statistic: Option<f64>,
    /// Degrees of freedom.
    degrees_of_freedom: Option<u32>,
}

/// Take one batch, or many.
///
/// One batch as JSON is answered with its report; many as NDJSON are answered
/// with one line each, in their order: a report or a problem. What is answered
/// is on disk. The same name with the same content is answered as before.
/// `Prefer: respond-async` answers as soon as the batch is on disk.
#[utoipa::path(
    post, path = "/v1/plants/{plant}/batches", operation_id = "post_batches", tag = "batches",
    params(
        ("plant" = String, Path, description = "Name of the plant", example = "tarn-mill"),
        ("Prefer" = Option<String>, Header, description = "`respond-async`: do not wait for the report"),
    ),
    request_body(description = "One batch, or one per line", content(
        (shapes::Batch = "application/json"), (shapes::Batch = "application/x-ndjson"),
    )),
    responses(
        (status = 200, description = "The report; of a stream one line per batch, a report or a problem", content(
            (Report = "application/json"), (Report = "application/x-ndjson"),
        )),
        (status = 202, description = "Accepted; its report will be at the location", body = Pending, headers(("Location" = String, description = "Where the report will be"))),
        (status = 400, description = "No JSON", body = Problem, content_type = "application/problem+json"),
        (status = 404, description = "There is no such plant", body = Problem, content_type = "application/problem+json"),
        (status = 409, description = "The name is taken by other content", body = Problem, content_type = "application/problem+json"),
        (status = 413, description = "Too large, as sent or after decompression", body = Problem, content_type = "application/problem+json"),
        (status = 415, description = "Neither JSON nor NDJSON", body = Problem, content_type = "application/problem+json"),
        (status = 422, description = "The batch has faults: all of them", body = Problem, content_type = "application/problem+json"),
        (status = 429, description = "Too much to do; try again after Retry-After", body = Problem, content_type = "application/problem+json", headers(("Retry-After" = u32, description = "Seconds"))),
        (status = 503, description = "Nothing can be written now; nothing was accepted", body = Problem, content_type = "application/problem+json", headers(("Retry-After" = u32, description = "Seconds"))),
        (status = "default", description = "Any other problem", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn post(
    State(app): State<App>,
    Address(plant): Address<String>,
    Extension(id): Extension<RequestId>,
    permit: Permit,
    request: Request,
) -> Result<Response, Problem> {
    Params::new(request.uri()).finish()?;
    app.engine.revisions().know(&plant).await?;
    let wait = !prefers_async(request.headers());
    match media_type(request.headers()).as_str() {
        "application/json" => {
            let body = body::read(&app, request, app.limits.document).await?;
            if wait {
                one(&app, &plant, body).await
            } else {
                one_later(&app, &plant, body, permit).await
            }
        }
        NDJSON => {
            let body = body::read(&app, request, app.limits.stream).await?;
            Ok(many(app, plant, body, wait, permit, id))
        }
        _ => Err(Problem::new(
            Kind::UnsupportedMediaType,
            "one batch comes as application/json, many as application/x-ndjson",
        )
        .with_header(header::ACCEPT, "application/json, application/x-ndjson")),
    }
}

async fn one(app: &App, plant: &str, body: Bytes) -> Result<Response, Problem> {
    let accepted = app
        .engine
        .accept(plant, body.into(), app.clock.now())
        .await?;
    let location = location(plant, &accepted.ticket.batch);
    let report = app.engine.finish(accepted).await?;
    Ok((
        [(header::CONTENT_LOCATION, value(&location))],
        Json(&*report),
    )
        .into_response())
}

async fn one_later(
    app: &App,
    plant: &str,
    body: Bytes,
    permit: Permit,
) -> Result<Response, Problem> {
    // Before anything is accepted: what waits in memory is bounded.
    let room = app.engine.room(body.len())?;
    let accepted = app
        .engine
        .accept(plant, body.into(), app.clock.now())
        .await?;
    let pending = pending(plant, &accepted);
    drop(permit);
    app.engine.finish_later(accepted, room);
    let headers = [
        (header::LOCATION, value(&pending.location)),
        (
            HeaderName::from_static("preference-applied"),
            value("respond-async"),
        ),
    ];
    Ok((StatusCode::ACCEPTED, headers, Json(pending)).into_response())
}

fn pending(plant: &str, accepted: &super::engine::Accepted) -> Pending {
    Pending {
        batch: accepted.ticket.batch.clone(),
        revision: accepted.ticket.revision,
        status: "accepted",
        location: location(plant, &accepted.ticket.batch),
    }
}

fn location(plant: &str, batch: &str) -> String {
    format!("/v1/plants/{}/batches/{}", encode(plant), encode(batch))
}

/// Answers a stream line by line. The whole of it has been read before, so that
/// a client that sends everything before it reads anything cannot block us and
/// itself, and a stream that breaks off changes nothing.
fn many(
    app: App,
    plant: String,
    body: Bytes,
    wait: bool,
    permit: Permit,
    id: RequestId,
) -> Response {
    let status = if wait {
        StatusCode::OK
    } else {
        StatusCode::ACCEPTED
    };
    // Later work holds the permit too, until the last line is finished.
    let permit = Arc::new(permit);
    let plant: Arc<str> = plant.into();
    let answers = futures::stream::iter(lines(body)).map(move |(number, line)| {
        let (app, plant, permit, id) = (
            app.clone(),
            Arc::clone(&plant),
            Arc::clone(&permit),
            id.clone(),
        );
        async move {
            let answer = if line.len() > app.limits.document {
                let detail = format!("more than {} bytes in one line", app.limits.document);
                Err(Problem::new(Kind::TooLarge, detail))
            } else if wait {
                line_now(&app, &plant, line).await
            } else {
                line_later(&app, &plant, line, permit).await
            };
            let mut json =
                answer.unwrap_or_else(|problem| problem.on_line(number).at(&id.0).document());
            json.push(b'\n');
            Ok::<_, Infallible>(Bytes::from(json))
        }
    });
    let body = Body::from_stream(answers.buffered(LINES_TOGETHER));
    (status, [(header::CONTENT_TYPE, NDJSON)], body).into_response()
}

/// Lines that are not blank, with their numbers from 1, one at a time: a list of
/// them would be many times as large as a body of nothing but short lines.
fn lines(mut rest: Bytes) -> impl Iterator<Item = (usize, Bytes)> + Send {
    let lines = std::iter::from_fn(move || {
        if rest.is_empty() {
            return None;
        }
        let end = rest.iter().position(|&byte| byte == b'\n');
        let line = rest.split_to(end.map_or(rest.len(), |end| end + 1));
        Some(line.slice_ref(line.trim_ascii()))
    });
    (1..).zip(lines).filter(|(_, line)| !line.is_empty())
}

async fn line_now(app: &App, plant: &str, line: Bytes) -> Result<Vec<u8>, Problem> {
    let accepted = app
        .engine
        .accept(plant, line.into(), app.clock.now())
        .await?;
    let report = app.engine.finish(accepted).await?;
    json(&*report)
}

async fn line_later(
    app: &App,
    plant: &str,
    line: Bytes,
    permit: Arc<Permit>,
) -> Result<Vec<u8>, Problem> {
    // A stream waits for its turn: it is answered at the pace at which batches
    // are finished.
    let room = app.engine.next_room(line.len()).await;
    let accepted = app
        .engine
        .accept(plant, line.into(), app.clock.now())
        .await?;
    let answer = json(&pending(plant, &accepted));
    app.engine.finish_later(accepted, (permit, room));
    answer
}

fn json(value: &impl Serialize) -> Result<Vec<u8>, Problem> {
    serde_json::to_vec(value).map_err(|error| Problem::new(Kind::Internal, error.to_string()))
}

/// List the batches with their verdicts.
#[utoipa::path(
    get, path = "/v1/plants/{plant}/batches", operation_id = "list_batches", tag = "batches",
    params(
        ("plant" = String, Path, description = "Name of the plant", example = "tarn-mill"),
        ("from" = Option<OffsetDateTime>, Query, description = "Periods that start at this time or later"),
        ("to" = Option<OffsetDateTime>, Query, description = "Periods that start before this time"),
        ("verdict" = Option<Verdict>, Query, description = "With this verdict"),
        ("limit" = Option<usize>, Query, description = "At most so many, 1 to 1000; 100 unless set", minimum = 1, maximum = 1000),
        ("cursor" = Option<String>, Query, description = "From the Link header of the answer before", pattern = r"^-?[0-9]{1,18}\.[0-9]{1,18}$"),
    ),
    responses(
        (status = 200, description = "The latest period first", body = BatchList, headers(("Link" = String, description = "rel=\"next\": where the list goes on"))),
        (status = 404, description = "There is no such plant", body = Problem, content_type = "application/problem+json"),
        (status = "default", description = "Any other problem", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn list(
    State(app): State<App>,
    Address(plant): Address<String>,
    uri: Uri,
) -> Result<Response, Problem> {
    let mut params = Params::new(&uri);
    let verdicts = "one of consistent, inconsistent, not-redundant, not-converged, not-running";
    let query = BatchQuery {
        plant: plant.clone(),
        from: params.time("from"),
        to: params.time("to"),
        verdict: params.choose("verdict", verdicts, |text| {
            serde_json::from_value(serde_json::Value::from(text)).ok()
        }),
        after: params.cursor(),
        limit: params.limit(100, 1000),
    };
    params.finish()?;
    app.engine.revisions().know(&plant).await?;
    let page = app.store.batches(query).await?;
    let list = BatchList {
        batches: page.items.into_iter().map(item).collect(),
    };
    Ok(match page.next {
        Some(next) => {
            let target = with_cursor(&uri, "cursor", &cursor_text(next));
            ([next_link(&target)], Json(list)).into_response()
        }
        None => Json(list).into_response(),
    })
}

fn item(line: BatchLine) -> BatchItem {
    BatchItem {
        batch: line.batch,
        start: line.start,
        end: line.end,
        revision: line.revision,
        verdict: line.verdict,
        statistic: line.statistic,
        degrees_of_freedom: line.degrees_of_freedom,
    }
}

/// Get the report of a batch.
#[utoipa::path(
    get, path = "/v1/plants/{plant}/batches/{batch}", operation_id = "get_report", tag = "batches",
    params(
        ("plant" = String, Path, description = "Name of the plant", example = "tarn-mill"),
        ("batch" = String, Path, description = "The client's name for the batch, percent-encoded", example = "2026-03-17T10%3A05Z"),
    ),
    responses(
        (status = 200, description = "The report", body = Report),
        (status = 202, description = "Accepted and not finished", body = Pending, headers(("Retry-After" = u32, description = "Seconds"))),
        (status = 404, description = "There is no such plant or batch", body = Problem, content_type = "application/problem+json"),
        (status = 410, description = "Retention has removed the report; its name, period, verdict and means are kept", body = Problem, content_type = "application/problem+json"),
        (status = "default", description = "Any other problem", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn get(
    State(app): State<App>,
    Address((plant, batch)): Address<(String, String)>,
    uri: Uri,
) -> Result<Response, Problem> {
    Params::new(&uri).finish()?;
    match app.store.batch(&plant, &batch).await? {
        Some(Stored::Done(report)) => Ok(Json(report).into_response()),
        Some(Stored::Pending(ticket)) => {
            let pending = Pending {
                location: location(&plant, &batch),
                batch: ticket.batch,
                revision: ticket.revision,
                status: "accepted",
            };
            let headers = [(header::RETRY_AFTER, value("1"))];
            Ok((StatusCode::ACCEPTED, headers, Json(pending)).into_response())
        }
        Some(Stored::Removed(gone)) => Err(removed(&batch, &gone)),
        None => Err(no_batch(&plant, &batch)),
    }
}
