//! Alarms: listing them, and what people do to them.

use super::App;
use super::access::Who;
use super::body::Permit;
use super::engine::NotActed;
use super::error::{Kind, Problem, count};
use super::fields::{self, Fields};
use super::params::{Address, Params};
use super::shapes;
use crate::access::{Deed, DeedKind};
use crate::alarms::{Act, Alarm, Event, Refused, State as AlarmState, Watch};
use crate::plant::{Fault, Severity};
use axum::Json;
use axum::extract::{Request, State};
use axum::http::Uri;
use serde::Serialize;
use serde_json::{Value, json};
use std::sync::Arc;
use time::format_description::well_known::Rfc3339;
use utoipa::ToSchema;

const STATES: &str = "normal, active-unacknowledged, active-acknowledged, \
                      returned-unacknowledged, shelved, out-of-service";

/// The alarms of a plant, by number.
#[derive(Serialize, ToSchema)]
pub(super) struct AlarmList {
    alarms: Vec<Alarm>,
    /// Events up to this number are in the list: listen to those after it.
    #[schema(example = 218)]
    last_event: i64,
}

/// List the alarms of a plant.
///
/// States are those of ISA-18.2 and IEC 62682. Alarms that are normal again are
/// remembered for a while.
#[utoipa::path(
    get, path = "/v1/plants/{plant}/alarms", operation_id = "list_alarms", tag = "alarms",
    params(
        ("plant" = String, Path, description = "Name of the plant", example = "tarn-mill"),
        ("state" = Option<Vec<AlarmState>>, Query, description = "In this state; may be repeated"),
    ),
    responses(
        (status = 200, description = "The alarms", body = AlarmList),
        (status = 404, description = "There is no such plant", body = Problem, content_type = "application/problem+json"),
        (status = "default", description = "Any other problem", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn list(
    State(app): State<App>,
    Address(plant): Address<String>,
    uri: Uri,
) -> Result<Json<AlarmList>, Problem> {
    let mut params = Params::new(&uri);
    let mut states: Vec<AlarmState> = Vec::new();
    for text in params.all("state") {
        match serde_json::from_value(serde_json::Value::from(text.as_str())) {
            Ok(state) => states.push(state),
            Err(_) => params.fault(
                "state",
                format!("\"{text}\" is no state"),
                format!("one of {STATES}"),
            ),
        }
    }
    params.finish()?;
    app.engine.revisions().know(&plant).await?;
    let (mut alarms, last_event) = app.engine.alarms(&plant).await?;
    alarms.retain(|alarm| states.is_empty() || states.contains(&alarm.state));
    Ok(Json(AlarmList { alarms, last_event }))
}

/// Say that somebody knows of an alarm.
#[utoipa::path(
    post, path = "/v1/plants/{plant}/alarms/{id}/acknowledge", operation_id = "acknowledge_alarm", tag = "alarms",
    params(
        ("plant" = String, Path, description = "Name of the plant", example = "tarn-mill"),
        ("id" = u64, Path, description = "Number of the alarm", example = 7),
    ),
    request_body = shapes::Act,
    responses(
        (status = 200, description = "What happened, with the alarm as it is now", body = Event),
        (status = 404, description = "There is no such plant or alarm", body = Problem, content_type = "application/problem+json"),
        (status = 409, description = "Its state does not allow it; `state` and `allowed` say what is possible", body = Problem, content_type = "application/problem+json"),
        (status = 422, description = "The body has faults: all of them", body = Problem, content_type = "application/problem+json"),
        (status = "default", description = "Any other problem", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn acknowledge(
    State(app): State<App>,
    Address(place): Address<(String, String)>,
    who: Who,
    _permit: Permit,
    request: Request,
) -> Result<Json<Event>, Problem> {
    let (id, body, act) = asked(&app, &place, request).await?;
    let act = body.finish(act)?;
    let deed = deed(&who, &place, "acknowledge", &act, json!({}));
    done(&app, deed, &place.0, move |watch| {
        watch.acknowledge(id, act)
    })
    .await
}

/// Silence an alarm until a time.
///
/// Its condition is followed all the while; at the time, or when it is
/// unshelved, it comes back to where the condition is.
#[utoipa::path(
    post, path = "/v1/plants/{plant}/alarms/{id}/shelve", operation_id = "shelve_alarm", tag = "alarms",
    params(
        ("plant" = String, Path, description = "Name of the plant", example = "tarn-mill"),
        ("id" = u64, Path, description = "Number of the alarm", example = 7),
    ),
    request_body = shapes::Shelve,
    responses(
        (status = 200, description = "What happened, with the alarm as it is now", body = Event),
        (status = 404, description = "There is no such plant or alarm", body = Problem, content_type = "application/problem+json"),
        (status = 409, description = "Its state does not allow it; `state` and `allowed` say what is possible", body = Problem, content_type = "application/problem+json"),
        (status = 422, description = "The body has faults: all of them", body = Problem, content_type = "application/problem+json"),
        (status = "default", description = "Any other problem", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn shelve(
    State(app): State<App>,
    Address(place): Address<(String, String)>,
    who: Who,
    _permit: Permit,
    request: Request,
) -> Result<Json<Event>, Problem> {
    let (id, mut body, act) = asked(&app, &place, request).await?;
    let until = body.time("until");
    if until.is_some_and(|until| until <= app.clock.now()) {
        body.fault("until", "this time is not ahead", "give a later one");
    }
    let (act, until) = body.finish(act.zip(until))?;
    let until_when = until.format(&Rfc3339).unwrap_or_default();
    let deed = deed(&who, &place, "shelve", &act, json!({"until": until_when}));
    done(&app, deed, &place.0, move |watch| {
        watch.shelve(id, until, act)
    })
    .await
}

/// End the silence before its time.
#[utoipa::path(
    post, path = "/v1/plants/{plant}/alarms/{id}/unshelve", operation_id = "unshelve_alarm", tag = "alarms",
    params(
        ("plant" = String, Path, description = "Name of the plant", example = "tarn-mill"),
        ("id" = u64, Path, description = "Number of the alarm", example = 7),
    ),
    request_body = shapes::Act,
    responses(
        (status = 200, description = "What happened, with the alarm as it is now", body = Event),
        (status = 404, description = "There is no such plant or alarm", body = Problem, content_type = "application/problem+json"),
        (status = 409, description = "Its state does not allow it; `state` and `allowed` say what is possible", body = Problem, content_type = "application/problem+json"),
        (status = 422, description = "The body has faults: all of them", body = Problem, content_type = "application/problem+json"),
        (status = "default", description = "Any other problem", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn unshelve(
    State(app): State<App>,
    Address(place): Address<(String, String)>,
    who: Who,
    _permit: Permit,
    request: Request,
) -> Result<Json<Event>, Problem> {
    let (id, body, act) = asked(&app, &place, request).await?;
    let act = body.finish(act)?;
    let deed = deed(&who, &place, "unshelve", &act, json!({}));
    done(&app, deed, &place.0, move |watch| watch.unshelve(id, act)).await
}

/// Take an alarm out of service.
///
/// It stays silent until it is returned to service; its condition is followed.
#[utoipa::path(
    post, path = "/v1/plants/{plant}/alarms/{id}/remove-from-service", operation_id = "remove_alarm_from_service", tag = "alarms",
    params(
        ("plant" = String, Path, description = "Name of the plant", example = "tarn-mill"),
        ("id" = u64, Path, description = "Number of the alarm", example = 7),
    ),
    request_body = shapes::RemoveFromService,
    responses(
        (status = 200, description = "What happened, with the alarm as it is now", body = Event),
        (status = 404, description = "There is no such plant or alarm", body = Problem, content_type = "application/problem+json"),
        (status = 409, description = "Its state does not allow it; `state` and `allowed` say what is possible", body = Problem, content_type = "application/problem+json"),
        (status = 422, description = "The body has faults: all of them", body = Problem, content_type = "application/problem+json"),
        (status = "default", description = "Any other problem", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn remove_from_service(
    State(app): State<App>,
    Address(place): Address<(String, String)>,
    who: Who,
    _permit: Permit,
    request: Request,
) -> Result<Json<Event>, Problem> {
    let (id, mut body, act) = asked(&app, &place, request).await?;
    let reason = body.text("reason");
    let (act, reason) = body.finish(act.zip(reason))?;
    let because = json!({"reason": reason});
    let deed = deed(&who, &place, "remove-from-service", &act, because);
    done(&app, deed, &place.0, move |watch| {
        watch.remove_from_service(id, &reason, act)
    })
    .await
}

/// Put an alarm back into service.
#[utoipa::path(
    post, path = "/v1/plants/{plant}/alarms/{id}/return-to-service", operation_id = "return_alarm_to_service", tag = "alarms",
    params(
        ("plant" = String, Path, description = "Name of the plant", example = "tarn-mill"),
        ("id" = u64, Path, description = "Number of the alarm", example = 7),
    ),
    request_body = shapes::Act,
    responses(
        (status = 200, description = "What happened, with the alarm as it is now", body = Event),
        (status = 404, description = "There is no such plant or alarm", body = Problem, content_type = "application/problem+json"),
        (status = 409, description = "Its state does not allow it; `state` and `allowed` say what is possible", body = Problem, content_type = "application/problem+json"),
        (status = 422, description = "The body has faults: all of them", body = Problem, content_type = "application/problem+json"),
        (status = "default", description = "Any other problem", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn return_to_service(
    State(app): State<App>,
    Address(place): Address<(String, String)>,
    who: Who,
    _permit: Permit,
    request: Request,
) -> Result<Json<Event>, Problem> {
    let (id, body, act) = asked(&app, &place, request).await?;
    let act = body.finish(act)?;
    let deed = deed(&who, &place, "return-to-service", &act, json!({}));
    done(&app, deed, &place.0, move |watch| {
        watch.return_to_service(id, act)
    })
    .await
}

/// What a person asked for: the number of the alarm, the body, and of it who
/// acts.
async fn asked(
    app: &App,
    (plant, id): &(String, String),
    request: Request,
) -> Result<(u64, Fields, Option<Act>), Problem> {
    Params::new(request.uri()).finish()?;
    app.engine.revisions().know(plant).await?;
    let id = number(id, "alarm")?;
    let mut body = fields::read(app, request).await?;
    let note = body.optional_text("note");
    let act = body.by().map(|by| Act {
        by,
        at: app.clock.now(),
        note,
    });
    Ok((id, body, act))
}

/// The act as it goes into the audit log.
fn deed(who: &Who, (plant, id): &(String, String), word: &str, act: &Act, more: Value) -> Deed {
    let mut what = json!({"alarm": id, "act": word, "by": act.by, "note": act.note});
    if let (Value::Object(what), Value::Object(more)) = (&mut what, more) {
        what.extend(more);
    }
    who.deed(DeedKind::AlarmActed, plant, what, act.at)
}

async fn done(
    app: &App,
    deed: Deed,
    plant: &str,
    act: impl FnOnce(&mut Watch) -> Result<Event, Refused> + Send + 'static,
) -> Result<Json<Event>, Problem> {
    let engine = Arc::clone(&app.engine);
    match engine.act(plant, deed, act).await {
        Ok(event) => Ok(Json(event)),
        Err(NotActed::Failed(problem)) => Err(problem),
        Err(NotActed::Refused(refused)) => Err(refusal(&refused)),
    }
}

fn refusal(refused: &Refused) -> Problem {
    let faulty = |path: &str| {
        let faults = vec![Fault {
            severity: Severity::Error,
            path: path.to_owned(),
            line: None,
            column: None,
            what: refused.to_string(),
            mend: "give it otherwise".to_owned(),
        }];
        let detail = format!("{} in the body", count(&faults));
        Problem::new(Kind::Unacceptable, detail).with_faults(faults)
    };
    match refused {
        Refused::NoAlarm(_) => Problem::new(Kind::NotFound, refused.to_string()),
        Refused::State { state, .. } => {
            Problem::new(Kind::Refused, refused.to_string()).with_state(*state)
        }
        Refused::Succeeded { .. } => Problem::new(Kind::Refused, refused.to_string()),
        Refused::Over { .. } => faulty("/until"),
        Refused::Nameless => faulty("/by"),
        Refused::NoReason => faulty("/reason"),
    }
}

/// A number in the address of something.
pub(super) fn number(text: &str, what: &str) -> Result<u64, Problem> {
    // What the database counts with has 63 bits.
    let number = text.parse::<u64>().ok();
    number
        .filter(|&number| i64::try_from(number).is_ok())
        .ok_or_else(|| Problem::new(Kind::NotFound, format!("there is no {what} \"{text}\"")))
}
