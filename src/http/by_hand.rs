//! What engineers decide by hand about tags.

use super::App;
use super::access::Who;
use super::body::Permit;
use super::error::{Kind, Problem};
use super::fields::{self, Fields};
use super::params::{Address, Params};
use super::shapes;
use crate::access::{Deed, DeedKind};
use crate::plant::{Action, Plant};
use crate::store::{ByHandRow, Ended, NewByHand};
use axum::Json;
use axum::extract::{Request, State};
use axum::http::{StatusCode, Uri};
use serde::Serialize;
use serde_json::json;
use time::OffsetDateTime;
use time::format_description::well_known::Rfc3339;
use utoipa::ToSchema;

/// Decisions in the order of entering.
#[derive(Serialize, ToSchema)]
pub(super) struct DecisionList {
    decisions: Vec<Decision>,
}

/// A decision about the readings of a tag.
#[derive(Serialize, ToSchema)]
pub(super) struct Decision {
    /// Number, by which reports name it.
    #[schema(example = 4)]
    id: i64,
    /// Tag.
    #[schema(example = "FT-201")]
    tag: String,
    /// What is done to its readings.
    action: shapes::Action,
    /// What is added to them.
    #[serde(skip_serializing_if = "Option::is_none")]
    offset: Option<f64>,
    /// The tag's unit in the current revision; absent where that does not know
    /// the tag.
    #[serde(skip_serializing_if = "Option::is_none")]
    unit: Option<String>,
    /// It holds for batches whose period starts at this time or later, UTC...
    #[serde(with = "time::serde::rfc3339")]
    from: OffsetDateTime,
    /// ...and before this time; absent where nobody has put an end to it.
    #[serde(
        with = "time::serde::rfc3339::option",
        skip_serializing_if = "Option::is_none"
    )]
    until: Option<OffsetDateTime>,
    /// Why.
    reason: String,
    /// Who decided it.
    by: String,
    /// When it was entered, UTC.
    #[serde(with = "time::serde::rfc3339")]
    entered: OffsetDateTime,
    /// Who put the latest end to it.
    #[serde(skip_serializing_if = "Option::is_none")]
    ended: Option<End>,
}

/// Who put an end to a decision.
#[derive(Serialize, ToSchema)]
struct End {
    /// Who.
    by: String,
    /// When they entered it, UTC.
    #[serde(with = "time::serde::rfc3339")]
    at: OffsetDateTime,
}

/// List what was decided by hand about tags.
#[utoipa::path(
    get, path = "/v1/plants/{plant}/by-hand", operation_id = "list_by_hand", tag = "by hand",
    params(
        ("plant" = String, Path, description = "Name of the plant", example = "tarn-mill"),
        ("at" = Option<OffsetDateTime>, Query, description = "Those that hold for a period that starts at this time"),
    ),
    responses(
        (status = 200, description = "The decisions; those that are over too", body = DecisionList),
        (status = 404, description = "There is no such plant", body = Problem, content_type = "application/problem+json"),
        (status = "default", description = "Any other problem", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn list(
    State(app): State<App>,
    Address(plant): Address<String>,
    uri: Uri,
) -> Result<Json<DecisionList>, Problem> {
    let mut params = Params::new(&uri);
    let at = params.time("at");
    params.finish()?;
    let revision = app.engine.revisions().get(&plant, None).await?;
    let rows = app.store.by_hand(&plant, at).await?.into_iter();
    let decisions = rows.map(|row| told(row, revision.compiled.plant()));
    Ok(Json(DecisionList {
        decisions: decisions.collect(),
    }))
}

/// Take a tag out of service, or add a known offset to it.
///
/// For batches whose period starts from `from` and before `until`; without an end
/// until it is ended. The offset is added to the reading, in the tag's unit.
/// Reports made from now on show it; older ones can be reconciled again.
#[utoipa::path(
    post, path = "/v1/plants/{plant}/by-hand", operation_id = "decide_by_hand", tag = "by hand",
    params(("plant" = String, Path, description = "Name of the plant", example = "tarn-mill")),
    request_body = shapes::ByHand,
    responses(
        (status = 201, description = "It stands", body = Decision),
        (status = 404, description = "There is no such plant", body = Problem, content_type = "application/problem+json"),
        (status = 422, description = "The body has faults: all of them", body = Problem, content_type = "application/problem+json"),
        (status = "default", description = "Any other problem", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn decide(
    State(app): State<App>,
    Address(plant): Address<String>,
    who: Who,
    _permit: Permit,
    request: Request,
) -> Result<(StatusCode, Json<Decision>), Problem> {
    Params::new(request.uri()).finish()?;
    let revision = app.engine.revisions().get(&plant, None).await?;
    let mut body = fields::read(&app, request).await?;
    let new = decision(&mut body, revision.compiled.plant(), app.clock.now());
    let mut new = body.finish(new)?;
    new.deed = Some(entered(&who, &plant, &new));
    let row = app.engine.decide(&plant, new).await?;
    let decision = told(row, revision.compiled.plant());
    Ok((StatusCode::CREATED, Json(decision)))
}

fn entered(who: &Who, plant: &str, new: &NewByHand) -> Deed {
    let offset = match new.action {
        Action::OutOfService => None,
        Action::Offset(offset) => Some(offset),
    };
    let time = |time: OffsetDateTime| time.format(&Rfc3339).ok();
    let what = json!({
        "tag": new.tag,
        "offset": offset,
        "from": time(new.from),
        "until": new.until.and_then(time),
        "reason": new.reason,
        "by": new.by,
    });
    who.deed(DeedKind::ByHandEntered, plant, what, new.entered)
}

fn decision(body: &mut Fields, plant: &Plant, entered: OffsetDateTime) -> Option<NewByHand> {
    let tag = body.text("tag");
    if let Some(name) = &tag
        && plant.tags.iter().all(|tag| tag.name != *name)
        && plant.statuses.iter().all(|status| status.name != *name)
    {
        let what = format!("the current revision has no tag \"{name}\"");
        body.fault("tag", what, "name a tag of the plant file");
    }
    let action: Option<shapes::Action> = body.word("action", "out-of-service, offset");
    let has_offset = body.has("offset");
    let offset = body.optional_number("offset");
    let action = match (action, offset) {
        (Some(shapes::Action::OutOfService), None) if !has_offset => Some(Action::OutOfService),
        (Some(shapes::Action::Offset), Some(offset)) => Some(Action::Offset(offset)),
        (Some(shapes::Action::OutOfService), Some(_)) => {
            let mend = "leave it out, or make the action `offset`";
            body.fault("offset", "what is out of service has no offset", mend);
            None
        }
        (Some(shapes::Action::Offset), None) if !has_offset => {
            let mend = "give what is to be added, in the tag's unit";
            body.fault("offset", "the offset is missing", mend);
            None
        }
        // A fault is noted already.
        (_, None) | (None, _) => None,
    };
    let from = body.time("from");
    let until = body.optional_time("until");
    if until.zip(from).is_some_and(|(until, from)| until <= from) {
        body.fault("until", "it ends before it begins", "give a later time");
    }
    let reason = body.text("reason");
    let by = body.by();
    Some(NewByHand {
        tag: tag?,
        action: action?,
        from: from?,
        until,
        reason: reason?,
        by: by?,
        entered,
        deed: None,
    })
}

/// Put an end to a decision.
///
/// At once, or at the time given, before which it goes on. Nothing is deleted:
/// reports that were made with it keep it, and it can be seen that it was there.
#[utoipa::path(
    post, path = "/v1/plants/{plant}/by-hand/{id}/end", operation_id = "end_by_hand", tag = "by hand",
    params(
        ("plant" = String, Path, description = "Name of the plant", example = "tarn-mill"),
        ("id" = i64, Path, description = "Number of the decision", example = 4),
    ),
    request_body = shapes::End,
    responses(
        (status = 200, description = "The decision as it is now", body = Decision),
        (status = 404, description = "There is no such plant or decision", body = Problem, content_type = "application/problem+json"),
        (status = 422, description = "The body has faults: all of them", body = Problem, content_type = "application/problem+json"),
        (status = "default", description = "Any other problem", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn end(
    State(app): State<App>,
    Address((plant, id)): Address<(String, String)>,
    who: Who,
    _permit: Permit,
    request: Request,
) -> Result<Json<Decision>, Problem> {
    Params::new(request.uri()).finish()?;
    let revision = app.engine.revisions().get(&plant, None).await?;
    let none = || {
        let detail = format!("there is no decision \"{id}\" of plant \"{plant}\"");
        Problem::new(Kind::NotFound, detail)
    };
    let number: i64 = id.parse().map_err(|_| none())?;
    let rows = app.store.by_hand(&plant, None).await?;
    let row = rows.iter().find(|row| row.decision.id == number);
    let decision = &row.ok_or_else(none)?.decision;
    let from = decision.from;
    let mut body = fields::read(&app, request).await?;
    let now = app.clock.now();
    // What has not begun yet never holds, and what is over stays over.
    let over = decision.until.map_or(now, |until| until.min(now));
    let until = body.optional_time("until").unwrap_or(over.max(from));
    if until < from {
        body.fault("until", "it ends before it begins", "give a later time");
    }
    let by = body.by();
    let by = body.finish(by)?;
    let what = json!({"until": until.format(&Rfc3339).ok(), "by": by});
    let deed = Some(who.deed(DeedKind::ByHandEnded, &plant, what, now));
    let ended = Ended { by, at: now, deed };
    let row = app
        .engine
        .end_decision(&plant, number, until, ended)
        .await?;
    Ok(Json(told(row.ok_or_else(none)?, revision.compiled.plant())))
}

fn told(row: ByHandRow, plant: &Plant) -> Decision {
    let ByHandRow {
        decision,
        entered,
        ended,
    } = row;
    let (action, offset) = match decision.action {
        Action::OutOfService => (shapes::Action::OutOfService, None),
        Action::Offset(offset) => (shapes::Action::Offset, Some(offset)),
    };
    let mut tags = plant.tags.iter();
    let tag = tags.find(|tag| tag.name == decision.tag);
    Decision {
        id: decision.id,
        unit: tag.map(|tag| tag.unit.symbol.clone()),
        tag: decision.tag,
        action,
        offset,
        from: decision.from,
        until: decision.until,
        reason: decision.reason,
        by: decision.by,
        entered,
        ended: ended.map(|Ended { by, at, .. }| End { by, at }),
    }
}
