//! Readings taken in the field for one batch.

use super::App;
use super::access::Who;
use super::body::Permit;
use super::engine::{FieldReading, FieldReadings, no_batch};
use super::error::{Kind, Problem};
use super::fields::{self, Fields};
use super::params::{Address, Params};
use super::shapes;
use crate::access::DeedKind;
use crate::report::Report;
use crate::store::Again;
use axum::Json;
use axum::extract::{Request, State};
use axum::http::Uri;
use axum::response::{IntoResponse, Response};
use serde::Serialize;
use serde_json::json;
use time::OffsetDateTime;
use utoipa::ToSchema;

/// Most readings that are entered together.
const MOST: usize = 20;

/// Why a report was made again with field readings.
const REASON: &str = "field reading";

/// Field readings in the order of entering.
#[derive(Serialize, ToSchema)]
pub(super) struct FieldList {
    entries: Vec<Entry>,
}

/// Field readings that were entered together.
#[derive(Serialize, ToSchema)]
struct Entry {
    /// Number.
    #[schema(example = 12)]
    id: i64,
    /// Who entered them.
    by: String,
    /// When they were entered, UTC.
    #[serde(with = "time::serde::rfc3339")]
    entered: OffsetDateTime,
    /// What was read, and when.
    #[serde(flatten)]
    readings: FieldReadings,
}

/// Enter readings that were taken in the field for a batch.
///
/// Each is one more tag of this batch alone, `field-1`, `field-2`, ... in the
/// order of entering, held to the rules of the plant file's tags; the batch is
/// reconciled again with all of them. A reading that tells the members of a
/// suspect's group apart makes the group smaller: the report's `checks` say which
/// would. Entered twice, they count once. Alarms are not changed.
#[utoipa::path(
    post, path = "/v1/plants/{plant}/batches/{batch}/field-readings", operation_id = "enter_field_readings", tag = "again",
    params(
        ("plant" = String, Path, description = "Name of the plant", example = "tarn-mill"),
        ("batch" = String, Path, description = "The client's name for the batch, percent-encoded", example = "2026-03-17T10%3A05Z"),
    ),
    request_body = shapes::FieldEntry,
    responses(
        (status = 200, description = "The new report", body = Report),
        (status = 404, description = "There is no such plant or batch", body = Problem, content_type = "application/problem+json"),
        (status = 409, description = "It has no report yet, or as many field readings as it takes", body = Problem, content_type = "application/problem+json"),
        (status = 422, description = "The readings have faults: all of them", body = Problem, content_type = "application/problem+json"),
        (status = "default", description = "Any other problem", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn enter(
    State(app): State<App>,
    Address((plant, batch)): Address<(String, String)>,
    who: Who,
    _permit: Permit,
    request: Request,
) -> Result<Response, Problem> {
    Params::new(request.uri()).finish()?;
    app.engine.revisions().know(&plant).await?;
    let mut body = fields::read(&app, request).await?;
    let now = app.clock.now();
    let (by, at) = (body.by(), body.past("at", now));
    let readings = body.list("readings", MOST, reading);
    let entry = at.zip(readings).zip(by);
    let ((at, readings), by) = body.finish(entry)?;
    let what = json!({"by": by, "reason": REASON});
    let again = Again {
        deed: Some(who.deed(DeedKind::ReconciledAgain, &plant, what, now)),
        at: now,
        by,
        reason: REASON.to_owned(),
    };
    let new = FieldReadings { at, readings };
    let what = json!({"by": again.by, "readings": new});
    let deed = who.deed(DeedKind::FieldReadingEntered, &plant, what, now);
    let report = app.engine.enter(&plant, &batch, new, again, deed).await?;
    Ok(Json(&*report).into_response())
}

fn reading(fields: &mut Fields) -> Option<FieldReading> {
    let measures = fields.text("measures");
    let of = fields.text("of");
    let value = fields.number("value");
    let unit = fields.text("unit");
    let reference = fields.optional_text("reference");
    let uncertainty = fields.any("uncertainty");
    Some(FieldReading {
        measures: measures?,
        of: of?,
        value: value?,
        unit: unit?,
        reference,
        uncertainty: uncertainty?,
    })
}

/// List the field readings of a batch.
#[utoipa::path(
    get, path = "/v1/plants/{plant}/batches/{batch}/field-readings", operation_id = "list_field_readings", tag = "again",
    params(
        ("plant" = String, Path, description = "Name of the plant", example = "tarn-mill"),
        ("batch" = String, Path, description = "The client's name for the batch, percent-encoded", example = "2026-03-17T10%3A05Z"),
    ),
    responses(
        (status = 200, description = "In the order of entering", body = FieldList),
        (status = 404, description = "There is no such plant or batch", body = Problem, content_type = "application/problem+json"),
        (status = "default", description = "Any other problem", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn list(
    State(app): State<App>,
    Address((plant, batch)): Address<(String, String)>,
    uri: Uri,
) -> Result<Json<FieldList>, Problem> {
    Params::new(&uri).finish()?;
    let rows = app.store.field_readings(&plant, &batch).await?;
    if rows.is_empty() {
        let known = app.store.inbox(&plant, &batch).await?;
        known.ok_or_else(|| no_batch(&plant, &batch))?;
    }
    let entries = rows.into_iter().map(|row| {
        let readings = serde_json::from_str(&row.json).map_err(|error| {
            tracing::error!(%error, id = row.id, "an unreadable field reading");
            Problem::new(Kind::Internal, "a stored field reading cannot be read")
        });
        Ok(Entry {
            id: row.id,
            by: row.by,
            entered: row.at,
            readings: readings?,
        })
    });
    Ok(Json(FieldList {
        entries: entries.collect::<Result<_, Problem>>()?,
    }))
}
