//! Writes the day down: `batches.ndjson` as a client would post it, and
//! `truth.ndjson.zst` for the tests.

use std::fs::File;
use std::io::{self, BufWriter, Write};
use std::path::Path;

use serde::Serialize;
use serde_json::Value;
use time::format_description::well_known::Rfc3339;

use super::{DAY_SEED, Day, Truth, plant};
use crate::plant::{Batch, Grade};

/// Writes `batches.ndjson` and `truth.ndjson.zst` of the day of
/// [`DAY_SEED`] into the directory `out`, which has to be there.
///
/// # Errors
/// What the file system says; a fault of the simulation as `Other`.
pub fn make_fixture(out: &Path) -> io::Result<()> {
    const COMPRESSION_LEVEL: i32 = 19;

    let plant = plant().map_err(io::Error::other)?;
    let mut batches = BufWriter::new(File::create(out.join("batches.ndjson"))?);
    let file = File::create(out.join("truth.ndjson.zst"))?;
    let mut truths = zstd::Encoder::new(file, COMPRESSION_LEVEL)?;
    for item in Day::new(&plant, DAY_SEED) {
        let (batch, truth) = item.map_err(io::Error::other)?;
        writeln!(batches, "{}", batch_line(&batch)?)?;
        writeln!(truths, "{}", truth_line(&batch.name, &truth)?)?;
    }
    batches.flush()?;
    truths.finish()?;
    Ok(())
}

/// A batch as a client posts it, on one line.
fn batch_line(batch: &Batch) -> io::Result<String> {
    #[derive(Serialize)]
    struct Posted<'a> {
        batch: &'a str,
        start: String,
        end: String,
        readings: Vec<PostedReading<'a>>,
    }
    #[derive(Serialize)]
    struct PostedReading<'a> {
        tag: &'a str,
        value: f64,
        quality: &'static str,
    }

    let readings = batch.readings.iter().filter_map(|reading| {
        // A tag without a value is left out, as a historian leaves it out.
        Some(PostedReading {
            tag: &reading.tag,
            value: reading.value?,
            quality: match reading.quality.grade {
                Grade::Good => "good",
                Grade::Uncertain => "uncertain",
                Grade::Bad => "bad",
            },
        })
    });
    Ok(serde_json::to_string(&Posted {
        batch: &batch.name,
        start: batch.start.format(&Rfc3339).map_err(io::Error::other)?,
        end: batch.end.format(&Rfc3339).map_err(io::Error::other)?,
        readings: readings.collect(),
    })?)
}

/// The truth behind a batch, on one line, in kg/s, MPa, kJ/kg, K and kW.
fn truth_line(batch: &str, truth: &Truth) -> io::Result<String> {
    let mut record = serde_json::to_value(truth)?;
    round_numbers(&mut record);
    if let Value::Object(fields) = &mut record {
        fields.insert("batch".to_owned(), batch.into());
    }
    Ok(serde_json::to_string(&record)?)
}

/// Rounds to 12 significant digits, so that another machine's last bits do not show.
fn round_numbers(value: &mut Value) {
    match value {
        Value::Number(number) => {
            let rounded = number
                .as_f64()
                .and_then(|x| format!("{x:.11e}").parse::<f64>().ok());
            if let Some(rounded) = rounded {
                *value = rounded.into();
            }
        }
        Value::Array(items) => items.iter_mut().for_each(round_numbers),
        Value::Object(fields) => fields.values_mut().for_each(round_numbers),
        Value::Null | Value::Bool(_) | Value::String(_) => {}
    }
}
