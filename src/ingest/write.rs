//! The body of a batch that is made here: JSON that [`parse`](super::parse) reads
//! back to the same batch.

use crate::plant::{Averaged, Batch, Flag, Grade, Quality, Reading, Steadiness};
use serde::Serialize;
use serde::ser::{SerializeMap, Serializer};
use time::OffsetDateTime;

/// Writes a batch as a body. Readings that stand in the order of their tags are
/// read back in it; a value that is not finite is written as null.
pub fn write(batch: &Batch) -> Vec<u8> {
    let body = Body {
        batch: &batch.name,
        start: batch.start,
        end: batch.end,
        readings: batch.readings.iter().map(line).collect(),
        steadiness: batch.steadiness.as_ref().map(|steadiness| {
            let Steadiness {
                steady,
                judged,
                unsteady,
            } = steadiness;
            Steady {
                steady: *steady,
                judged: *judged,
                unsteady,
            }
        }),
    };
    // Nothing in it can fail to be JSON: keys are strings, times are of this era.
    serde_json::to_vec(&body).unwrap_or_default()
}

#[derive(Serialize)]
struct Body<'b> {
    batch: &'b str,
    #[serde(with = "time::serde::rfc3339")]
    start: OffsetDateTime,
    #[serde(with = "time::serde::rfc3339")]
    end: OffsetDateTime,
    readings: Vec<Line<'b>>,
    #[serde(skip_serializing_if = "Option::is_none")]
    steadiness: Option<Steady<'b>>,
}

#[derive(Serialize)]
struct Line<'b> {
    tag: &'b str,
    value: Option<f64>,
    quality: Word,
    #[serde(skip_serializing_if = "Option::is_none")]
    averaged: Option<From<'b>>,
}

#[derive(Serialize)]
#[serde(untagged)]
enum Word {
    Code(u32),
    Grade(&'static str),
}

#[derive(Serialize)]
struct From<'b> {
    samples: u32,
    used: u32,
    covered: f64,
    #[serde(skip_serializing_if = "Option::is_none")]
    scatter: Option<f64>,
    #[serde(skip_serializing_if = "Option::is_none")]
    steady: Option<bool>,
    #[serde(skip_serializing_if = "<[_]>::is_empty", serialize_with = "flags")]
    flags: &'b [(Flag, u32)],
    #[serde(skip_serializing_if = "Option::is_none")]
    unused: Option<&'b str>,
}

#[derive(Serialize)]
struct Steady<'b> {
    steady: bool,
    judged: u32,
    unsteady: &'b [String],
}

fn line(reading: &Reading) -> Line<'_> {
    Line {
        tag: &reading.tag,
        value: reading.value,
        quality: word(reading.quality),
        averaged: reading.averaged.as_ref().map(from),
    }
}

fn word(quality: Quality) -> Word {
    match (quality.code, quality.grade) {
        (Some(code), _) => Word::Code(code),
        (None, Grade::Good) => Word::Grade("good"),
        (None, Grade::Uncertain) => Word::Grade("uncertain"),
        (None, Grade::Bad) => Word::Grade("bad"),
    }
}

fn from(averaged: &Averaged) -> From<'_> {
    From {
        samples: averaged.taken,
        used: averaged.used,
        covered: averaged.covered,
        scatter: averaged.scatter,
        steady: averaged.steady,
        flags: &averaged.flags,
        unused: averaged.unused.as_deref(),
    }
}

fn flags<S: Serializer>(flags: &[(Flag, u32)], serializer: S) -> Result<S::Ok, S::Error> {
    let mut map = serializer.serialize_map(Some(flags.len()))?;
    for (flag, count) in flags {
        map.serialize_entry(flag.name(), count)?;
    }
    map.end()
}

#[cfg(test)]
#[path = "write_tests.rs"]
mod tests;
