//! What a client sends, described for the OpenAPI document.
//!
//! Nothing is read with these types: `ingest` reads batches, and tells every
//! fault at once where a derived reader stops at the first. A name that an answer
//! has too is another in the document (`as`): it has one space of names.

use serde::{Deserialize, Serialize};
use time::OffsetDateTime;
use utoipa::ToSchema;

/// A batch: the readings of one period.
#[derive(Deserialize, ToSchema)]
#[schema(example = json!({
    "batch": "2026-03-17T10:05Z",
    "start": "2026-03-17T10:00:00Z",
    "end": "2026-03-17T10:05:00Z",
    "readings": [
        {"tag": "FT-201", "value": 371.2, "quality": "good"},
        {"tag": "TT-201", "value": null, "quality": "bad"},
    ],
}))]
#[serde(deny_unknown_fields)]
pub struct Batch {
    /// The client's own name for it, unique in the plant.
    #[schema(min_length = 1, max_length = 128)]
    pub batch: String,
    /// Start of the period, RFC 3339 with offset.
    #[serde(with = "time::serde::rfc3339")]
    pub start: OffsetDateTime,
    /// End of the period, after its start and not in the future.
    #[serde(with = "time::serde::rfc3339")]
    pub end: OffsetDateTime,
    /// At most one per tag; unknown tags are listed in the answer.
    pub readings: Vec<Reading>,
    /// Whether the plant was steady, where the client has judged it.
    #[serde(default)]
    pub steadiness: Option<Steadiness>,
}

/// Whether the plant was steady over the period.
#[derive(Deserialize, ToSchema)]
#[schema(as = BatchSteadiness)]
#[serde(deny_unknown_fields)]
pub struct Steadiness {
    /// It was.
    pub steady: bool,
    /// Tags that were judged.
    pub judged: u32,
    /// Those of them that were not steady.
    #[serde(default)]
    pub unsteady: Option<Vec<String>>,
}

/// What a reading was averaged from.
#[derive(Deserialize, ToSchema)]
#[schema(as = ReadingAveraged)]
#[serde(deny_unknown_fields)]
pub struct Averaged {
    /// Samples that the period had.
    pub samples: u32,
    /// Samples that the mean uses.
    pub used: u32,
    /// Part of the period that good samples cover.
    #[schema(minimum = 0, maximum = 1)]
    pub covered: f64,
    /// Standard uncertainty of the mean from the scatter within the period, in the
    /// tag's unit; it adds to the tag's own as root of squares.
    #[schema(minimum = 0)]
    pub scatter: Option<f64>,
    /// Whether the tag was steady.
    pub steady: Option<bool>,
    /// How many samples had what.
    pub flags: Option<Flags>,
    /// Why the value must not be used: it is left out, with this reason.
    #[schema(min_length = 1, max_length = 500)]
    pub unused: Option<String>,
}

/// What was found among samples, and how often.
#[derive(Deserialize, ToSchema)]
#[serde(deny_unknown_fields, rename_all = "kebab-case")]
pub struct Flags {
    /// Of bad quality.
    pub bad: Option<u32>,
    /// Of uncertain quality.
    pub uncertain: Option<u32>,
    /// Outside the range of the tag.
    pub out_of_range: Option<u32>,
    /// Standing out from their neighbours.
    pub spike: Option<u32>,
    /// Older than a value may be.
    pub stale: Option<u32>,
    /// Unmoved for longer than the signal can stand still.
    pub stuck: Option<u32>,
}

/// One value of one tag.
#[derive(Deserialize, ToSchema)]
#[serde(deny_unknown_fields)]
pub struct Reading {
    /// Name of the tag.
    #[schema(min_length = 1, max_length = 128)]
    pub tag: String,
    /// Value in the tag's own unit; null only with bad quality.
    pub value: Option<f64>,
    /// Quality; good where it is left out.
    #[serde(default)]
    pub quality: Quality,
    /// Time of the value, RFC 3339 with offset; kept with the batch.
    #[serde(default, with = "time::serde::rfc3339::option")]
    pub time: Option<OffsetDateTime>,
    /// What it was averaged from, where the client has averaged it.
    #[serde(default)]
    pub averaged: Option<Averaged>,
}

/// Quality of a reading.
#[derive(Deserialize, ToSchema)]
#[serde(untagged)]
pub enum Quality {
    /// In words.
    Grade(Grade),
    /// As OPC UA has it.
    Code(StatusCode),
}

impl Default for Quality {
    fn default() -> Self {
        Quality::Grade(Grade::Good)
    }
}

/// OPC UA status code: an unsigned number of 32 bits.
// Labelled as 64 bits wide: 32 would be described as signed, which excludes the
// bad codes, whose highest bit is set.
#[derive(Deserialize, ToSchema)]
#[schema(minimum = 0, maximum = 4_294_967_295_i64)]
pub struct StatusCode(pub i64);

/// Quality in words.
#[derive(Deserialize, ToSchema)]
#[serde(rename_all = "kebab-case")]
pub enum Grade {
    /// Used.
    Good,
    /// Used with a wider uncertainty.
    Uncertain,
    /// Kept and not used.
    Bad,
}

/// What a person does to an alarm.
#[derive(Deserialize, ToSchema)]
#[serde(deny_unknown_fields)]
#[schema(as = AlarmAct)]
pub struct Act {
    /// Who.
    #[schema(min_length = 1, max_length = 128, example = "R. Moss")]
    pub by: String,
    /// What they remark.
    #[schema(max_length = 2000)]
    pub note: Option<String>,
}

/// The same for a time.
#[derive(Deserialize, ToSchema)]
#[serde(deny_unknown_fields)]
pub struct Shelve {
    /// Who.
    #[schema(min_length = 1, max_length = 128, example = "R. Moss")]
    pub by: String,
    /// When it ends, RFC 3339 with offset, in the future.
    #[serde(with = "time::serde::rfc3339")]
    pub until: OffsetDateTime,
    /// What they remark.
    #[schema(max_length = 2000)]
    pub note: Option<String>,
}

/// The same with a reason.
#[derive(Deserialize, ToSchema)]
#[serde(deny_unknown_fields)]
pub struct RemoveFromService {
    /// Who.
    #[schema(min_length = 1, max_length = 128, example = "R. Moss")]
    pub by: String,
    /// Why.
    #[schema(
        min_length = 1,
        max_length = 2000,
        example = "The line is drained until May"
    )]
    pub reason: String,
    /// What they remark.
    #[schema(max_length = 2000)]
    pub note: Option<String>,
}

/// What came of an accusation.
#[derive(Deserialize, ToSchema)]
#[serde(deny_unknown_fields)]
#[schema(as = NewClosing)]
pub struct Closing {
    /// What it came to.
    pub outcome: crate::alarms::Outcome,
    /// Which member of the group it was.
    pub cause: Option<crate::report::Hypothesis>,
    /// What was found: an as-found calibration, an inspection.
    #[schema(
        min_length = 1,
        max_length = 2000,
        example = "Reads 3.2 t/h high at 350 t/h"
    )]
    pub found: String,
    /// The size that was measured.
    pub as_found: Option<crate::alarms::AsFound>,
    /// When it was found, RFC 3339 with offset, not in the future.
    #[serde(with = "time::serde::rfc3339")]
    pub at: OffsetDateTime,
    /// Who closes it.
    #[schema(min_length = 1, max_length = 128, example = "R. Moss")]
    pub by: String,
}

/// A decision about a tag.
#[derive(Deserialize, ToSchema)]
#[serde(deny_unknown_fields)]
pub struct ByHand {
    /// A tag of the current revision.
    #[schema(min_length = 1, max_length = 2000, example = "FT-201")]
    pub tag: String,
    /// What is done to its readings.
    pub action: Action,
    /// What is added to them, in the tag's unit; of action `offset` alone.
    #[schema(example = -3.2)]
    pub offset: Option<f64>,
    /// For periods that start at this time or later, RFC 3339 with offset...
    #[serde(with = "time::serde::rfc3339")]
    pub from: OffsetDateTime,
    /// ...and before this time; without it until it is ended.
    #[serde(default, with = "time::serde::rfc3339::option")]
    pub until: Option<OffsetDateTime>,
    /// Why.
    #[schema(
        min_length = 1,
        max_length = 2000,
        example = "Calibration of 12 March: reads high"
    )]
    pub reason: String,
    /// Who decides it.
    #[schema(min_length = 1, max_length = 128, example = "R. Moss")]
    pub by: String,
}

/// What is done to the readings of a tag.
#[derive(Clone, Copy, Deserialize, Serialize, ToSchema)]
#[serde(rename_all = "kebab-case")]
#[schema(as = ByHandAction)]
pub enum Action {
    /// They are kept and not used.
    OutOfService,
    /// A known amount is added to them.
    Offset,
}

/// An end put to a decision.
#[derive(Deserialize, ToSchema)]
#[serde(deny_unknown_fields)]
#[schema(as = ByHandEnd)]
pub struct End {
    /// Who.
    #[schema(min_length = 1, max_length = 128, example = "R. Moss")]
    pub by: String,
    /// When it ends, RFC 3339 with offset; at once where it is left out.
    #[serde(default, with = "time::serde::rfc3339::option")]
    pub until: Option<OffsetDateTime>,
}

/// Why a batch is to be reconciled again.
#[derive(Deserialize, ToSchema)]
#[serde(deny_unknown_fields)]
pub struct Again {
    /// Who asks for it.
    #[schema(min_length = 1, max_length = 128, example = "R. Moss")]
    pub by: String,
    /// Why.
    #[schema(min_length = 1, max_length = 2000, example = "FT-201 was recalibrated")]
    pub reason: String,
    /// With this revision; the batch's own where it is left out.
    #[schema(minimum = 1)]
    pub revision: Option<u32>,
}

/// The same for a period.
#[derive(Deserialize, ToSchema)]
#[serde(deny_unknown_fields)]
pub struct PeriodAgain {
    /// Periods that start at this time or later, RFC 3339 with offset...
    #[serde(with = "time::serde::rfc3339")]
    pub from: OffsetDateTime,
    /// ...and before this time.
    #[serde(with = "time::serde::rfc3339")]
    pub to: OffsetDateTime,
    /// Who asks for it.
    #[schema(min_length = 1, max_length = 128, example = "R. Moss")]
    pub by: String,
    /// Why.
    #[schema(min_length = 1, max_length = 2000, example = "FT-201 was recalibrated")]
    pub reason: String,
    /// With this revision; each batch's own where it is left out.
    #[schema(minimum = 1)]
    pub revision: Option<u32>,
}

/// Readings taken in the field.
#[derive(Deserialize, ToSchema)]
#[serde(deny_unknown_fields)]
pub struct FieldEntry {
    /// Who took them.
    #[schema(min_length = 1, max_length = 128, example = "R. Moss")]
    pub by: String,
    /// When, RFC 3339 with offset, not in the future.
    #[serde(with = "time::serde::rfc3339")]
    pub at: OffsetDateTime,
    /// What was read.
    #[schema(min_items = 1, max_items = 20)]
    pub readings: Vec<super::engine::FieldReading>,
}

/// Readings: a list of them, or a single one.
#[derive(Deserialize, ToSchema)]
#[serde(untagged)]
pub enum Readings {
    /// Any number, in any order.
    Many(ReadingList),
    /// One.
    One(SampleLine),
}

/// Any number of readings.
#[derive(Deserialize, ToSchema)]
#[serde(deny_unknown_fields)]
pub struct ReadingList {
    /// In any order.
    pub readings: Vec<SampleLine>,
}

/// One value of one tag at one instant.
#[derive(Deserialize, ToSchema)]
#[schema(example = json!({"tag": "FT-201", "time": "2026-03-17T10:00:07Z", "value": 371.2, "quality": "good"}))]
#[serde(deny_unknown_fields)]
pub struct SampleLine {
    /// Name of the tag.
    #[schema(min_length = 1, max_length = 128)]
    pub tag: String,
    /// When the value was taken, RFC 3339 with offset; not in the future.
    #[serde(with = "time::serde::rfc3339")]
    pub time: OffsetDateTime,
    /// Value in the tag's own unit; null only with bad quality.
    pub value: Option<f64>,
    /// Quality; good where it is left out.
    #[serde(default)]
    pub quality: Quality,
}

/// A past period, and what it is replayed with: a revision or a plant file.
#[derive(Deserialize, ToSchema)]
#[serde(deny_unknown_fields)]
pub struct NewReplay {
    /// Periods that start at this time or later, RFC 3339 with offset...
    #[serde(with = "time::serde::rfc3339")]
    pub from: OffsetDateTime,
    /// ...and before this time.
    #[serde(with = "time::serde::rfc3339")]
    pub to: OffsetDateTime,
    /// An accepted revision; this or `plant_file`.
    #[schema(minimum = 1)]
    pub revision: Option<u32>,
    /// A plant file that is not accepted: an object, or a string of TOML.
    pub plant_file: Option<serde_json::Value>,
    /// Who asks for it.
    #[schema(min_length = 1, max_length = 128, example = "R. Moss")]
    pub by: String,
    /// Why.
    #[schema(
        min_length = 1,
        max_length = 2000,
        example = "Is the new orifice better?"
    )]
    pub reason: String,
}
