//! The audit log: who changed what, and when.

use super::App;
use super::access::Who;
use super::engine::no_plant;
use super::error::Problem;
use super::headers::next_link;
use super::params::{Params, with_cursor};
use crate::access::{Actor, DeedKind};
use crate::store::DeedRow;
use axum::Json;
use axum::extract::State;
use axum::http::Uri;
use axum::response::{IntoResponse, Response};
use serde::Serialize;
use serde_json::Value;
use time::OffsetDateTime;
use utoipa::ToSchema;

/// Entries of the audit log, the newest first.
#[derive(Serialize, ToSchema)]
pub(super) struct AuditList {
    entries: Vec<Entry>,
}

/// An entry of the audit log.
#[derive(Serialize, ToSchema)]
#[schema(as = AuditEntry)]
struct Entry {
    /// Number, in the order of what was done.
    #[schema(example = 41)]
    id: i64,
    /// When, UTC.
    #[serde(with = "time::serde::rfc3339")]
    at: OffsetDateTime,
    /// Who.
    actor: Actor,
    /// What kind of change.
    kind: DeedKind,
    /// The plant that it changed, if it was one.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(example = "tarn-mill")]
    plant: Option<String>,
    /// What exactly.
    #[schema(value_type = Object, example = json!({"alarm": 7, "act": "acknowledge", "by": "R. Moss"}))]
    what: Value,
}

/// Read the audit log.
///
/// Every change of a plant file, a token, an alarm, an accusation, a decision by
/// hand and a report, the newest first; each was written together with the
/// change itself, and none is ever changed. A token that is bound to plants sees
/// the entries of its plants.
#[utoipa::path(
    get, path = "/v1/audit", operation_id = "read_audit", tag = "operation",
    params(
        ("plant" = Option<String>, Query, description = "Changes of this plant alone"),
        ("limit" = Option<usize>, Query, minimum = 1, maximum = 1000, description = "At most so many, 1 to 1000; 100 unless set"),
        ("cursor" = Option<i64>, Query, description = "From the Link header of the answer before"),
    ),
    responses(
        (status = 200, description = "The entries", body = AuditList, headers(("Link" = String, description = "rel=\"next\": where the list goes on"))),
        (status = 404, description = "There is no such plant", body = Problem, content_type = "application/problem+json"),
        (status = "default", description = "Any other problem", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn list(State(app): State<App>, who: Who, uri: Uri) -> Result<Response, Problem> {
    let mut params = Params::new(&uri);
    let plant = params.one("plant");
    let limit = params.limit(100, 1000);
    let before = params.read(
        "cursor",
        "take it from the Link header of the answer before",
    );
    params.finish()?;
    let named = plant.map(|plant| [plant]);
    if let Some([plant]) = &named {
        if !who.reaches(plant) {
            return Err(no_plant(plant));
        }
        app.engine.revisions().know(plant).await?;
    }
    let plants = named.as_ref().map(|one| &one[..]).or(who.plants());
    let mut rows = app.store.deeds(plants, before, limit + 1).await?;
    let more = rows.len() > limit;
    rows.truncate(limit);
    let last = rows.last().filter(|_| more).map(|row| row.id.to_string());
    let entries = rows.into_iter().map(entry).collect();
    let list = Json(AuditList { entries });
    Ok(match last {
        Some(last) => ([next_link(&with_cursor(&uri, "cursor", &last))], list).into_response(),
        None => list.into_response(),
    })
}

fn entry(row: DeedRow) -> Entry {
    let DeedRow { id, deed } = row;
    Entry {
        id,
        at: deed.at,
        actor: deed.actor,
        kind: deed.kind,
        plant: deed.plant,
        what: deed.what,
    }
}
