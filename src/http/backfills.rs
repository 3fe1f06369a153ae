//! Backfills: a year of history as one long stream that goes on where it was cut.

use super::App;
use super::access::Who;
use super::batches::NDJSON;
use super::body::media_type;
use super::engine::Taken;
use super::error::{Kind, Problem};
use super::headers::next_link;
use super::params::{Address, Params, with_cursor};
use super::readings::CSV;
use super::shapes;
use super::streamed::Streamed;
use crate::access::DeedKind;
use crate::ingest::{LONGEST_NAME, ReadingsForm};
use crate::plant::Fault;
use crate::store::Backfill;
use axum::Json;
use axum::extract::{Request, State};
use axum::http::{HeaderMap, Uri, header};
use axum::response::{IntoResponse, Response};
use serde::Serialize;
use serde_json::json;
use std::sync::Arc;
use time::OffsetDateTime;
use utoipa::ToSchema;

/// Backfills in the order of their names.
#[derive(Serialize, ToSchema)]
pub(super) struct BackfillList {
    backfills: Vec<Progress>,
}

/// How far a backfill has come.
#[derive(Serialize, ToSchema)]
pub(super) struct Progress {
    /// The client's name for it.
    #[schema(example = "2025")]
    backfill: String,
    /// When it was begun, UTC.
    #[serde(with = "time::serde::rfc3339")]
    begun: OffsetDateTime,
    /// When it last came on, UTC.
    #[serde(with = "time::serde::rfc3339")]
    touched: OffsetDateTime,
    /// Its content has been settled to the end.
    complete: bool,
    /// Content is coming in now.
    coming_in: bool,
    /// Bytes of its content, after decompression, that are settled: `from` of
    /// what comes next.
    bytes: u64,
    /// Lines of its content that are settled.
    lines: u64,
    /// Readings that were new.
    new: u64,
    /// Lines and readings that were refused.
    refused: u64,
    /// Periods of the plant that backfills have opened and that are not made
    /// yet.
    periods_open: u64,
}

/// What became of the content of one request.
#[derive(Serialize, ToSchema)]
pub(super) struct Settled {
    /// How far the backfill has come.
    #[serde(flatten)]
    progress: Progress,
    /// What became of the readings of this request.
    readings: Taken,
    /// Lines of this request that are no readings, the first thousand.
    faults: Vec<Fault>,
    /// How many there were.
    faulty: u64,
}

/// Fill in history.
///
/// A stream of readings, one per line, of any length; the horizon of late
/// readings does not hold for them. It is settled block by block: after a cut,
/// `GET` tells how many `bytes` of the content are on disk, and the rest from
/// there on is posted with that number as `from` (a CSV without its header line,
/// which is known). `complete=true` says that the content ends with this request;
/// without it a last line without its end is left for the next. Lines with faults
/// are refused one by one. The periods are made into batches after the end, one
/// at a time and after live ones; they raise no alarms.
#[utoipa::path(
    post, path = "/v1/plants/{plant}/backfills/{backfill}", operation_id = "post_backfill", tag = "readings",
    params(
        ("plant" = String, Path, description = "Name of the plant", example = "tarn-mill"),
        ("backfill" = String, Path, min_length = 1, max_length = 128, description = "The client's name for the backfill", example = "2025"),
        ("from" = Option<u64>, Query, description = "Bytes of the content, after decompression, that came before; 0 unless set"),
        ("complete" = Option<bool>, Query, description = "Whether the content ends with this request; `false` unless set"),
    ),
    request_body(description = "One reading per line", content(
        (shapes::SampleLine = "application/x-ndjson"),
        (String = "text/csv", example = "tag,time,value,quality\nFT-201,2025-03-17T10:00:07Z,371.2,good\n"),
    )),
    responses(
        (status = 200, description = "It is settled", body = Settled),
        (status = 400, description = "Not of the form that its media type says, or broken off", body = Problem, content_type = "application/problem+json"),
        (status = 404, description = "There is no such plant", body = Problem, content_type = "application/problem+json"),
        (status = 408, description = "Nothing came for too long; what came is settled", body = Problem, content_type = "application/problem+json"),
        (status = 409, description = "Another number of bytes is settled, it is complete, or content is coming in already", body = Problem, content_type = "application/problem+json"),
        (status = 415, description = "Neither NDJSON nor CSV", body = Problem, content_type = "application/problem+json"),
        (status = 422, description = "No line of the beginning is a reading", body = Problem, content_type = "application/problem+json"),
        (status = 429, description = "Too much to do; go on after Retry-After", body = Problem, content_type = "application/problem+json", headers(("Retry-After" = u32, description = "Seconds"))),
        (status = 503, description = "Nothing can be written now", body = Problem, content_type = "application/problem+json", headers(("Retry-After" = u32, description = "Seconds"))),
        (status = "default", description = "Any other problem", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn post(
    State(app): State<App>,
    Address((plant, name)): Address<(String, String)>,
    who: Who,
    request: Request,
) -> Result<Json<Settled>, Problem> {
    let mut params = Params::new(request.uri());
    let from = params.read("from", "a whole number of bytes");
    let complete = params.read("complete", "true or false").unwrap_or(false);
    if name.chars().count() > LONGEST_NAME {
        let mend = format!("1 to {LONGEST_NAME} characters");
        params.fault("backfill", "this name is too long", mend);
    }
    params.finish()?;
    app.engine.revisions().know(&plant).await?;
    let form = form(request.headers())?;
    let place = Arc::clone(&app.backfills).try_acquire_owned();
    let place = place.map_err(|_| {
        Problem::new(
            Kind::Overloaded,
            "as many backfills as can be are coming in",
        )
    })?;
    let body = Streamed::new(&app, request, app.until_over(&who))?;
    let now = app.clock.now();
    let what = json!({ "backfill": name });
    let deed = who.deed(DeedKind::BackfillStarted, &plant, what, now);
    let from = from.unwrap_or(0);
    let filling = app.engine.begin_filling(&plant, &name, from, form, deed);
    let filling = filling.await?;
    let filled = app.engine.fill(filling, body, complete, place).await?;
    Ok(Json(Settled {
        progress: progress(&app, &plant, &name).await?,
        readings: filled.taken,
        faults: filled.faults,
        faulty: filled.faulty,
    }))
}

fn form(headers: &HeaderMap) -> Result<ReadingsForm, Problem> {
    match media_type(headers).as_str() {
        NDJSON => Ok(ReadingsForm::Ndjson),
        CSV => Ok(ReadingsForm::Csv),
        _ => Err(Problem::new(
            Kind::UnsupportedMediaType,
            "a backfill comes as application/x-ndjson or text/csv",
        )
        .with_header(header::ACCEPT, "application/x-ndjson, text/csv")),
    }
}

/// Tell how far a backfill has come.
#[utoipa::path(
    get, path = "/v1/plants/{plant}/backfills/{backfill}", operation_id = "get_backfill", tag = "readings",
    params(
        ("plant" = String, Path, description = "Name of the plant", example = "tarn-mill"),
        ("backfill" = String, Path, min_length = 1, max_length = 128, description = "The client's name for the backfill", example = "2025"),
    ),
    responses(
        (status = 200, description = "How far", body = Progress),
        (status = 404, description = "There is no such plant or backfill", body = Problem, content_type = "application/problem+json"),
        (status = "default", description = "Any other problem", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn get(
    State(app): State<App>,
    Address((plant, name)): Address<(String, String)>,
    uri: Uri,
) -> Result<Json<Progress>, Problem> {
    Params::new(&uri).finish()?;
    Ok(Json(progress(&app, &plant, &name).await?))
}

/// List the backfills of a plant.
#[utoipa::path(
    get, path = "/v1/plants/{plant}/backfills", operation_id = "list_backfills", tag = "readings",
    params(
        ("plant" = String, Path, description = "Name of the plant", example = "tarn-mill"),
        ("limit" = Option<usize>, Query, minimum = 1, maximum = 1000, description = "At most so many, 1 to 1000; 100 unless set"),
        ("after" = Option<String>, Query, description = "From the Link header of the answer before"),
    ),
    responses(
        (status = 200, description = "In the order of their names", body = BackfillList, headers(("Link" = String, description = "rel=\"next\": where the list goes on"))),
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
    let limit = params.limit(100, 1000);
    let after = params.one("after");
    params.finish()?;
    app.engine.revisions().know(&plant).await?;
    let mut found = (app.store)
        .backfills(&plant, after.as_deref(), limit + 1)
        .await?;
    let more = found.len() > limit;
    found.truncate(limit);
    let next = found.last().filter(|_| more);
    let next = next.map(|last| next_link(&with_cursor(&uri, "after", &last.mark.name)));
    let backfills = found.into_iter().map(|one| as_told(&app, &plant, one));
    let list = BackfillList {
        backfills: backfills.collect(),
    };
    Ok(match next {
        Some(next) => ([next], Json(list)).into_response(),
        None => Json(list).into_response(),
    })
}

async fn progress(app: &App, plant: &str, name: &str) -> Result<Progress, Problem> {
    app.engine.revisions().know(plant).await?;
    let found = app.store.backfill(plant, name).await?;
    let found = found.ok_or_else(|| {
        let detail = format!("there is no backfill \"{name}\" of plant \"{plant}\"");
        Problem::new(Kind::NotFound, detail)
    })?;
    Ok(as_told(app, plant, found))
}

fn as_told(app: &App, plant: &str, backfill: Backfill) -> Progress {
    Progress {
        coming_in: app.engine.is_filling(plant, &backfill.mark.name),
        backfill: backfill.mark.name,
        begun: backfill.begun,
        touched: backfill.touched,
        complete: backfill.complete,
        bytes: backfill.mark.bytes,
        lines: backfill.mark.lines,
        new: backfill.new,
        refused: backfill.mark.refused,
        periods_open: backfill.periods_open,
    }
}
