//! The shape of a batch at the edge, and its faults.

use super::digest;
use super::faults::{Faults, Path};
use super::fields::{FUTURE_ALLOWANCE, Reader, find};
use super::json::{self, Node, Value};
use crate::plant::{Batch, Fault, Grade, Quality, Reading, Steadiness};
use std::collections::HashMap;
use time::OffsetDateTime;

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

pub(super) fn not_utf8(body: &[u8], valid: usize) -> Refusal {
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
    steadiness: Option<Steadiness>,
}

impl DraftBatch {
    fn finish(mut self) -> Parsed {
        self.readings
            .sort_by(|a, b| a.reading.tag.cmp(&b.reading.tag));
        let digest = digest::of(
            &self.name,
            (self.start, self.end),
            &self.readings,
            self.steadiness.as_ref(),
        );
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
            steadiness: self.steadiness,
        };
        Parsed { batch, digest }
    }
}

impl<'a> Reader<'a> {
    fn batch(&mut self, root: &Node<'a>) -> Option<DraftBatch> {
        let path = Path::Root;
        let members = self.members(
            &path,
            root,
            "a batch",
            &["batch", "start", "end", "readings", "steadiness"],
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
        let steadiness = match find(members, "steadiness") {
            None => Some(None),
            Some(member) => self.steadiness(&Path::Key(&path, "steadiness"), &member.node),
        };
        Some(DraftBatch {
            name: name?,
            start: start?.1,
            end: end?.1,
            readings: readings?,
            steadiness: steadiness?,
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
            &["tag", "value", "quality", "time", "averaged"],
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
        let averaged = match find(members, "averaged") {
            None => Some(None),
            Some(member) => self.averaged(&Path::Key(path, "averaged"), &member.node),
        };
        // A quality that could not be read must not add a second fault here.
        let may_lack = quality.is_none_or(|quality| quality.grade == Grade::Bad);
        let value = self.value(path, node, members, may_lack);
        let reading = Reading {
            tag: tag?,
            value: value?,
            quality: quality?,
            averaged: averaged?,
        };
        Some((
            tag_node?,
            Draft {
                reading,
                time: time?,
            },
        ))
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
}

#[cfg(test)]
#[path = "batch_tests.rs"]
mod tests;
