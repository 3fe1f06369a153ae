//! The shape of a batch at the edge, and its faults.

use super::LONGEST_NAME;
use super::digest;
use super::faults::{Faults, Path};
use super::json::{self, Member, Node, Value, shorten};
use crate::plant::{Batch, Fault, Grade, Quality, Reading};
use std::collections::HashMap;
use time::format_description::well_known::Rfc3339;
use time::{Duration, OffsetDateTime, UtcOffset};

/// How far ahead of our clock a time may lie: clocks of historians run ahead by
/// minutes, and a batch from next month is a mistake.
pub const FUTURE_ALLOWANCE: Duration = Duration::minutes(10);

/// A batch, and what it hashes to.
#[derive(Clone, Debug, PartialEq)]
pub struct Parsed {
    /// The batch; its readings stand in the order of their tags.
    pub batch: Batch,
    /// SHA-256 of the canonical form: equal for equal content, whatever the
    /// spelling and the order of the readings.
    pub digest: [u8; 32],
}

/// Why a body is no batch.
#[derive(Clone, Debug, PartialEq)]
pub struct Refusal {
    /// The body is not even JSON.
    pub syntax: bool,
    /// Every fault.
    pub faults: Vec<Fault>,
}

/// Reads a batch. `now` is when it was received.
///
/// # Errors
///
/// Every fault of the body at once, in the order of the text, each with its JSON
/// pointer, line and column; of a crowd of them the first thousand that were
/// found, and one without a place that counts the others.
pub fn parse(body: &[u8], now: OffsetDateTime) -> Result<Parsed, Refusal> {
    let source = match std::str::from_utf8(body) {
        Ok(source) => source,
        Err(error) => return Err(not_utf8(body, error.valid_up_to())),
    };
    let mut faults = Faults::new(source);
    let Ok(root) = json::read(source, &mut faults) else {
        return Err(Refusal {
            syntax: true,
            faults: faults.finish(),
        });
    };
    let mut reader = Reader {
        faults,
        latest: now + FUTURE_ALLOWANCE,
    };
    let draft = reader.batch(&root);
    match draft {
        Some(draft) if reader.faults.is_empty() => Ok(draft.finish()),
        _ => Err(Refusal {
            syntax: reader.faults.syntax,
            faults: reader.faults.finish(),
        }),
    }
}

fn not_utf8(body: &[u8], valid: usize) -> Refusal {
    // The part before `valid` is UTF-8 by the meaning of `valid_up_to`.
    let readable = String::from_utf8_lossy(&body[..valid]);
    let mut faults = Faults::new(&readable);
    faults.add(
        &Path::Root,
        readable.len(),
        "the text is not UTF-8",
        "send JSON in UTF-8",
    );
    Refusal {
        syntax: true,
        faults: faults.finish(),
    }
}

/// A reading with what only its digest needs.
pub(super) struct Draft {
    pub reading: Reading,
    pub time: Option<OffsetDateTime>,
}

struct DraftBatch {
    name: String,
    start: OffsetDateTime,
    end: OffsetDateTime,
    readings: Vec<Draft>,
}

impl DraftBatch {
    fn finish(mut self) -> Parsed {
        self.readings
            .sort_by(|a, b| a.reading.tag.cmp(&b.reading.tag));
        let digest = digest::of(&self.name, self.start, self.end, &self.readings);
        let readings = self
            .readings
            .into_iter()
            .map(|draft| draft.reading)
            .collect();
        let batch = Batch {
            name: self.name,
            start: self.start,
            end: self.end,
            readings,
            steadiness: None,
        };
        Parsed { batch, digest }
    }
}

struct Reader<'a> {
    faults: Faults<'a>,
    latest: OffsetDateTime,
}

impl<'a> Reader<'a> {
    fn batch(&mut self, root: &Node<'a>) -> Option<DraftBatch> {
        let path = Path::Root;
        let members = self.members(
            &path,
            root,
            "a batch",
            &["batch", "start", "end", "readings"],
        )?;
        let name = self
            .required(
                &path,
                root,
                members,
                "batch",
                "the name of the batch, unique in its plant",
            )
            .and_then(|node| self.batch_name(&Path::Key(&path, "batch"), node));
        let start = self
            .required(
                &path,
                root,
                members,
                "start",
                "the start of the period, as 2026-03-17T10:00:00Z",
            )
            .and_then(|node| {
                self.time(&Path::Key(&path, "start"), node)
                    .map(|time| (node, time))
            });
        let end = self
            .required(
                &path,
                root,
                members,
                "end",
                "the end of the period, as 2026-03-17T10:05:00Z",
            )
            .and_then(|node| {
                self.time(&Path::Key(&path, "end"), node)
                    .map(|time| (node, time))
            });
        if let (Some((_, start)), Some((node, end))) = (start, end)
            && end <= start
        {
            self.faults.add(
                &Path::Key(&path, "end"),
                node.offset,
                "the period ends before it has begun",
                "`end` comes after `start`",
            );
        }
        let readings = self
            .required(&path, root, members, "readings", "a list of readings")
            .and_then(|node| self.readings(&Path::Key(&path, "readings"), node));
        Some(DraftBatch {
            name: name?,
            start: start?.1,
            end: end?.1,
            readings: readings?,
        })
    }

    fn readings(&mut self, path: &Path<'_>, node: &Node<'a>) -> Option<Vec<Draft>> {
        let Value::Array(items) = &node.value else {
            self.wrong_type(
                path,
                node,
                "a list of readings",
                "write \"readings\": [{\"tag\": \"FT-201\", \"value\": 371.2}]",
            );
            return None;
        };
        let mut seen: HashMap<String, usize> = HashMap::with_capacity(items.len());
        let mut drafts = Vec::with_capacity(items.len());
        for (index, item) in items.iter().enumerate() {
            let item_path = Path::Index(path, index);
            let Some((tag_node, draft)) = self.reading(&item_path, item) else {
                continue;
            };
            if let Some(first) = seen.insert(draft.reading.tag.clone(), index) {
                self.faults.add(
                    &Path::Key(&item_path, "tag"),
                    tag_node.offset,
                    format!(
                        "a second reading of tag {} (the first is reading {first})",
                        draft.reading.tag
                    ),
                    "a batch has one value per tag: average before sending",
                );
            }
            drafts.push(draft);
        }
        Some(drafts)
    }

    fn reading<'n>(
        &mut self,
        path: &Path<'_>,
        node: &'n Node<'a>,
    ) -> Option<(&'n Node<'a>, Draft)> {
        let members = self.members(
            path,
            node,
            "a reading",
            &["tag", "value", "quality", "time"],
        )?;
        let tag_node = self.required(path, node, members, "tag", "the name of the tag");
        let tag = tag_node.and_then(|tag| self.name(&Path::Key(path, "tag"), tag));
        let quality = match find(members, "quality") {
            None => Some(Quality {
                grade: Grade::Good,
                code: None,
            }),
            Some(member) => self.quality(&Path::Key(path, "quality"), &member.node),
        };
        let time = match find(members, "time") {
            None => Some(None),
            Some(member) => self.time(&Path::Key(path, "time"), &member.node).map(Some),
        };
        // A quality that could not be read must not add a second fault here.
        let may_lack = quality.is_none_or(|quality| quality.grade == Grade::Bad);
        let value = self.value(path, node, members, may_lack);
        let reading = Reading {
            tag: tag?,
            value: value?,
            quality: quality?,
            averaged: None,
        };
        Some((
            tag_node?,
            Draft {
                reading,
                time: time?,
            },
        ))
    }

    fn value(
        &mut self,
        path: &Path<'_>,
        node: &Node<'a>,
        members: &[Member<'a>],
        may_lack: bool,
    ) -> Option<Option<f64>> {
        let path = Path::Key(path, "value");
        let (value, offset) = match find(members, "value") {
            None => (&Value::Null, node.offset),
            Some(member) => (&member.node.value, member.node.offset),
        };
        match value {
            Value::Number { value, .. } => Some(Some(*value)),
            Value::Null if may_lack => Some(None),
            Value::Null => {
                self.faults.add(
                    &path,
                    offset,
                    "a reading without a value",
                    "send a number, or null with quality \"bad\"",
                );
                None
            }
            Value::Faulty => None,
            other => {
                self.faults.add(
                    &path,
                    offset,
                    format!("{} where a number is needed", kind(other)),
                    "send a JSON number in the tag's own unit, without quotes",
                );
                None
            }
        }
    }

    fn quality(&mut self, path: &Path<'_>, node: &Node<'a>) -> Option<Quality> {
        const MEND: &str =
            "write \"good\", \"uncertain\", \"bad\" or an OPC UA status code (unsigned, 32 bits)";
        match &node.value {
            Value::String(text) => {
                let grade = match text.as_ref() {
                    "good" => Grade::Good,
                    "uncertain" => Grade::Uncertain,
                    "bad" => Grade::Bad,
                    other => {
                        let what = format!("unknown quality \"{}\"", shorten(other));
                        self.faults.add(path, node.offset, what, MEND);
                        return None;
                    }
                };
                Some(Quality { grade, code: None })
            }
            Value::Number { text, .. } => match text.parse::<u32>() {
                Ok(code) => Some(Quality {
                    grade: grade(code),
                    code: Some(code),
                }),
                Err(_) => {
                    let what = format!("{} is no status code of 32 bits", shorten(text));
                    self.faults.add(path, node.offset, what, MEND);
                    None
                }
            },
            Value::Faulty => None,
            other => {
                let what = format!("{} where a quality is needed", kind(other));
                self.faults.add(path, node.offset, what, MEND);
                None
            }
        }
    }

    fn time(&mut self, path: &Path<'_>, node: &Node<'a>) -> Option<OffsetDateTime> {
        const MEND: &str =
            "write it as in RFC 3339, with seconds and offset: 2026-03-17T10:05:00+02:00";
        let Value::String(text) = &node.value else {
            self.wrong_type(path, node, "a time", MEND);
            return None;
        };
        let Ok(time) = OffsetDateTime::parse(text, &Rfc3339) else {
            let what = format!("\"{}\" is no time", shorten(text));
            self.faults.add(path, node.offset, what, MEND);
            return None;
        };
        let time = time.to_offset(UtcOffset::UTC);
        if time > self.latest {
            let what = format!("{} lies in the future", shorten(text));
            self.faults.add(
                path,
                node.offset,
                what,
                "check the clock and the offset of the sender",
            );
            return None;
        }
        if time < OffsetDateTime::UNIX_EPOCH {
            let what = format!("{} lies before 1970", shorten(text));
            self.faults
                .add(path, node.offset, what, "check the clock of the sender");
            return None;
        }
        Some(time)
    }

    /// A name that can stand in the address of the report.
    fn batch_name(&mut self, path: &Path<'_>, node: &Node<'a>) -> Option<String> {
        let name = self.name(path, node)?;
        // Clients resolve such a segment away, encoded or not (RFC 3986, 6.2.2.3).
        if matches!(name.as_str(), "." | "..") {
            let what = format!("\"{name}\" cannot stand in an address");
            self.faults
                .add(path, node.offset, what, "give the batch another name");
            return None;
        }
        Some(name)
    }

    fn name(&mut self, path: &Path<'_>, node: &Node<'a>) -> Option<String> {
        let Value::String(text) = &node.value else {
            self.wrong_type(path, node, "a name", "write it in double quotes");
            return None;
        };
        let length = text.chars().count();
        if length == 0 || length > LONGEST_NAME {
            self.faults.add(
                path,
                node.offset,
                format!("a name of {length} characters"),
                format!("a name has 1 to {LONGEST_NAME} characters"),
            );
            return None;
        }
        if text.chars().any(char::is_control) {
            self.faults.add(
                path,
                node.offset,
                "a control character in a name",
                "leave it out",
            );
            return None;
        }
        Some(text.clone().into_owned())
    }

    /// The members of an object, unknown ones noted.
    fn members<'n>(
        &mut self,
        path: &Path<'_>,
        node: &'n Node<'a>,
        what: &str,
        known: &[&str],
    ) -> Option<&'n [Member<'a>]> {
        let Value::Object(members) = &node.value else {
            self.wrong_type(
                path,
                node,
                what,
                &format!("send an object with {}", known.join(", ")),
            );
            return None;
        };
        for member in members {
            if !known.contains(&member.key.as_ref()) {
                self.faults.add(
                    &Path::Key(path, &member.key),
                    member.offset,
                    format!("unknown field \"{}\"", shorten(&member.key)),
                    format!("{what} has {}", known.join(", ")),
                );
            }
        }
        Some(members)
    }

    fn required<'n>(
        &mut self,
        path: &Path<'_>,
        object: &Node<'a>,
        members: &'n [Member<'a>],
        key: &str,
        mend: &str,
    ) -> Option<&'n Node<'a>> {
        let found = find(members, key).map(|member| &member.node);
        if found.is_none() {
            self.faults.add(
                &Path::Key(path, key),
                object.offset,
                format!("`{key}` is missing"),
                format!("add `{key}`: {mend}"),
            );
        }
        found
    }

    fn wrong_type(&mut self, path: &Path<'_>, node: &Node<'a>, wanted: &str, mend: &str) {
        if !matches!(node.value, Value::Faulty) {
            let what = format!("{} where {wanted} is needed", kind(&node.value));
            self.faults.add(path, node.offset, what, mend);
        }
    }
}

fn find<'n, 'a>(members: &'n [Member<'a>], key: &str) -> Option<&'n Member<'a>> {
    members.iter().find(|member| member.key == key)
}

fn kind(value: &Value<'_>) -> &'static str {
    match value {
        Value::Null => "null",
        Value::Bool => "true or false",
        Value::Number { .. } => "a number",
        Value::String(_) => "a string",
        Value::Array(_) => "a list",
        Value::Object(_) => "an object",
        Value::Faulty => "something unreadable",
    }
}

/// Severity of an OPC UA status code: its two highest bits (OPC UA Part 4,
/// section 7.39, from memory). 11 is reserved, and to be taken as bad.
fn grade(code: u32) -> Grade {
    match code >> 30 {
        0 => Grade::Good,
        1 => Grade::Uncertain,
        _ => Grade::Bad,
    }
}

#[cfg(test)]
#[path = "batch_tests.rs"]
mod tests;
