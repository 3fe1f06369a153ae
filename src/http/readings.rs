//! Readings as a historian sends them: any number, in any order of time.

use super::App;
use super::batches::NDJSON;
use super::body::{self, Permit, media_type};
use super::engine::{Taken, compute};
use super::error::{Kind, Problem};
use super::params::{Address, Params};
use super::revisions::JSON;
use super::shapes;
use crate::ingest::{self, ReadingsForm};
use axum::Json;
use axum::extract::{Request, State};
use axum::http::{HeaderMap, header};

/// The media type of comma-separated values.
pub(super) const CSV: &str = "text/csv";

/// Most readings of one request: what they take in memory is bounded.
const MOST_READINGS: usize = 200_000;

/// Take readings.
///
/// Single values of tags with their times, in any order, as JSON, NDJSON or CSV
/// with a header line. Each period of the plant becomes a batch when its end and
/// the time to wait for late readings (`[averaging]` of the plant file) have
/// passed. Later readings within the horizon have it made again, as a new version
/// of its report. What is answered is on disk; the same readings again change
/// nothing. A body with faults is refused whole, with all of them; sound readings
/// that cannot be taken are named in the answer.
#[utoipa::path(
    post, path = "/v1/plants/{plant}/readings", operation_id = "post_readings", tag = "readings",
    params(("plant" = String, Path, description = "Name of the plant", example = "tarn-mill")),
    request_body(description = "One reading, a list of them, or one per line", content(
        (shapes::Readings = "application/json"),
        (shapes::SampleLine = "application/x-ndjson"),
        (String = "text/csv", example = "tag,time,value,quality\nFT-201,2026-03-17T10:00:07Z,371.2,good\n"),
    )),
    responses(
        (status = 200, description = "What became of them; all that was taken is on disk", body = Taken),
        (status = 400, description = "Not of the form that its media type says", body = Problem, content_type = "application/problem+json"),
        (status = 404, description = "There is no such plant", body = Problem, content_type = "application/problem+json"),
        (status = 413, description = "Too large, as sent or after decompression", body = Problem, content_type = "application/problem+json"),
        (status = 415, description = "Neither JSON nor NDJSON nor CSV", body = Problem, content_type = "application/problem+json"),
        (status = 422, description = "The readings have faults: all of them; nothing was taken", body = Problem, content_type = "application/problem+json"),
        (status = 429, description = "Too much to do; try again after Retry-After", body = Problem, content_type = "application/problem+json", headers(("Retry-After" = u32, description = "Seconds"))),
        (status = 503, description = "Nothing can be written now; nothing was taken", body = Problem, content_type = "application/problem+json", headers(("Retry-After" = u32, description = "Seconds"))),
        (status = "default", description = "Any other problem", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn post(
    State(app): State<App>,
    Address(plant): Address<String>,
    _permit: Permit,
    request: Request,
) -> Result<Json<Taken>, Problem> {
    Params::new(request.uri()).finish()?;
    app.engine.revisions().know(&plant).await?;
    let form = form(request.headers())?;
    let limit = match form {
        ReadingsForm::Json => app.limits.document,
        ReadingsForm::Ndjson | ReadingsForm::Csv => app.limits.stream,
    };
    let body = body::read(&app, request, limit).await?;
    let now = app.clock.now();
    let readings = compute(move || ingest::readings(&body, form, now)).await??;
    if readings.count > MOST_READINGS {
        let detail =
            format!("more than {MOST_READINGS} readings; send them in parts, or as a backfill");
        return Err(Problem::new(Kind::TooLarge, detail));
    }
    let revision = app.engine.revisions().get(&plant, None).await?;
    Ok(Json(app.engine.take(revision, readings, now).await?))
}

/// The form of readings that a request says it has.
fn form(headers: &HeaderMap) -> Result<ReadingsForm, Problem> {
    match media_type(headers).as_str() {
        JSON => Ok(ReadingsForm::Json),
        NDJSON => Ok(ReadingsForm::Ndjson),
        CSV => Ok(ReadingsForm::Csv),
        _ => Err(Problem::new(
            Kind::UnsupportedMediaType,
            "readings come as application/json, application/x-ndjson or text/csv",
        )
        .with_header(
            header::ACCEPT,
            "application/json, application/x-ndjson, text/csv",
        )),
    }
}
