//! Accusations: what suspects stood for, what people found, and how often it was
//! right.

use super::App;
use super::access::Who;
use super::alarms::number;
use super::body::Permit;
use super::error::{Kind, Problem, count};
use super::fields::{self, Fields};
use super::headers::next_link;
use super::params::{Address, Params, with_cursor};
use super::shapes;
use crate::access::DeedKind;
use crate::alarms::{Accusation, AsFound, Closing, NotClosed, Record, record};
use crate::plant::{Fault, Severity};
use crate::report::{Cause, Hypothesis};
use crate::store::{AccusationRow, Store};
use axum::Json;
use axum::extract::{Request, State};
use axum::http::Uri;
use axum::response::{IntoResponse, Response};
use serde::Serialize;
use serde_json::json;
use utoipa::ToSchema;

/// Accusations that are read together for the record.
const TOGETHER: usize = 500;

/// Accusations in the order of their numbers.
#[derive(Serialize, ToSchema)]
pub(super) struct AccusationList {
    accusations: Vec<Accusation>,
}

/// List the accusations of a plant.
///
/// Each suspect that stood long enough to raise an alarm made one. It is open
/// until a person says what came of it.
#[utoipa::path(
    get, path = "/v1/plants/{plant}/accusations", operation_id = "list_accusations", tag = "accusations",
    params(
        ("plant" = String, Path, description = "Name of the plant", example = "tarn-mill"),
        ("open" = Option<bool>, Query, description = "Those that are open, or those that are closed"),
        ("limit" = Option<usize>, Query, description = "At most so many, 1 to 1000; 100 unless set", minimum = 1, maximum = 1000),
        ("cursor" = Option<i64>, Query, description = "From the Link header of the answer before", minimum = 0, maximum = 4294967295_i64),
    ),
    responses(
        (status = 200, description = "The accusations", body = AccusationList, headers(("Link" = String, description = "rel=\"next\": where the list goes on"))),
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
    let open = params.read("open", "true or false");
    let limit = params.limit(100, 1000);
    let place = "take it from the Link header of the answer before";
    let after: Option<u32> = params.read("cursor", place);
    params.finish()?;
    app.engine.revisions().know(&plant).await?;
    let after = u64::from(after.unwrap_or(0));
    let rows = app.store.accusations(&plant, open, after, limit + 1);
    let mut rows = rows.await?;
    let more = rows.len() > limit;
    rows.truncate(limit);
    let last = rows.last().filter(|_| more).map(|row| row.id.to_string());
    let accusations = rows.iter().map(parsed).collect::<Result<_, _>>()?;
    let list = Json(AccusationList { accusations });
    Ok(match last {
        Some(last) => ([next_link(&with_cursor(&uri, "cursor", &last))], list).into_response(),
        None => list.into_response(),
    })
}

/// Close an accusation: confirmed, refuted or unknown.
///
/// `cause` names the member of the group that it was; `as_found` is the size that
/// was measured, with the sign and in the unit of the report. A closing is not
/// changed.
#[utoipa::path(
    post, path = "/v1/plants/{plant}/accusations/{id}/closing", operation_id = "close_accusation", tag = "accusations",
    params(
        ("plant" = String, Path, description = "Name of the plant", example = "tarn-mill"),
        ("id" = u64, Path, description = "Number of the accusation", example = 3),
    ),
    request_body = shapes::Closing,
    responses(
        (status = 200, description = "The accusation, closed", body = Accusation),
        (status = 404, description = "There is no such plant or accusation", body = Problem, content_type = "application/problem+json"),
        (status = 409, description = "It was closed before", body = Problem, content_type = "application/problem+json"),
        (status = 422, description = "The body has faults: all of them", body = Problem, content_type = "application/problem+json"),
        (status = "default", description = "Any other problem", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn close(
    State(app): State<App>,
    Address((plant, id)): Address<(String, String)>,
    who: Who,
    _permit: Permit,
    request: Request,
) -> Result<Json<Accusation>, Problem> {
    Params::new(request.uri()).finish()?;
    app.engine.revisions().know(&plant).await?;
    let id = number(&id, "accusation")?;
    let mut body = fields::read(&app, request).await?;
    let closing = closing(&mut body, &app);
    let closing = body.finish(closing)?;
    let what = json!({"accusation": id, "outcome": closing.outcome, "found": closing.found, "by": closing.by});
    let deed = who.deed(DeedKind::AccusationClosed, &plant, what, closing.entered);
    match app.engine.close(&plant, id, closing, deed).await? {
        Some(Ok(closed)) => Ok(Json(closed)),
        Some(Err(not)) => Err(refusal(&not)),
        None => Err(Problem::new(
            Kind::NotFound,
            format!("there is no accusation {id} of plant \"{plant}\""),
        )),
    }
}

fn closing(body: &mut Fields, app: &App) -> Option<Closing> {
    let entered = app.clock.now();
    let outcome = body.word("outcome", "confirmed, refuted, unknown");
    let cause = body.optional_object("cause", |cause| {
        let words = "bias, departure, leak, leak-between, passing, heat-loss";
        let kind: Option<Cause> = cause.word("cause", words);
        let of = cause.text("of");
        let side = cause.optional_text("side");
        Some(Hypothesis {
            cause: kind?,
            of: of?,
            side,
        })
    });
    let as_found = body.optional_object("as_found", |found| {
        let size = found.number("size");
        let uncertainty = found.number("uncertainty");
        if uncertainty.is_some_and(|half_width| half_width < 0.0) {
            found.fault("uncertainty", "it is negative", "give 0 or more");
        }
        let unit = found.text("unit");
        Some(AsFound {
            size: size?,
            uncertainty: uncertainty?,
            unit: unit?,
        })
    });
    let found = body.text("found");
    let at = body.past("at", entered);
    let by = body.by();
    Some(Closing {
        outcome: outcome?,
        cause,
        found: found?,
        as_found,
        at: at?,
        by: by?,
        entered,
    })
}

fn refusal(not: &NotClosed) -> Problem {
    let path = match not {
        NotClosed::Already { .. } => return Problem::new(Kind::Refused, not.to_string()),
        NotClosed::NotMember { .. }
        | NotClosed::RefutedMember { .. }
        | NotClosed::WhichMember { .. } => "/cause",
        NotClosed::Unit { .. } => "/as_found/unit",
        NotClosed::Size => "/as_found",
        NotClosed::Missing(_) => "",
    };
    // The second half of what is said is how to mend it.
    let text = not.to_string();
    let (what, mend) = text.split_once(": ").unwrap_or((&text, "look again"));
    let faults = vec![Fault {
        severity: Severity::Error,
        path: path.to_owned(),
        line: None,
        column: None,
        what: what.to_owned(),
        mend: mend.to_owned(),
    }];
    let detail = format!("{} in the body", count(&faults));
    Problem::new(Kind::Unacceptable, detail).with_faults(faults)
}

/// The record of accusations: how often they were right, and how well sized.
#[utoipa::path(
    get, path = "/v1/plants/{plant}/accusations/record", operation_id = "get_record", tag = "accusations",
    params(("plant" = String, Path, description = "Name of the plant", example = "tarn-mill")),
    responses(
        (status = 200, description = "The record", body = Record),
        (status = 404, description = "There is no such plant", body = Problem, content_type = "application/problem+json"),
        (status = "default", description = "Any other problem", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn get_record(
    State(app): State<App>,
    Address(plant): Address<String>,
    uri: Uri,
) -> Result<Json<Record>, Problem> {
    Params::new(&uri).finish()?;
    app.engine.revisions().know(&plant).await?;
    Ok(Json(record(&all(&*app.store, &plant).await?)))
}

async fn all(store: &dyn Store, plant: &str) -> Result<Vec<Accusation>, Problem> {
    let mut all = Vec::new();
    let mut after = 0;
    loop {
        let rows = store.accusations(plant, None, after, TOGETHER).await?;
        for row in &rows {
            all.push(parsed(row)?);
        }
        match rows.last() {
            Some(last) if rows.len() == TOGETHER => after = last.id,
            _ => return Ok(all),
        }
    }
}

fn parsed(row: &AccusationRow) -> Result<Accusation, Problem> {
    serde_json::from_str(&row.json).map_err(|error| {
        tracing::error!(%error, id = row.id, "an unreadable accusation");
        Problem::new(Kind::Internal, "a stored accusation cannot be read")
    })
}
