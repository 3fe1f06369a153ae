//! Plants: taking a plant file, giving it back, listing, assessing.

use super::App;
use super::access::Who;
use super::body::{self, Permit, media_type};
use super::engine::compute;
use super::error::{Kind, Problem, count};
use super::headers::{accepted, encode, entity_tag, has_already, next_link, precondition, value};
use super::params::{Address, Params, with_cursor};
use super::revisions::{JSON, TOML, format_of};
use crate::access::DeedKind;
use crate::plant::{self, Fault, PlantFile, Severity};
use crate::report::Assessment;
use crate::store::{NewPlant, PlantLine, PutOutcome, StoreError, StoredPlant};
use axum::Json;
use axum::extract::{Request, State};
use axum::http::{HeaderMap, StatusCode, Uri, header};
use axum::response::{IntoResponse, Response};
use serde::Serialize;
use serde_json::json;
use time::OffsetDateTime;
use utoipa::ToSchema;

/// An accepted revision of a plant.
#[derive(Serialize, ToSchema)]
pub(super) struct Accepted {
    /// Plant.
    #[schema(example = "tarn-mill")]
    plant: String,
    /// Number of the revision, from 1.
    #[schema(example = 3)]
    revision: u32,
    /// When it was accepted, UTC.
    #[serde(with = "time::serde::rfc3339")]
    created: OffsetDateTime,
    /// What can work but will disappoint.
    warnings: Vec<Fault>,
}

/// Plants in the order of their names.
#[derive(Serialize, ToSchema)]
pub(super) struct PlantList {
    plants: Vec<PlantItem>,
}

/// A plant in a list.
#[derive(Serialize, ToSchema)]
struct PlantItem {
    /// Plant.
    #[schema(example = "tarn-mill")]
    plant: String,
    /// Title for people.
    #[schema(example = "Tarn Mill steam plant")]
    title: String,
    /// Current revision.
    #[schema(example = 3)]
    revision: u32,
    /// When that was accepted, UTC.
    #[serde(with = "time::serde::rfc3339")]
    created: OffsetDateTime,
}

/// Accept a plant file as a new revision.
///
/// The same content again is no new revision. `If-Match` with the entity tag of
/// the revision that was edited guards against overwriting somebody else's;
/// `If-None-Match: *` takes the file only where there is no such plant yet.
#[utoipa::path(
    put, path = "/v1/plants/{plant}", operation_id = "put_plant", tag = "plants",
    params(
        ("plant" = String, Path, description = "Name of the plant, as in the file", example = "tarn-mill"),
        ("If-Match" = Option<String>, Header, description = "Entity tag of the current revision"),
        ("If-None-Match" = Option<String>, Header, description = "`*`: only a new plant"),
    ),
    request_body(description = "The plant file", content(
        (serde_json::Value = "application/json", example = json!({"plant": "tarn-mill", "title": "Tarn Mill steam plant", "streams": {}, "equipment": {}, "tags": {}})),
        (String = "application/toml", example = "plant = \"tarn-mill\"\ntitle = \"Tarn Mill steam plant\"\n"),
    )),
    responses(
        (status = 201, description = "A new revision", body = Accepted, headers(("ETag" = String, description = "Strong entity tag"))),
        (status = 200, description = "Nothing changed", body = Accepted, headers(("ETag" = String, description = "Strong entity tag"))),
        (status = 412, description = "The precondition does not hold", body = Problem, content_type = "application/problem+json"),
        (status = 422, description = "The plant file has faults: all of them", body = Problem, content_type = "application/problem+json"),
        (status = "default", description = "Any other problem", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn put(
    State(app): State<App>,
    Address(name): Address<String>,
    who: Who,
    _permit: Permit,
    request: Request,
) -> Result<Response, Problem> {
    Params::new(request.uri()).finish()?;
    let media_type = media_type(request.headers());
    let format = format_of(&media_type).ok_or_else(wrong_type)?;
    let precondition = precondition(request.headers());
    let bytes = body::read(&app, request, app.limits.document).await?;
    let source = body::text(&bytes)?.to_owned();
    let (source, read) = compute(move || {
        let read = plant::read(&source, format)
            .and_then(|file| Ok((file, plant::canonical_json(&source, format)?)));
        (source, read)
    })
    .await?;
    let (PlantFile { plant, warnings }, canonical) = read.map_err(|faults| refused(faults.0))?;
    if plant.name != name {
        return Err(refused(vec![misnamed(&plant.name, &name)]));
    }
    let received = app.clock.now();
    let what = json!({"title": plant.title});
    let deed = who.deed(DeedKind::PlantPut, &name, what, received);
    let new = NewPlant {
        name,
        title: plant.title,
        media_type,
        source,
        canonical: canonical.to_string(),
        received,
        precondition,
        deed: Some(deed),
    };
    match app.store.put_plant(new).await? {
        PutOutcome::Created(stored) => Ok(answer(StatusCode::CREATED, &stored, warnings)),
        PutOutcome::Unchanged(stored) => Ok(answer(StatusCode::OK, &stored, warnings)),
        PutOutcome::PreconditionFailed => Err(Problem::new(
            Kind::PreconditionFailed,
            "get the current revision, and send its entity tag with what you change",
        )),
    }
}

fn wrong_type() -> Problem {
    Problem::new(
        Kind::UnsupportedMediaType,
        "a plant file comes as application/json or application/toml",
    )
    .with_header(header::ACCEPT, "application/json, application/toml")
}

fn refused(faults: Vec<Fault>) -> Problem {
    Problem::new(
        Kind::Unacceptable,
        format!("{} in the plant file", count(&faults)),
    )
    .with_faults(faults)
}

pub(super) fn misnamed(in_file: &str, in_path: &str) -> Fault {
    Fault {
        severity: Severity::Error,
        path: "/plant".to_owned(),
        line: None,
        column: None,
        what: format!("the file is of plant \"{in_file}\", the address of \"{in_path}\""),
        mend: "give both the same name".to_owned(),
    }
}

fn answer(status: StatusCode, stored: &StoredPlant, warnings: Vec<Fault>) -> Response {
    let location = format!(
        "/v1/plants/{}?revision={}",
        encode(&stored.name),
        stored.revision
    );
    let headers = [
        (header::ETAG, value(&entity_tag(stored, ""))),
        (header::CONTENT_LOCATION, value(&location)),
    ];
    let body = Accepted {
        plant: stored.name.clone(),
        revision: stored.revision,
        created: stored.created,
        warnings,
    };
    (status, headers, Json(body)).into_response()
}

/// Get a plant file.
///
/// As JSON, or as it was sent where that was TOML and `Accept` asks for it.
#[utoipa::path(
    get, path = "/v1/plants/{plant}", operation_id = "get_plant", tag = "plants",
    params(
        ("plant" = String, Path, description = "Name of the plant", example = "tarn-mill"),
        ("revision" = Option<u32>, Query, description = "Number of the revision; the current one where it is left out"),
    ),
    responses(
        (status = 200, description = "The plant file", headers(("ETag" = String, description = "Strong entity tag")), content(
            (serde_json::Value = "application/json"), (String = "application/toml"),
        )),
        (status = 304, description = "Unchanged since the entity tag in If-None-Match"),
        (status = 404, description = "There is no such plant or revision", body = Problem, content_type = "application/problem+json"),
        (status = 406, description = "It was not sent as TOML", body = Problem, content_type = "application/problem+json"),
        (status = "default", description = "Any other problem", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn get(
    State(app): State<App>,
    Address(name): Address<String>,
    uri: Uri,
    headers: HeaderMap,
) -> Result<Response, Problem> {
    let stored = app
        .engine
        .revisions()
        .stored(&name, revision_of(&uri)?)
        .await?;
    let offered: &[&str] = if stored.media_type == TOML {
        &[JSON, TOML]
    } else {
        &[JSON]
    };
    let chosen = accepted(&headers, offered).ok_or_else(|| {
        Problem::new(
            Kind::NotAcceptable,
            format!("it can be had as {}", offered.join(" or ")),
        )
    })?;
    let (suffix, text) = match chosen {
        TOML => ("-toml", stored.source.clone()),
        _ => ("", stored.canonical.clone()),
    };
    let tag = entity_tag(&stored, suffix);
    let common = [(header::ETAG, value(&tag)), (header::VARY, value("accept"))];
    if has_already(&headers, &tag) {
        return Ok((StatusCode::NOT_MODIFIED, common).into_response());
    }
    Ok((common, [(header::CONTENT_TYPE, value(chosen))], text).into_response())
}

fn revision_of(uri: &Uri) -> Result<Option<u32>, Problem> {
    let mut params = Params::new(uri);
    let revision = params.read("revision", "a whole number from 1");
    params.finish()?;
    Ok(revision)
}

/// List the plants.
#[utoipa::path(
    get, path = "/v1/plants", operation_id = "list_plants", tag = "plants",
    params(
        ("limit" = Option<usize>, Query, description = "At most so many, 1 to 1000; 100 unless set", minimum = 1, maximum = 1000),
        ("cursor" = Option<String>, Query, description = "From the Link header of the answer before"),
    ),
    responses(
        (status = 200, description = "Plants in the order of their names", body = PlantList, headers(("Link" = String, description = "rel=\"next\": where the list goes on"))),
        (status = "default", description = "A problem", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn list(State(app): State<App>, who: Who, uri: Uri) -> Result<Response, Problem> {
    let mut params = Params::new(&uri);
    let limit = params.limit(100, 1000);
    let after = params.one("cursor");
    params.finish()?;
    let mut lines = reached(&app, &who, after, limit + 1).await?;
    let more = lines.len() > limit;
    lines.truncate(limit);
    let link = lines
        .last()
        .filter(|_| more)
        .map(|last| [next_link(&with_cursor(&uri, "cursor", &last.name))]);
    let item = |line: PlantLine| PlantItem {
        plant: line.name,
        title: line.title,
        revision: line.revision,
        created: line.created,
    };
    let list = PlantList {
        plants: lines.into_iter().map(item).collect(),
    };
    Ok(match link {
        Some(link) => (link, Json(list)).into_response(),
        None => Json(list).into_response(),
    })
}

/// The plants that somebody reaches, in order, after the one named.
async fn reached(
    app: &App,
    who: &Who,
    mut after: Option<String>,
    limit: usize,
) -> Result<Vec<PlantLine>, StoreError> {
    let mut reached = Vec::new();
    loop {
        let lines = app.store.plants(after.as_deref(), limit).await?;
        let all = lines.len() < limit;
        after = lines.last().map(|line| line.name.clone());
        reached.extend(lines.into_iter().filter(|line| who.reaches(&line.name)));
        if all || reached.len() >= limit {
            reached.truncate(limit);
            return Ok(reached);
        }
    }
}

/// What the tags can and cannot determine, before any batch.
#[utoipa::path(
    get, path = "/v1/plants/{plant}/assessment", operation_id = "assess_plant", tag = "plants",
    params(
        ("plant" = String, Path, description = "Name of the plant", example = "tarn-mill"),
        ("revision" = Option<u32>, Query, description = "Number of the revision; the current one where it is left out"),
    ),
    responses(
        (status = 200, description = "The assessment", body = Assessment),
        (status = 404, description = "There is no such plant or revision", body = Problem, content_type = "application/problem+json"),
        (status = "default", description = "Any other problem", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn assessment(
    State(app): State<App>,
    Address(name): Address<String>,
    uri: Uri,
) -> Result<Json<Assessment>, Problem> {
    let revision = app
        .engine
        .revisions()
        .get(&name, revision_of(&uri)?)
        .await?;
    Ok(Json(app.engine.assess(revision).await?))
}
