//! Readings as historians send them: one value of one tag at one instant, as a
//! JSON document, as JSON by lines, or as CSV with a header.
//!
//! Lines are read one by one ([`ReadingsLines`]), so that a year of them passes
//! through in the memory of one block; a body that is held whole is read the same
//! way ([`readings`]).

mod columns;
mod lines;
#[cfg(test)]
mod tests;

pub use lines::{Block, ReadingsLines};

use super::Refusal;
use super::batch::not_utf8;
use super::faults::{Faults, Path};
use super::fields::{FUTURE_ALLOWANCE, Reader, find};
use super::json::{self, Node, Value};
use crate::plant::{Grade, Quality, Sample};
use indexmap::IndexMap;
use time::OffsetDateTime;

/// How readings are written.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum ReadingsForm {
    /// One JSON document: a reading, or an object with a list of `readings`.
    Json,
    /// A JSON object in each line.
    Ndjson,
    /// CSV (RFC 4180) whose first line names the columns.
    Csv,
}

/// Readings by tag.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Readings {
    /// Samples of each tag in the order in which they came; times in UTC.
    pub tags: IndexMap<String, Vec<Sample>>,
    /// How many there are.
    pub count: usize,
}

const FIELDS: [&str; 4] = ["tag", "time", "value", "quality"];

/// Reads a whole body. `now` is when it was received.
///
/// # Errors
///
/// Every fault of the body at once, with line and column; of a crowd of them the
/// first thousand, and one without a place that counts the others.
pub fn readings(body: &[u8], form: ReadingsForm, now: OffsetDateTime) -> Result<Readings, Refusal> {
    if form == ReadingsForm::Json {
        return document(body, now);
    }
    let mut lines = ReadingsLines::new(form, now);
    lines.feed(body);
    lines.end();
    let block = lines.take();
    if block.faulty == 0 {
        return Ok(block.readings);
    }
    Err(Refusal {
        syntax: block.syntax,
        faults: block.faults_told(),
    })
}

impl Readings {
    fn add(&mut self, tag: &str, sample: Sample) {
        match self.tags.get_mut(tag) {
            Some(samples) => samples.push(sample),
            None => {
                self.tags.insert(tag.to_owned(), vec![sample]);
            }
        }
        self.count += 1;
    }
}

fn document(body: &[u8], now: OffsetDateTime) -> Result<Readings, Refusal> {
    let source = match std::str::from_utf8(body) {
        Ok(source) => source.strip_prefix('\u{feff}').unwrap_or(source),
        Err(error) => return Err(not_utf8(body, error.valid_up_to())),
    };
    let mut faults = Faults::new(source);
    let root = json::read(source, &mut faults);
    let mut reader = Reader {
        faults,
        latest: now + FUTURE_ALLOWANCE,
    };
    let mut readings = Readings::default();
    if let Ok(root) = root {
        reader.document(&root, &mut readings);
    }
    if reader.faults.is_empty() {
        return Ok(readings);
    }
    Err(Refusal {
        syntax: reader.faults.syntax,
        faults: reader.faults.finish(),
    })
}

impl<'a> Reader<'a> {
    fn document(&mut self, root: &Node<'a>, into: &mut Readings) {
        let path = Path::Root;
        let holds_list = match &root.value {
            Value::Object(members) => find(members, "readings").is_some(),
            _ => false,
        };
        if !holds_list {
            if let Some((tag, sample)) = self.one(&path, root) {
                into.add(&tag, sample);
            }
            return;
        }
        let Some(members) = self.members(&path, root, "a list of readings", &["readings"]) else {
            return;
        };
        let Some(list) = find(members, "readings").map(|member| &member.node) else {
            return;
        };
        let path = Path::Key(&path, "readings");
        let Value::Array(items) = &list.value else {
            let mend = "write \"readings\": [{\"tag\": \"FT-201\", \"time\": \
                        \"2026-03-17T10:05:00Z\", \"value\": 371.2}]";
            self.wrong_type(&path, list, "a list of readings", mend);
            return;
        };
        for (index, item) in items.iter().enumerate() {
            if let Some((tag, sample)) = self.one(&Path::Index(&path, index), item) {
                into.add(&tag, sample);
            }
        }
    }

    /// One reading with its tag.
    pub(super) fn one(&mut self, path: &Path<'_>, node: &Node<'a>) -> Option<(String, Sample)> {
        let members = self.members(path, node, "a reading", &FIELDS)?;
        let tag = self
            .required(path, node, members, "tag", "the name of the tag")
            .and_then(|tag| self.name(&Path::Key(path, "tag"), tag));
        let time = self
            .required(
                path,
                node,
                members,
                "time",
                "when the value was taken, as 2026-03-17T10:05:00Z",
            )
            .and_then(|time| self.time(&Path::Key(path, "time"), time));
        let quality = match find(members, "quality") {
            None => Some(Quality {
                grade: Grade::Good,
                code: None,
            }),
            Some(member) => self.quality(&Path::Key(path, "quality"), &member.node),
        };
        // A quality that could not be read must not add a second fault here.
        let may_lack = quality.is_none_or(|quality| quality.grade == Grade::Bad);
        let value = self.value(path, node, members, may_lack);
        let sample = Sample {
            time: time?,
            value: value?,
            quality: quality?,
        };
        Some((tag?, sample))
    }
}
