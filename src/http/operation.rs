//! What an operator's machinery asks.

use super::App;
use super::error::{Kind, Problem};
use crate::store::Health;
use axum::Json;
use axum::extract::State;
use serde::Serialize;
use utoipa::ToSchema;

/// How the service is.
#[derive(Serialize, ToSchema)]
pub(super) struct Status {
    #[schema(example = "ready")]
    status: &'static str,
}

/// Whether the process answers at all.
#[utoipa::path(
    get, path = "/livez", operation_id = "live", tag = "operation",
    responses((status = 200, description = "It does", body = Status))
)]
pub(super) async fn live() -> Json<Status> {
    Json(Status { status: "live" })
}

/// Whether it can take batches: not while its database takes no writes.
#[utoipa::path(
    get, path = "/readyz", operation_id = "ready", tag = "operation",
    responses(
        (status = 200, description = "It can", body = Status),
        (status = 503, description = "It cannot now", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn ready(State(app): State<App>) -> Result<Json<Status>, Problem> {
    match app.store.health().borrow().clone() {
        Health::Ready => Ok(Json(Status { status: "ready" })),
        Health::Unready(reason) | Health::Failed(reason) => {
            Err(Problem::new(Kind::Unavailable, reason))
        }
    }
}
