//! Readings taken in the field for one batch: tags of their own, in a plant of
//! their own.
//!
//! Each becomes a tag `field-1`, `field-2`, ... in the order of entering (a name
//! that the plant file or the batch has taken is passed over). The plant file of
//! the revision is read again with these tags in it, so that they are held to
//! the same rules as any tag, and compiled for this batch alone.

use crate::pipeline::Compiled;
use crate::plant::{self, Batch, Fault, Format, Grade, Plant, Quality, Reading, Severity};
use serde::{Deserialize, Serialize};
use serde_json::{Value, json};
use std::collections::HashSet;
use time::OffsetDateTime;
use utoipa::ToSchema;

/// Readings that were taken together.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub(in crate::http) struct FieldReadings {
    /// When they were taken.
    #[serde(with = "time::serde::rfc3339")]
    pub at: OffsetDateTime,
    /// What was read.
    pub readings: Vec<FieldReading>,
}

/// What a portable instrument read, in the words of the plant file's tags.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct FieldReading {
    /// Quantity.
    #[schema(min_length = 1, max_length = 2000, example = "temperature")]
    pub measures: String,
    /// Stream or piece of equipment.
    #[schema(min_length = 1, max_length = 2000, example = "live-steam")]
    pub of: String,
    /// Value.
    #[schema(example = 539.2)]
    pub value: f64,
    /// Its unit.
    #[schema(min_length = 1, max_length = 2000, example = "Cel")]
    pub unit: String,
    /// `gauge` of a pressure that is not absolute.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub reference: Option<String>,
    /// Uncertainty of the instrument.
    #[schema(example = json!({"absolute": "0.5 K"}))]
    pub uncertainty: Value,
}

impl FieldReading {
    /// As a tag of the plant file.
    fn tag(&self) -> Value {
        let mut tag = json!({
            "measures": self.measures,
            "of": self.of,
            "unit": self.unit,
            "uncertainty": self.uncertainty,
        });
        if let (Some(reference), Value::Object(tag)) = (&self.reference, &mut tag) {
            tag.insert("reference".to_owned(), reference.as_str().into());
        }
        tag
    }
}

/// A batch with its field readings, and the plant in which they are tags.
pub(in crate::http) struct Extended {
    pub compiled: Compiled,
    pub batch: Batch,
}

/// The names of the tags that field readings of a batch become, in their order.
pub(in crate::http) fn names(plant: &Plant, batch: &Batch) -> impl Iterator<Item = String> {
    let tags = plant.tags.iter().map(|tag| &tag.name);
    let assumptions = plant.assumptions.iter().map(|a| &a.name);
    let readings = batch.readings.iter().map(|reading| &reading.tag);
    let taken = tags.chain(assumptions).chain(readings);
    let taken: HashSet<String> = taken.filter(|n| n.starts_with(PREFIX)).cloned().collect();
    (1..)
        .map(|number: usize| format!("{PREFIX}{number}"))
        .filter(move |name| !taken.contains(name))
}

const PREFIX: &str = "field-";

impl Extended {
    /// Adds readings to a batch and to the plant of a revision, given in its
    /// canonical form too.
    ///
    /// # Errors
    ///
    /// What the plant file refuses; the place is `/readings/i`, i counted over
    /// all of them.
    pub fn new(
        known: &Compiled,
        canonical: &str,
        mut batch: Batch,
        entered: &[FieldReadings],
    ) -> Result<Self, Vec<Fault>> {
        let plant = known.plant();
        let readings = entered.iter().flat_map(|entry| &entry.readings);
        let named: Vec<(String, &FieldReading)> = names(plant, &batch).zip(readings).collect();
        let mut file: Value = serde_json::from_str(canonical).map_err(|e| unplaced(&e))?;
        in_order_of(&mut file, plant);
        let tags = file.get_mut("tags").and_then(Value::as_object_mut);
        let tags = tags.ok_or_else(|| unplaced(&"the plant file has no tags"))?;
        for (name, reading) in &named {
            tags.insert(name.clone(), reading.tag());
            batch.readings.push(Reading {
                tag: name.clone(),
                value: Some(reading.value),
                quality: Quality {
                    grade: Grade::Good,
                    code: None,
                },
                averaged: None,
            });
        }
        let read = plant::read(&file.to_string(), Format::Json);
        let read = read.map_err(|faults| placed(faults.0, &named))?;
        Ok(Extended {
            compiled: Compiled::new(read.plant, known.revision()),
            batch,
        })
    }
}

/// The canonical form sorts names; reports keep the order of the file.
fn in_order_of(file: &mut Value, plant: &Plant) {
    let names = |key: &str| -> Vec<&String> {
        match key {
            "tags" => plant.tags.iter().map(|tag| &tag.name).collect(),
            "streams" => plant.streams.iter().map(|stream| &stream.name).collect(),
            "equipment" => plant.equipment.iter().map(|item| &item.name).collect(),
            _ => plant.assumptions.iter().map(|a| &a.name).collect(),
        }
    };
    for key in ["tags", "streams", "equipment", "assumptions"] {
        let Some(table) = file.get_mut(key).and_then(Value::as_object_mut) else {
            continue;
        };
        let mut rest = std::mem::take(table);
        for name in names(key) {
            if let Some(entry) = rest.remove(name) {
                table.insert(name.clone(), entry);
            }
        }
        table.extend(rest);
    }
}

/// Faults of the tags at the places of the readings. A file that was accepted
/// has none elsewhere, but for warnings that are old news.
fn placed(faults: Vec<Fault>, named: &[(String, &FieldReading)]) -> Vec<Fault> {
    let errors = faults.into_iter().filter(|f| f.severity == Severity::Error);
    let place = |mut fault: Fault| {
        let found = named.iter().enumerate().find_map(|(at, (name, _))| {
            let rest = fault.path.strip_prefix("/tags/")?.strip_prefix(name)?;
            (rest.is_empty() || rest.starts_with('/')).then(|| format!("/readings/{at}{rest}"))
        });
        fault.path = found.unwrap_or_else(|| "/readings".to_owned());
        (fault.line, fault.column) = (None, None);
        fault
    };
    errors.map(place).collect()
}

fn unplaced(what: &dyn std::fmt::Display) -> Vec<Fault> {
    vec![Fault {
        severity: Severity::Error,
        path: "/readings".to_owned(),
        line: None,
        column: None,
        what: what.to_string(),
        mend: "the plant file of this revision takes no field readings".to_owned(),
    }]
}
