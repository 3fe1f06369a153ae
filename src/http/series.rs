//! Numbers over time, as JSON or CSV.

use super::App;
use super::error::{Kind, Problem};
use super::headers::{accepted, next_link, value};
use super::params::{Address, Params, cursor_text, with_cursor};
use super::revisions::JSON;
use crate::report::Verdict;
use crate::store::{Field, Selector, SeriesPage, SeriesQuery};
use axum::Json;
use axum::extract::State;
use axum::http::{HeaderMap, Uri, header};
use axum::response::{IntoResponse, Response};
use serde::Serialize;
use time::OffsetDateTime;
use time::format_description::well_known::Rfc3339;
use utoipa::ToSchema;

pub(super) const CSV: &str = "text/csv";

/// Series that one request may ask for.
const MOST_SERIES: usize = 200;

/// Names of the fields, as in a query.
const FIELDS: [(&str, Field); 7] = [
    ("reconciled", Field::Reconciled),
    ("measured", Field::Measured),
    ("adjustment", Field::Adjustment),
    ("uncertainty", Field::Uncertainty),
    ("uncertainty-measured", Field::UncertaintyMeasured),
    ("redundancy", Field::Redundancy),
    ("standardised", Field::Standardised),
];

/// Quantities of a stream.
const STREAM: &[&str] = &["mass_flow", "pressure", "temperature", "enthalpy"];

/// Stands for the name of a side.
const SIDE: &str = "SIDE";

/// Quantities of a piece of equipment.
const EQUIPMENT: &[&str] = &[
    "heat",
    "work",
    "power",
    "loss",
    "holdup_change",
    "imbalance.energy",
    "imbalance.mass.SIDE",
];

/// Numbers over time: as many values in each series as there are batches.
#[derive(Serialize, ToSchema)]
pub(super) struct SeriesDocument {
    /// Plant.
    plant: String,
    /// Which number.
    #[schema(example = "reconciled")]
    field: &'static str,
    /// The batches, the earliest period first.
    batches: Vec<SeriesBatch>,
    /// One for each thing asked for; one more where its unit changed.
    series: Vec<Series>,
}

/// The batch that the values at one place belong to.
#[derive(Serialize, ToSchema)]
struct SeriesBatch {
    /// The client's name for it.
    batch: String,
    /// Start of the period, UTC.
    #[serde(with = "time::serde::rfc3339")]
    start: OffsetDateTime,
    /// End of the period, UTC.
    #[serde(with = "time::serde::rfc3339")]
    end: OffsetDateTime,
    /// Verdict.
    verdict: Verdict,
}

/// One number over time.
#[derive(Serialize, ToSchema)]
struct Series {
    /// Name as asked for.
    #[schema(example = "FT-201")]
    name: String,
    /// Unit.
    #[schema(example = "t/h")]
    unit: Option<String>,
    /// Values; null where a report has none.
    values: Vec<Option<f64>>,
}

/// Numbers over time.
#[utoipa::path(
    get, path = "/v1/plants/{plant}/series", operation_id = "get_series", tag = "batches",
    params(
        ("plant" = String, Path, description = "Name of the plant", example = "tarn-mill"),
        ("tag" = Option<Vec<String>>, Query, description = "A tag or assumption; may be repeated", example = json!(["FT-201"])),
        ("stream" = Option<Vec<String>>, Query, description = "A quantity of a stream: `.mass_flow`, `.pressure`, `.temperature` or `.enthalpy`; may be repeated", example = json!(["live-steam.mass_flow"])),
        ("equipment" = Option<Vec<String>>, Query, description = "A quantity of a piece of equipment: `.heat`, `.work`, `.power`, `.loss`, `.holdup_change`, `.imbalance.energy`, `.imbalance.mass.SIDE`; may be repeated"),
        ("field" = Option<String>, Query, description = "reconciled (unless set), measured, adjustment, uncertainty, uncertainty-measured, redundancy or standardised", pattern = "^(reconciled|measured|adjustment|uncertainty|uncertainty-measured|redundancy|standardised)$"),
        ("from" = Option<OffsetDateTime>, Query, description = "Periods that start at this time or later"),
        ("to" = Option<OffsetDateTime>, Query, description = "Periods that start before this time"),
        ("format" = Option<String>, Query, description = "`csv` or `json`; otherwise `Accept` decides", pattern = "^(csv|json)$"),
        ("limit" = Option<usize>, Query, description = "At most so many batches, 1 to 50000; 10000 unless set", minimum = 1, maximum = 50000),
        ("cursor" = Option<String>, Query, description = "From the Link header of the answer before", pattern = r"^-?[0-9]{1,18}\.[0-9]{1,18}$"),
    ),
    responses(
        (status = 200, description = "The earliest period first", headers(("Link" = String, description = "rel=\"next\": where it goes on")), content(
            (SeriesDocument = "application/json"),
            (String = "text/csv", example = "batch,start,end,verdict,FT-201 [t/h]\n2026-03-17T10:05Z,2026-03-17T10:00:00Z,2026-03-17T10:05:00Z,consistent,371.2\n"),
        )),
        (status = 404, description = "There is no such plant, tag or quantity", body = Problem, content_type = "application/problem+json"),
        (status = "default", description = "Any other problem", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn get(
    State(app): State<App>,
    Address(plant): Address<String>,
    uri: Uri,
    headers: HeaderMap,
) -> Result<Response, Problem> {
    let (query, field, format) = read(&uri, plant)?;
    let chosen = chosen(format, &headers)?;
    let revision = app.engine.revisions().get(&query.plant, None).await?;
    let plant = query.plant.clone();
    let page = app.store.series(query).await?;
    let columns = page.columns.iter();
    let columns = columns.map(|column| (&column.selector, column.unit.is_some()));
    unknown(columns, revision.compiled.plant())?;
    let next = page
        .next
        .map(|next| [next_link(&with_cursor(&uri, "cursor", &cursor_text(next)))]);
    let mut response = match chosen {
        CSV => (
            [(
                header::CONTENT_TYPE,
                "text/csv; charset=utf-8; header=present",
            )],
            csv(&page)?,
        )
            .into_response(),
        _ => Json(document(plant, field, page)).into_response(),
    };
    response.headers_mut().extend(next.into_iter().flatten());
    response.headers_mut().insert(header::VARY, value("accept"));
    Ok(response)
}

type Reading = (SeriesQuery, &'static str, Option<&'static str>);

fn read(uri: &Uri, plant: String) -> Result<Reading, Problem> {
    let mut params = Params::new(uri);
    let selectors = selectors(&mut params);
    let names: Vec<&str> = FIELDS.iter().map(|(name, _)| *name).collect();
    let mend = format!("one of {}", names.join(", "));
    let field = params.choose("field", &mend, |text| {
        FIELDS.into_iter().find(|(name, _)| *name == text)
    });
    let format = format(&mut params);
    let (name, field) = field.unwrap_or(FIELDS[0]);
    let query = SeriesQuery {
        plant,
        field,
        from: params.time("from"),
        to: params.time("to"),
        after: params.cursor(),
        limit: params.limit(10_000, 50_000),
        selectors,
    };
    params.finish()?;
    enough(&query.selectors)?;
    Ok((query, name, format))
}

/// What is asked for.
pub(super) fn selectors(params: &mut Params) -> Vec<Selector> {
    let mut selectors: Vec<Selector> = params.all("tag").into_iter().map(Selector::Tag).collect();
    for (owner, quantities) in [("stream", STREAM), ("equipment", EQUIPMENT)] {
        for name in params.all(owner) {
            if !is_quantity(&name, quantities) {
                let what = format!("\"{name}\" names no quantity of {owner}");
                let mend = format!(
                    "write NAME.QUANTITY, the quantity one of {}",
                    quantities.join(", ")
                );
                params.fault(owner, what, mend);
            }
            selectors.push(Selector::Quantity(name));
        }
    }
    selectors
}

/// The form that is asked for by name.
pub(super) fn format(params: &mut Params) -> Option<&'static str> {
    params.choose("format", "csv or json", |text| match text {
        "csv" => Some(CSV),
        "json" => Some(JSON),
        _ => None,
    })
}

/// The form that is asked for by name, or else by the headers.
pub(super) fn chosen(
    format: Option<&'static str>,
    headers: &HeaderMap,
) -> Result<&'static str, Problem> {
    format
        .or_else(|| accepted(headers, &[JSON, CSV]))
        .ok_or_else(|| Problem::new(Kind::NotAcceptable, "it can be had as JSON or CSV"))
}

/// Refuses too few and too many.
pub(super) fn enough(selectors: &[Selector]) -> Result<(), Problem> {
    let detail = match selectors.len() {
        0 => "name at least one tag, stream or equipment".to_owned(),
        number if number > MOST_SERIES => format!("{number} series; {MOST_SERIES} are the most"),
        _ => return Ok(()),
    };
    Err(Problem::new(Kind::BadParameter, detail))
}

/// Whether a name ends in one of some quantities; no stream and no equipment
/// has a dot in its own name.
fn is_quantity(name: &str, quantities: &[&str]) -> bool {
    let Some((_, quantity)) = name.split_once('.') else {
        return false;
    };
    quantities
        .iter()
        .any(|known| match known.strip_suffix(SIDE) {
            Some(prefix) => quantity
                .strip_prefix(prefix)
                .is_some_and(|side| !side.is_empty()),
            None => quantity == *known,
        })
}

/// Refuses names that no report (as it is told of each) and no plant file has.
pub(super) fn unknown<'s>(
    columns: impl Iterator<Item = (&'s Selector, bool)>,
    plant: &crate::plant::Plant,
) -> Result<(), Problem> {
    let is_known = |selector: &Selector, reported: bool| {
        reported
            || match selector {
                Selector::Tag(name) => {
                    plant.tags.iter().any(|tag| tag.name == *name)
                        || plant
                            .assumptions
                            .iter()
                            .any(|assumption| assumption.name == *name)
                }
                Selector::Quantity(name) => {
                    let of = name.split('.').next().unwrap_or_default();
                    if is_quantity(name, STREAM) {
                        plant.streams.iter().any(|stream| stream.name == of)
                    } else {
                        plant.equipment.iter().any(|equipment| equipment.name == of)
                    }
                }
            }
    };
    let unknown: Vec<&str> = columns
        .filter(|(selector, reported)| !is_known(selector, *reported))
        .map(|(selector, _)| selector.name())
        .collect();
    if unknown.is_empty() {
        return Ok(());
    }
    Err(Problem::new(
        Kind::NotFound,
        format!("no report has {}", unknown.join(", ")),
    ))
}

fn document(plant: String, field: &'static str, page: SeriesPage) -> SeriesDocument {
    let batches = page.rows.into_iter().map(|row| SeriesBatch {
        batch: row.batch,
        start: row.start,
        end: row.end,
        verdict: row.verdict,
    });
    let series = page.columns.into_iter().map(|column| Series {
        name: column.selector.name().to_owned(),
        unit: column.unit,
        values: column.values,
    });
    SeriesDocument {
        plant,
        field,
        batches: batches.collect(),
        series: series.collect(),
    }
}

fn csv(page: &SeriesPage) -> Result<Vec<u8>, Problem> {
    let broken = |error: String| Problem::new(Kind::Internal, error);
    let time = |time: OffsetDateTime| time.format(&Rfc3339).map_err(|e| broken(e.to_string()));
    let mut writer = csv::Writer::from_writer(Vec::new());
    let mut record: Vec<String> = ["batch", "start", "end", "verdict"]
        .map(str::to_owned)
        .into();
    record.extend(page.columns.iter().map(|column| match &column.unit {
        Some(unit) => format!("{} [{unit}]", column.selector.name()),
        None => column.selector.name().to_owned(),
    }));
    writer
        .write_record(&record)
        .map_err(|e| broken(e.to_string()))?;
    for (place, row) in page.rows.iter().enumerate() {
        let verdict = serde_json::to_value(row.verdict).map_err(|e| broken(e.to_string()))?;
        record.clear();
        record.push(row.batch.clone());
        record.push(time(row.start)?);
        record.push(time(row.end)?);
        record.push(verdict.as_str().unwrap_or_default().to_owned());
        let values = page.columns.iter().map(|column| column.values[place]);
        record.extend(values.map(|value| value.map(|v| v.to_string()).unwrap_or_default()));
        writer
            .write_record(&record)
            .map_err(|e| broken(e.to_string()))?;
    }
    writer.into_inner().map_err(|e| broken(e.to_string()))
}
