//! Reconciling again, what came of it before, and what a report hangs on.

use super::App;
use super::access::Who;
use super::batches::NDJSON;
use super::body::Permit;
use super::engine::{no_batch, removed};
use super::error::{Kind, Problem};
use super::fields::{self, Fields};
use super::observe::RequestId;
use super::params::{Address, Params};
use super::shapes;
use crate::access::DeedKind;
use crate::report::{Influences, Report, Verdict};
use crate::store::{Again, BatchLine, BatchQuery, Cursor, Stored};
use axum::body::{Body, Bytes};
use axum::extract::{Request, State};
use axum::http::{HeaderName, HeaderValue, Uri, header};
use axum::response::{IntoResponse, Response};
use axum::{Extension, Json};
use futures::{Stream, StreamExt};
use serde::Serialize;
use serde_json::json;
use std::convert::Infallible;
use std::sync::Arc;
use time::OffsetDateTime;
use utoipa::ToSchema;

/// Batches of a period that are listed together.
const TOGETHER: usize = 100;

/// The header with the number of a version.
const VERSION: HeaderName = HeaderName::from_static("report-version");

/// The versions of a batch's report, the first one first.
#[derive(Serialize, ToSchema)]
pub(super) struct VersionList {
    versions: Vec<Version>,
}

/// A version of a report.
#[derive(Serialize, ToSchema)]
struct Version {
    /// Number, from 1; the largest is the present one.
    #[schema(example = 2)]
    version: u32,
    /// When it was made again, UTC; absent of the first.
    #[serde(
        with = "time::serde::rfc3339::option",
        skip_serializing_if = "Option::is_none"
    )]
    at: Option<OffsetDateTime>,
    /// Who asked for it.
    #[serde(skip_serializing_if = "Option::is_none")]
    by: Option<String>,
    /// Why.
    #[serde(skip_serializing_if = "Option::is_none")]
    reason: Option<String>,
    /// Verdict.
    verdict: Verdict,
    /// Weighted sum of squared adjustments.
    statistic: Option<f64>,
}

/// A batch of a period that was reconciled again.
#[derive(Serialize, ToSchema)]
pub(super) struct Remade {
    /// The client's name for it.
    batch: String,
    /// Number of its new version.
    #[schema(example = 2)]
    version: u32,
    /// Verdict.
    verdict: Verdict,
    /// Weighted sum of squared adjustments.
    statistic: Option<f64>,
}

/// Reconcile a batch again.
///
/// With what is decided by hand now and with its field readings, under its own
/// revision unless another is named. The new report takes the place of the
/// present one, which stays as an older version. Alarms and accusations are what
/// was seen at the time: this changes none of them.
#[utoipa::path(
    post, path = "/v1/plants/{plant}/batches/{batch}/again", operation_id = "reconcile_again", tag = "again",
    params(
        ("plant" = String, Path, description = "Name of the plant", example = "tarn-mill"),
        ("batch" = String, Path, description = "The client's name for the batch, percent-encoded", example = "2026-03-17T10%3A05Z"),
    ),
    request_body = shapes::Again,
    responses(
        (status = 200, description = "The new report", body = Report, headers(("Report-Version" = u32, description = "Number of the version"))),
        (status = 404, description = "There is no such plant, batch or revision", body = Problem, content_type = "application/problem+json"),
        (status = 409, description = "It has no report yet", body = Problem, content_type = "application/problem+json"),
        (status = 422, description = "The body has faults, or the field readings do not fit the revision", body = Problem, content_type = "application/problem+json"),
        (status = "default", description = "Any other problem", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn batch(
    State(app): State<App>,
    Address((plant, batch)): Address<(String, String)>,
    who: Who,
    _permit: Permit,
    request: Request,
) -> Result<Response, Problem> {
    Params::new(request.uri()).finish()?;
    app.engine.revisions().know(&plant).await?;
    let mut body = fields::read(&app, request).await?;
    let revision = body.optional_count("revision");
    let again = why(&mut body, app.clock.now());
    let again = noted(&who, &plant, body.finish(again)?, revision);
    let made = app.engine.again(&plant, &batch, revision, again).await?;
    let version = [(VERSION, HeaderValue::from(made.1))];
    Ok((version, Json(&*made.0)).into_response())
}

/// Reconcile the finished batches of a period again.
///
/// As one batch, the latest period first; a line of NDJSON for each as it is
/// done: its new version, or a problem. The work goes on for as long as the
/// client reads. A batch that has no report yet is left out: it will be
/// reconciled with what is decided now anyway.
#[utoipa::path(
    post, path = "/v1/plants/{plant}/again", operation_id = "reconcile_period_again", tag = "again",
    params(("plant" = String, Path, description = "Name of the plant", example = "tarn-mill")),
    request_body = shapes::PeriodAgain,
    responses(
        (status = 200, description = "One line for each batch", body = Remade, content_type = "application/x-ndjson"),
        (status = 404, description = "There is no such plant or revision", body = Problem, content_type = "application/problem+json"),
        (status = 422, description = "The body has faults: all of them", body = Problem, content_type = "application/problem+json"),
        (status = "default", description = "Any other problem", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn period(
    State(app): State<App>,
    Address(plant): Address<String>,
    Extension(id): Extension<RequestId>,
    who: Who,
    permit: Permit,
    request: Request,
) -> Result<Response, Problem> {
    Params::new(request.uri()).finish()?;
    app.engine.revisions().know(&plant).await?;
    let mut body = fields::read(&app, request).await?;
    let (from, to) = (body.time("from"), body.time("to"));
    if from.zip(to).is_some_and(|(from, to)| to <= from) {
        body.fault("to", "it ends before it begins", "give a later time");
    }
    let revision = body.optional_count("revision");
    let again = why(&mut body, app.clock.now());
    let (again, from, to) = body.finish(again.zip(from).zip(to).map(|((a, f), t)| (a, f, t)))?;
    let again = noted(&who, &plant, again, revision);
    if let Some(number) = revision {
        app.engine.revisions().stored(&plant, Some(number)).await?;
    }
    let query = BatchQuery {
        plant: plant.clone(),
        from: Some(from),
        to: Some(to),
        verdict: None,
        after: None,
        limit: TOGETHER,
    };
    let over = app.until_over(&who);
    let lines = finished(app.clone(), query).then(move |line| {
        let (app, plant, again, id) = (app.clone(), plant.clone(), again.clone(), id.clone());
        async move {
            let mut json = match remade(&app, &plant, line, revision, again).await {
                Ok(json) => json,
                Err(problem) => problem.at(&id.0).document(),
            };
            json.push(b'\n');
            Ok::<_, Infallible>(Bytes::from(json))
        }
    });
    // The permit goes with the work.
    let lines = lines.inspect(move |_| {
        let _ = &permit;
    });
    let body = Body::from_stream(lines.take_until(over));
    Ok(([(header::CONTENT_TYPE, NDJSON)], body).into_response())
}

/// Finished batches, a page at a time. Each part ends with the problem that keeps
/// the next from being read.
fn finished(app: App, query: BatchQuery) -> impl Stream<Item = Result<BatchLine, Problem>> + Send {
    let pages = futures::stream::unfold(Some((app, query)), |state| async move {
        let (app, mut query) = state?;
        match app.store.batches(query.clone()).await {
            Ok(page) => {
                query.after = page.next;
                let more = page.next.map(|_: Cursor| (app, query));
                let lines = page.items.into_iter();
                let done = lines.filter(|line| line.verdict.is_some()).map(Ok);
                Some((done.collect::<Vec<_>>(), more))
            }
            Err(error) => Some((vec![Err(error.into())], None)),
        }
    });
    pages.flat_map(futures::stream::iter)
}

async fn remade(
    app: &App,
    plant: &str,
    line: Result<BatchLine, Problem>,
    revision: Option<u32>,
    again: Again,
) -> Result<Vec<u8>, Problem> {
    let batch = line?.batch;
    let engine = Arc::clone(&app.engine);
    let made = engine.again(plant, &batch, revision, again).await;
    let (report, version) = made.map_err(|problem| problem.of_batch(&batch))?;
    let line = Remade {
        batch,
        version,
        verdict: report.verdict,
        statistic: report.global_test.as_ref().map(|test| test.statistic),
    };
    serde_json::to_vec(&line).map_err(|error| Problem::new(Kind::Internal, error.to_string()))
}

/// Who asks for it, and why.
fn why(body: &mut Fields, at: OffsetDateTime) -> Option<Again> {
    let (by, reason) = (body.by(), body.text("reason"));
    Some(Again {
        at,
        by: by?,
        reason: reason?,
        deed: None,
    })
}

/// The same with its entry in the audit log.
fn noted(who: &Who, plant: &str, mut again: Again, revision: Option<u32>) -> Again {
    let what = json!({"by": again.by, "reason": again.reason, "revision": revision});
    again.deed = Some(who.deed(DeedKind::ReconciledAgain, plant, what, again.at));
    again
}

/// List the versions of a report.
#[utoipa::path(
    get, path = "/v1/plants/{plant}/batches/{batch}/versions", operation_id = "list_versions", tag = "again",
    params(
        ("plant" = String, Path, description = "Name of the plant", example = "tarn-mill"),
        ("batch" = String, Path, description = "The client's name for the batch, percent-encoded", example = "2026-03-17T10%3A05Z"),
    ),
    responses(
        (status = 200, description = "The first one first; none of a batch that has no report yet", body = VersionList),
        (status = 404, description = "There is no such plant or batch", body = Problem, content_type = "application/problem+json"),
        (status = "default", description = "Any other problem", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn versions(
    State(app): State<App>,
    Address((plant, batch)): Address<(String, String)>,
    uri: Uri,
) -> Result<Json<VersionList>, Problem> {
    Params::new(&uri).finish()?;
    let lines = app.store.versions(&plant, &batch).await?;
    if lines.is_empty() {
        let known = app.store.batch(&plant, &batch).await?;
        known.ok_or_else(|| no_batch(&plant, &batch))?;
    }
    let versions = lines.into_iter().map(|line| {
        let (at, by, reason) = match line.again {
            Some(Again { at, by, reason, .. }) => (Some(at), Some(by), Some(reason)),
            None => (None, None, None),
        };
        Version {
            version: line.version,
            at,
            by,
            reason,
            verdict: line.verdict,
            statistic: line.statistic,
        }
    });
    Ok(Json(VersionList {
        versions: versions.collect(),
    }))
}

/// Get a version of a report.
#[utoipa::path(
    get, path = "/v1/plants/{plant}/batches/{batch}/versions/{version}", operation_id = "get_version", tag = "again",
    params(
        ("plant" = String, Path, description = "Name of the plant", example = "tarn-mill"),
        ("batch" = String, Path, description = "The client's name for the batch, percent-encoded", example = "2026-03-17T10%3A05Z"),
        ("version" = u32, Path, description = "Number of the version, from 1", example = 1),
    ),
    responses(
        (status = 200, description = "The report as it was then", body = Report),
        (status = 404, description = "There is no such plant, batch or version", body = Problem, content_type = "application/problem+json"),
        (status = "default", description = "Any other problem", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn version(
    State(app): State<App>,
    Address((plant, batch, version)): Address<(String, String, String)>,
    uri: Uri,
) -> Result<Json<Report>, Problem> {
    Params::new(&uri).finish()?;
    let found = match version.parse::<u32>() {
        Ok(number) => app.store.version(&plant, &batch, number).await?,
        Err(_) => None,
    };
    if found.is_none()
        && let Some(Stored::Removed(gone)) = app.store.batch(&plant, &batch).await?
    {
        return Err(removed(&batch, &gone));
    }
    found.map(Json).ok_or_else(|| {
        let detail = format!("there is no version \"{version}\" of batch \"{batch}\"");
        Problem::new(Kind::NotFound, detail)
    })
}

/// Get the readings that moved one reconciled value most.
///
/// `of` is a stream or a piece of equipment with one of its quantities
/// (`mass_flow`, `heat`...), or a tag or an assumption without one. Worked out
/// with what the present report was made with.
#[utoipa::path(
    get, path = "/v1/plants/{plant}/batches/{batch}/influences", operation_id = "get_influences", tag = "batches",
    params(
        ("plant" = String, Path, description = "Name of the plant", example = "tarn-mill"),
        ("batch" = String, Path, description = "The client's name for the batch, percent-encoded", example = "2026-03-17T10%3A05Z"),
        ("of" = String, Query, description = "Stream, piece of equipment, tag or assumption", example = "live-steam"),
        ("quantity" = Option<String>, Query, description = "Which of its quantities; none of a tag or an assumption", example = "mass_flow"),
    ),
    responses(
        (status = 200, description = "The readings, the largest share first", body = Influences),
        (status = 404, description = "There is no such plant, batch or value", body = Problem, content_type = "application/problem+json"),
        (status = 409, description = "The report has no such value: not converged, not determined, or not finished yet", body = Problem, content_type = "application/problem+json"),
        (status = "default", description = "Any other problem", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn influences(
    State(app): State<App>,
    Address((plant, batch)): Address<(String, String)>,
    uri: Uri,
) -> Result<Json<Influences>, Problem> {
    let mut params = Params::new(&uri);
    let of = params.one("of");
    let quantity = params.one("quantity");
    if of.is_none() {
        params.fault(
            "of",
            "the value is not named",
            "name a stream, piece of equipment, tag or assumption",
        );
    }
    params.finish()?;
    let of = of.unwrap_or_default();
    let found = app.engine.influences(&plant, &batch, of, quantity).await?;
    Ok(Json(found))
}
