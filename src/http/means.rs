//! Hourly and daily means, as JSON or CSV.

use super::App;
use super::error::{Kind, Problem};
use super::headers::{next_link, value};
use super::params::{Address, Params, cursor_text, with_cursor};
use super::series::{CSV, chosen, enough, format, selectors, unknown};
use crate::report::Verdict;
use crate::store::{Cursor, Mean, MeansPage, MeansQuery, Resolution};
use axum::Json;
use axum::extract::State;
use axum::http::{HeaderMap, Uri, header};
use axum::response::{IntoResponse, Response};
use serde::Serialize;
use time::OffsetDateTime;
use time::format_description::well_known::Rfc3339;
use utoipa::ToSchema;

/// Widths, as in a query.
const RESOLUTIONS: [(&str, Resolution); 2] =
    [("hourly", Resolution::Hourly), ("daily", Resolution::Daily)];

/// Verdicts, in the order of the columns.
const VERDICTS: [Verdict; 5] = [
    Verdict::Consistent,
    Verdict::Inconsistent,
    Verdict::NotRedundant,
    Verdict::NotConverged,
    Verdict::NotRunning,
];

/// Means over time: as many in each series as there are rows.
#[derive(Serialize, ToSchema)]
pub(super) struct MeansDocument {
    /// Plant.
    plant: String,
    /// Width: `hourly` or `daily`, UTC.
    #[schema(example = "daily")]
    resolution: &'static str,
    /// The hours or days that have finished batches, the earliest first.
    rows: Vec<MeansPeriod>,
    /// One for each thing asked for; one more where its unit changed.
    series: Vec<MeansSeries>,
}

/// An hour or a day.
#[derive(Serialize, ToSchema)]
struct MeansPeriod {
    /// Start, UTC.
    #[serde(with = "time::serde::rfc3339")]
    start: OffsetDateTime,
    /// How many batches had which verdict.
    verdicts: Vec<VerdictCount>,
}

/// Batches of one verdict.
#[derive(Serialize, ToSchema)]
struct VerdictCount {
    /// Verdict.
    verdict: Verdict,
    /// How many.
    batches: u32,
}

/// The means of one quantity.
#[derive(Serialize, ToSchema)]
struct MeansSeries {
    /// Name as asked for.
    #[schema(example = "FT-201")]
    name: String,
    /// Unit.
    #[schema(example = "t/h")]
    unit: Option<String>,
    /// Means; null where no batch had a value.
    means: Vec<Option<MeanDocument>>,
}

/// The mean of one quantity over an hour or a day, over its batches.
#[derive(Serialize, ToSchema)]
struct MeanDocument {
    /// Batches that had a value.
    batches: u32,
    /// Mean of the reconciled values.
    mean: f64,
    /// Their standard deviation; 0 for one.
    deviation: f64,
    /// The least.
    least: f64,
    /// The greatest.
    greatest: f64,
    /// Mean of their uncertainties (95 %); null where no batch had one.
    uncertainty: Option<f64>,
    /// Mean of the readings; of tags only.
    measured: Option<f64>,
    /// Mean of the standardised adjustments, of an imbalance of its standardised values.
    standardised: Option<f64>,
}

impl From<Mean> for MeanDocument {
    fn from(mean: Mean) -> Self {
        MeanDocument {
            batches: mean.batches,
            mean: mean.mean,
            deviation: mean.deviation,
            least: mean.least,
            greatest: mean.greatest,
            uncertainty: mean.uncertainty,
            measured: mean.measured,
            standardised: mean.standardised,
        }
    }
}

/// Get hourly or daily means.
///
/// They are kept for good, also where reports are not. A batch belongs to the
/// hour and the day in which its period starts. Those of the present day change
/// until it is over.
#[utoipa::path(
    get, path = "/v1/plants/{plant}/means", operation_id = "get_means", tag = "batches",
    params(
        ("plant" = String, Path, description = "Name of the plant", example = "tarn-mill"),
        ("resolution" = String, Query, description = "hourly or daily, UTC", example = "daily"),
        ("tag" = Option<Vec<String>>, Query, description = "A tag or assumption; may be repeated", example = json!(["FT-201"])),
        ("stream" = Option<Vec<String>>, Query, description = "A quantity of a stream, as for a series; may be repeated"),
        ("equipment" = Option<Vec<String>>, Query, description = "A quantity of a piece of equipment, as for a series; may be repeated"),
        ("from" = Option<OffsetDateTime>, Query, description = "Hours or days that start at this time or later"),
        ("to" = Option<OffsetDateTime>, Query, description = "Hours or days that start before this time"),
        ("format" = Option<String>, Query, description = "`csv` or `json`; otherwise `Accept` decides", pattern = "^(csv|json)$"),
        ("limit" = Option<usize>, Query, description = "At most so many rows, 1 to 20000; 10000 unless set", minimum = 1, maximum = 20000),
        ("cursor" = Option<String>, Query, description = "From the Link header of the answer before", pattern = r"^-?[0-9]{1,18}\.[0-9]{1,18}$"),
    ),
    responses(
        (status = 200, description = "The earliest first", headers(("Link" = String, description = "rel=\"next\": where it goes on")), content(
            (MeansDocument = "application/json"),
            (String = "text/csv"),
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
    let (query, resolution, format) = read(&uri, plant)?;
    let chosen = chosen(format, &headers)?;
    let revision = app.engine.revisions().get(&query.plant, None).await?;
    let plant = query.plant.clone();
    let page = app.store.means(query).await?;
    let columns = page.columns.iter();
    let columns = columns.map(|column| (&column.selector, column.unit.is_some()));
    unknown(columns, revision.compiled.plant())?;
    let next = page.next.map(|next| {
        let cursor = cursor_text(place(next));
        [next_link(&with_cursor(&uri, "cursor", &cursor))]
    });
    let mut response = match chosen {
        CSV => {
            let kind = "text/csv; charset=utf-8; header=present";
            ([(header::CONTENT_TYPE, kind)], csv(&page)?).into_response()
        }
        _ => Json(document(plant, resolution, page)).into_response(),
    };
    response.headers_mut().extend(next.into_iter().flatten());
    response.headers_mut().insert(header::VARY, value("accept"));
    Ok(response)
}

type Reading = (MeansQuery, &'static str, Option<&'static str>);

fn read(uri: &Uri, plant: String) -> Result<Reading, Problem> {
    let mut params = Params::new(uri);
    let selectors = selectors(&mut params);
    let resolution = params.choose("resolution", "hourly or daily", |text| {
        RESOLUTIONS.into_iter().find(|(name, _)| *name == text)
    });
    let format = format(&mut params);
    let after = params.cursor();
    let query = MeansQuery {
        plant,
        selectors,
        resolution: resolution.map_or(Resolution::Daily, |(_, resolution)| resolution),
        from: params.time("from"),
        to: params.time("to"),
        after: after.and_then(|place| time_of(place.start_ns)),
        limit: params.limit(10_000, 20_000),
    };
    params.finish()?;
    enough(&query.selectors)?;
    let missing = || {
        Problem::new(
            Kind::BadParameter,
            "say `resolution=hourly` or `resolution=daily`",
        )
    };
    let (name, _) = resolution.ok_or_else(missing)?;
    Ok((query, name, format))
}

fn place(time: OffsetDateTime) -> Cursor {
    // It came out of 64 bits.
    let start_ns = i64::try_from(time.unix_timestamp_nanos()).unwrap_or(i64::MAX);
    Cursor { start_ns, id: 0 }
}

fn time_of(nanoseconds: i64) -> Option<OffsetDateTime> {
    OffsetDateTime::from_unix_timestamp_nanos(i128::from(nanoseconds)).ok()
}

fn document(plant: String, resolution: &'static str, page: MeansPage) -> MeansDocument {
    let columns = page.columns.iter().enumerate();
    let series = columns.map(|(at, column)| MeansSeries {
        name: column.selector.name().to_owned(),
        unit: column.unit.clone(),
        means: page
            .rows
            .iter()
            .map(|row| row.means[at].map(Into::into))
            .collect(),
    });
    let series = series.collect();
    let rows = page.rows.into_iter().map(|row| {
        let verdicts = row.verdicts.into_iter();
        MeansPeriod {
            start: row.start,
            verdicts: verdicts
                .map(|(verdict, batches)| VerdictCount { verdict, batches })
                .collect(),
        }
    });
    MeansDocument {
        plant,
        resolution,
        rows: rows.collect(),
        series,
    }
}

/// The numbers of a mean with their names, in the order of the columns; the
/// first has none of its own.
fn numbers(mean: Option<Mean>) -> [(&'static str, bool, Option<f64>); 8] {
    let of = |number: fn(&Mean) -> f64| mean.as_ref().map(number);
    [
        ("", true, of(|mean| mean.mean)),
        (" deviation", true, of(|mean| mean.deviation)),
        (" least", true, of(|mean| mean.least)),
        (" greatest", true, of(|mean| mean.greatest)),
        (" uncertainty", true, mean.and_then(|mean| mean.uncertainty)),
        (" measured", true, mean.and_then(|mean| mean.measured)),
        (
            " standardised",
            false,
            mean.and_then(|mean| mean.standardised),
        ),
        (" batches", false, of(|mean| f64::from(mean.batches))),
    ]
}

fn csv(page: &MeansPage) -> Result<Vec<u8>, Problem> {
    let broken = |error: String| Problem::new(Kind::Internal, error);
    let mut writer = csv::Writer::from_writer(Vec::new());
    let mut record = vec!["start".to_owned()];
    for verdict in VERDICTS {
        let word = serde_json::to_value(verdict).map_err(|e| broken(e.to_string()))?;
        record.push(word.as_str().unwrap_or_default().to_owned());
    }
    for column in &page.columns {
        let name = column.selector.name();
        record.extend(numbers(None).map(|(what, has_unit, _)| {
            let unit = column.unit.as_ref().filter(|_| has_unit);
            let unit = unit.map(|unit| format!(" [{unit}]"));
            format!("{name}{what}{}", unit.unwrap_or_default())
        }));
    }
    writer
        .write_record(&record)
        .map_err(|e| broken(e.to_string()))?;
    for row in &page.rows {
        record.clear();
        record.push(
            row.start
                .format(&Rfc3339)
                .map_err(|e| broken(e.to_string()))?,
        );
        for verdict in VERDICTS {
            let count = row.verdicts.iter().find(|(known, _)| *known == verdict);
            record.push(count.map_or(0, |(_, count)| *count).to_string());
        }
        for mean in &row.means {
            let all = numbers(*mean).into_iter();
            record.extend(all.map(|(_, _, n)| n.map(|n| n.to_string()).unwrap_or_default()));
        }
        writer
            .write_record(&record)
            .map_err(|e| broken(e.to_string()))?;
    }
    writer.into_inner().map_err(|e| broken(e.to_string()))
}
