//! What a client sends, described for the OpenAPI document.
//!
//! Nothing is read with these types: `ingest` reads batches, and tells every
//! fault at once where a derived reader stops at the first.

use serde::Deserialize;
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
