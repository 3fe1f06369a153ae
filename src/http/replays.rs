//! Replays: what another revision, or a plant file that is not accepted yet,
//! would have made of a past period.

use super::App;
use super::access::Who;
use super::body::Permit;
use super::engine::{CANDIDATE, compute};
use super::error::{Kind, Problem};
use super::fields::{self, Fields};
use super::headers::{encode, next_link, value};
use super::params::{Address, Params, cursor_text, with_cursor};
use super::plants::misnamed;
use super::revisions::{JSON, TOML};
use super::shapes;
use crate::access::{Deed, DeedKind};
use crate::comparison::{BatchChange, Comparison, Pair};
use crate::plant::{self, Format};
use crate::report::{Hypothesis, Report, Verdict};
use crate::store::{NewReplay, ReplayRow, ReplayState, ReplayWith, ReplayedBatch};
use axum::Json;
use axum::extract::{Request, State};
use axum::http::{StatusCode, Uri, header};
use axum::response::{IntoResponse, Response};
use serde::Serialize;
use serde_json::{Value, json};
use time::OffsetDateTime;
use time::format_description::well_known::Rfc3339;
use utoipa::ToSchema;

/// Replays, the newest first.
#[derive(Serialize, ToSchema)]
pub(super) struct ReplayList {
    replays: Vec<Replay>,
}

/// A replay.
#[derive(Serialize, ToSchema)]
pub(super) struct Replay {
    /// Its number.
    #[schema(example = 7)]
    id: i64,
    /// Periods that start at this time or later, UTC.
    #[serde(with = "time::serde::rfc3339")]
    from: OffsetDateTime,
    /// Periods that start before this time, UTC.
    #[serde(with = "time::serde::rfc3339")]
    to: OffsetDateTime,
    /// The revision that it is made with; null of a plant file that is not
    /// accepted.
    revision: Option<u32>,
    /// Who asked for it.
    by: String,
    /// Why.
    reason: String,
    /// When, UTC.
    #[serde(with = "time::serde::rfc3339")]
    at: OffsetDateTime,
    /// Where it is.
    state: Stage,
    /// Batches that the period has.
    batches: u64,
    /// Batches that have been made.
    made: u64,
    /// When it ended, UTC.
    #[serde(
        with = "time::serde::rfc3339::option",
        skip_serializing_if = "Option::is_none"
    )]
    ended: Option<OffsetDateTime>,
}

/// Where a replay is.
#[derive(Serialize, ToSchema)]
#[serde(rename_all = "kebab-case")]
enum Stage {
    /// It goes on.
    Running,
    /// Every batch has been made.
    Done,
    /// Somebody ended it; what was made stays.
    Cancelled,
}

/// A replay and what has come of it so far.
#[derive(Serialize, ToSchema)]
pub(super) struct Compared {
    replay: Replay,
    comparison: Comparison,
}

/// Batches of a replay, the earliest period first.
#[derive(Serialize, ToSchema)]
pub(super) struct ReplayedList {
    batches: Vec<Replayed>,
}

/// A batch as it stands and as it would be.
#[derive(Serialize, ToSchema)]
struct Replayed {
    /// What changed most.
    #[serde(flatten)]
    change: BatchChange,
    /// As it stands.
    standing: Side,
    /// Under the replay.
    replayed: Side,
}

/// One side of a replayed batch.
#[derive(Serialize, ToSchema)]
struct Side {
    /// Revision; null of a plant file that is not accepted.
    revision: Option<u32>,
    /// Verdict.
    verdict: Verdict,
    /// Weighted sum of squared adjustments.
    statistic: Option<f64>,
    /// Degrees of freedom.
    degrees_of_freedom: Option<usize>,
    /// The likeliest of each group of suspects.
    suspects: Vec<Hypothesis>,
}

/// Replay a past period.
///
/// Its finished batches are reconciled under another revision, or under a plant
/// file that is not accepted, with the readings, decisions by hand and field
/// readings that their reports were made with. It is worked off after the live
/// batches and goes on after a restart. What comes of it stands beside the
/// results: nothing of them changes.
#[utoipa::path(
    post, path = "/v1/plants/{plant}/replays", operation_id = "start_replay", tag = "replays",
    params(("plant" = String, Path, description = "Name of the plant", example = "tarn-mill")),
    request_body = shapes::NewReplay,
    responses(
        (status = 202, description = "It will be made; its progress is at the location", body = Replay, headers(("Location" = String, description = "Where its progress is"))),
        (status = 404, description = "There is no such plant or revision", body = Problem, content_type = "application/problem+json"),
        (status = 422, description = "The body or the plant file has faults: all of them", body = Problem, content_type = "application/problem+json"),
        (status = 429, description = "As many replays as can be go on", body = Problem, content_type = "application/problem+json", headers(("Retry-After" = u32, description = "Seconds"))),
        (status = "default", description = "Any other problem", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn start(
    State(app): State<App>,
    Address(plant): Address<String>,
    who: Who,
    _permit: Permit,
    request: Request,
) -> Result<Response, Problem> {
    Params::new(request.uri()).finish()?;
    app.engine.revisions().know(&plant).await?;
    let mut body = fields::read(&app, request).await?;
    let (from, to) = (body.time("from"), body.time("to"));
    if from.zip(to).is_some_and(|(from, to)| to <= from) {
        body.fault("to", "it ends before it begins", "give a later time");
    }
    let (by, reason) = (body.by(), body.text("reason"));
    let with = with(&mut body, &plant).await?;
    let new = || {
        Some(NewReplay {
            plant: plant.clone(),
            from: from?,
            to: to?,
            with: with?,
            by: by?,
            reason: reason?,
            at: app.clock.now(),
            deed: None,
        })
    };
    let new = new();
    let mut new = body.finish(new)?;
    new.deed = Some(deed(&who, &new));
    if let ReplayWith::Revision(number) = new.with {
        app.engine.revisions().stored(&plant, Some(number)).await?;
    }
    let row = app.engine.begin_replay(new).await?;
    let location = format!("/v1/plants/{}/replays/{}", encode(&plant), row.id);
    let headers = [(header::LOCATION, value(&location))];
    Ok((StatusCode::ACCEPTED, headers, Json(as_told(row))).into_response())
}

fn deed(who: &Who, new: &NewReplay) -> Deed {
    let revision = match new.with {
        ReplayWith::Revision(number) => Some(number),
        ReplayWith::Candidate { .. } => None,
    };
    let time = |time: OffsetDateTime| time.format(&Rfc3339).unwrap_or_default();
    let what = json!({
        "from": time(new.from),
        "to": time(new.to),
        "revision": revision,
        "by": new.by,
        "reason": new.reason,
    });
    who.deed(DeedKind::ReplayStarted, &new.plant, what, new.at)
}

/// What the replay is made with: one of the two.
async fn with(body: &mut Fields, plant: &str) -> Result<Option<ReplayWith>, Problem> {
    let is_both = body.has("revision") && body.has("plant_file");
    if is_both || !(body.has("revision") || body.has("plant_file")) {
        let mend = "give either a revision or a plant_file";
        body.fault("revision", "one of the two is needed", mend);
    }
    let revision = body.optional_count("revision").map(ReplayWith::Revision);
    if !body.has("plant_file") {
        return Ok(revision);
    }
    let Some(file) = body.any("plant_file") else {
        return Ok(None);
    };
    let (media_type, source) = match file {
        Value::String(toml) => (TOML, toml),
        json => (JSON, json.to_string()),
    };
    let format = if media_type == TOML {
        Format::Toml
    } else {
        Format::Json
    };
    let read = compute(move || (plant::read(&source, format), source)).await?;
    let faults = match read.0 {
        Ok(file) if file.plant.name == plant => Vec::new(),
        Ok(file) => vec![misnamed(&file.plant.name, plant)],
        Err(faults) => faults.0,
    };
    if faults.is_empty() {
        return Ok(Some(ReplayWith::Candidate {
            media_type: media_type.to_owned(),
            source: read.1,
        }));
    }
    body.faults_in("plant_file", faults);
    Ok(None)
}

/// List the replays of a plant.
#[utoipa::path(
    get, path = "/v1/plants/{plant}/replays", operation_id = "list_replays", tag = "replays",
    params(
        ("plant" = String, Path, description = "Name of the plant", example = "tarn-mill"),
        ("limit" = Option<usize>, Query, minimum = 1, maximum = 1000, description = "At most so many, 1 to 1000; 100 unless set"),
        ("before" = Option<i64>, Query, description = "From the Link header of the answer before"),
    ),
    responses(
        (status = 200, description = "The newest first", body = ReplayList, headers(("Link" = String, description = "rel=\"next\": where the list goes on"))),
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
    let before = params.read("before", "the number of a replay");
    params.finish()?;
    app.engine.revisions().know(&plant).await?;
    let mut rows = app.store.replays(&plant, before, limit + 1).await?;
    let more = rows.len() > limit;
    rows.truncate(limit);
    let next = rows.last().filter(|_| more).map(|last| last.id.to_string());
    let next = next.map(|last| next_link(&with_cursor(&uri, "before", &last)));
    let list = ReplayList {
        replays: rows.into_iter().map(as_told).collect(),
    };
    Ok(match next {
        Some(next) => ([next], Json(list)).into_response(),
        None => Json(list).into_response(),
    })
}

/// Tell how far a replay has come.
#[utoipa::path(
    get, path = "/v1/plants/{plant}/replays/{replay}", operation_id = "get_replay", tag = "replays",
    params(
        ("plant" = String, Path, description = "Name of the plant", example = "tarn-mill"),
        ("replay" = i64, Path, description = "Number of the replay", example = 7),
    ),
    responses(
        (status = 200, description = "How far", body = Replay),
        (status = 404, description = "There is no such plant or replay", body = Problem, content_type = "application/problem+json"),
        (status = "default", description = "Any other problem", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn get(
    State(app): State<App>,
    Address((plant, id)): Address<(String, String)>,
    uri: Uri,
) -> Result<Json<Replay>, Problem> {
    Params::new(&uri).finish()?;
    Ok(Json(as_told(find(&app, &plant, &id).await?)))
}

/// Cancel a replay.
///
/// What has been made stays. A replay that has ended stays as it is.
#[utoipa::path(
    delete, path = "/v1/plants/{plant}/replays/{replay}", operation_id = "cancel_replay", tag = "replays",
    params(
        ("plant" = String, Path, description = "Name of the plant", example = "tarn-mill"),
        ("replay" = i64, Path, description = "Number of the replay", example = 7),
    ),
    responses(
        (status = 200, description = "As it is now", body = Replay),
        (status = 404, description = "There is no such plant or replay", body = Problem, content_type = "application/problem+json"),
        (status = "default", description = "Any other problem", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn cancel(
    State(app): State<App>,
    Address((plant, id)): Address<(String, String)>,
    who: Who,
    uri: Uri,
) -> Result<Json<Replay>, Problem> {
    Params::new(&uri).finish()?;
    let row = find(&app, &plant, &id).await?;
    let (state, now) = (ReplayState::Cancelled, app.clock.now());
    let what = json!({ "replay": row.id });
    let deed = who.deed(DeedKind::ReplayCancelled, &plant, what, now);
    let ended = app.store.end_replay(row.id, state, now, Some(deed)).await?;
    Ok(Json(as_told(ended.unwrap_or(row))))
}

/// Compare a replay with what stands.
///
/// Over the batches that have been made so far: verdicts before and after,
/// suspects that come and go, and what moves.
#[utoipa::path(
    get, path = "/v1/plants/{plant}/replays/{replay}/comparison", operation_id = "compare_replay", tag = "replays",
    params(
        ("plant" = String, Path, description = "Name of the plant", example = "tarn-mill"),
        ("replay" = i64, Path, description = "Number of the replay", example = 7),
    ),
    responses(
        (status = 200, description = "What changes", body = Compared),
        (status = 404, description = "There is no such plant or replay", body = Problem, content_type = "application/problem+json"),
        (status = "default", description = "Any other problem", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn comparison(
    State(app): State<App>,
    Address((plant, id)): Address<(String, String)>,
    uri: Uri,
) -> Result<Json<Compared>, Problem> {
    Params::new(&uri).finish()?;
    let row = find(&app, &plant, &id).await?;
    let comparison = app.engine.comparison(row.id).await?;
    Ok(Json(Compared {
        replay: as_told(row),
        comparison,
    }))
}

/// List the batches of a replay, side by side with what stands.
#[utoipa::path(
    get, path = "/v1/plants/{plant}/replays/{replay}/batches", operation_id = "list_replayed", tag = "replays",
    params(
        ("plant" = String, Path, description = "Name of the plant", example = "tarn-mill"),
        ("replay" = i64, Path, description = "Number of the replay", example = 7),
        ("limit" = Option<usize>, Query, minimum = 1, maximum = 100, description = "At most so many, 1 to 100; 100 unless set"),
        ("cursor" = Option<String>, Query, pattern = r"^-?[0-9]{1,18}\.[0-9]{1,18}$", description = "From the Link header of the answer before"),
    ),
    responses(
        (status = 200, description = "The earliest period first", body = ReplayedList, headers(("Link" = String, description = "rel=\"next\": where the list goes on"))),
        (status = 404, description = "There is no such plant or replay", body = Problem, content_type = "application/problem+json"),
        (status = "default", description = "Any other problem", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn batches(
    State(app): State<App>,
    Address((plant, id)): Address<(String, String)>,
    uri: Uri,
) -> Result<Response, Problem> {
    let mut params = Params::new(&uri);
    let (limit, after) = (params.limit(100, 100), params.cursor());
    params.finish()?;
    let row = find(&app, &plant, &id).await?;
    let page = app.store.replayed(row.id, after, limit).await?;
    let next = page.next;
    let list = compute(move || ReplayedList {
        batches: page.items.iter().map(side_by_side).collect(),
    });
    let list = list.await?;
    Ok(match next {
        Some(next) => {
            let target = with_cursor(&uri, "cursor", &cursor_text(next));
            ([next_link(&target)], Json(list)).into_response()
        }
        None => Json(list).into_response(),
    })
}

async fn find(app: &App, plant: &str, id: &str) -> Result<ReplayRow, Problem> {
    app.engine.revisions().know(plant).await?;
    let row = match id.parse() {
        Ok(id) => app.store.replay(plant, id).await?,
        Err(_) => None,
    };
    row.ok_or_else(|| {
        let detail = format!("there is no replay \"{id}\" of plant \"{plant}\"");
        Problem::new(Kind::NotFound, detail)
    })
}

fn as_told(row: ReplayRow) -> Replay {
    Replay {
        id: row.id,
        from: row.new.from,
        to: row.new.to,
        revision: match row.new.with {
            ReplayWith::Revision(number) => Some(number),
            ReplayWith::Candidate { .. } => None,
        },
        by: row.new.by,
        reason: row.new.reason,
        at: row.new.at,
        state: match row.state {
            ReplayState::Running => Stage::Running,
            ReplayState::Done => Stage::Done,
            ReplayState::Cancelled => Stage::Cancelled,
        },
        batches: row.batches,
        made: row.made,
        ended: row.ended,
    }
}

fn side_by_side(replayed: &ReplayedBatch) -> Replayed {
    let pair = Pair {
        before: &replayed.before,
        after: &replayed.after,
    };
    Replayed {
        change: pair.change(),
        standing: side(&replayed.before),
        replayed: side(&replayed.after),
    }
}

fn side(report: &Report) -> Side {
    let suspects = report.suspects.iter();
    let likeliest = suspects.filter_map(|suspect| suspect.group.first());
    Side {
        revision: Some(report.revision).filter(|&number| number != CANDIDATE),
        verdict: report.verdict,
        statistic: report.global_test.map(|test| test.statistic),
        degrees_of_freedom: report.global_test.map(|test| test.degrees_of_freedom),
        suspects: likeliest.map(|who| who.hypothesis.clone()).collect(),
    }
}
