//! Reading single fields at the edge: names, times, values and qualities, from
//! JSON or from text, with every fault noted.

use super::LONGEST_NAME;
use super::faults::{Faults, Path};
use super::json::{Member, Node, Value, shorten};
use crate::plant::{Grade, Quality};
use time::format_description::well_known::Rfc3339;
use time::{Duration, OffsetDateTime, UtcOffset};

/// How far ahead of our clock a time may lie: clocks of historians run ahead by
/// minutes, and a batch from next month is a mistake.
pub const FUTURE_ALLOWANCE: Duration = Duration::minutes(10);

/// What is wrong with a text, and what would mend it.
pub(super) type Wrong = (String, &'static str);

/// Reads fields, noting what is wrong with them.
pub(super) struct Reader<'a> {
    pub faults: Faults<'a>,
    /// Latest time that is believed.
    pub latest: OffsetDateTime,
}

impl<'a> Reader<'a> {
    pub fn value(
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

    pub fn quality(&mut self, path: &Path<'_>, node: &Node<'a>) -> Option<Quality> {
        match &node.value {
            Value::String(text) => {
                let found = quality_word(text);
                self.noted(path, node, found)
            }
            Value::Number { text, .. } => {
                let found = status_code(text, text.parse().ok());
                self.noted(path, node, found)
            }
            other => {
                if !matches!(other, Value::Faulty) {
                    let what = format!("{} where a quality is needed", kind(other));
                    self.faults.add(path, node.offset, what, QUALITY);
                }
                None
            }
        }
    }

    pub fn time(&mut self, path: &Path<'_>, node: &Node<'a>) -> Option<OffsetDateTime> {
        let Value::String(text) = &node.value else {
            self.wrong_type(path, node, "a time", TIME);
            return None;
        };
        let found = time(text, self.latest);
        self.noted(path, node, found)
    }

    fn noted<T>(&mut self, path: &Path<'_>, node: &Node<'a>, found: Result<T, Wrong>) -> Option<T> {
        match found {
            Ok(found) => Some(found),
            Err((what, mend)) => {
                self.faults.add(path, node.offset, what, mend);
                None
            }
        }
    }

    pub fn name(&mut self, path: &Path<'_>, node: &Node<'a>) -> Option<String> {
        let Value::String(text) = &node.value else {
            self.wrong_type(path, node, "a name", "write it in double quotes");
            return None;
        };
        let found = name(text).map(str::to_owned);
        self.noted(path, node, found)
    }

    /// The members of an object, unknown ones noted.
    pub fn members<'n>(
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

    pub fn required<'n>(
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

    pub fn wrong_type(&mut self, path: &Path<'_>, node: &Node<'a>, wanted: &str, mend: &str) {
        if !matches!(node.value, Value::Faulty) {
            let what = format!("{} where {wanted} is needed", kind(&node.value));
            self.faults.add(path, node.offset, what, mend);
        }
    }
}

const TIME: &str = "write it as in RFC 3339, with seconds and offset: 2026-03-17T10:05:00+02:00";

const QUALITY: &str =
    "write \"good\", \"uncertain\", \"bad\" or an OPC UA status code (unsigned, 32 bits)";

/// A time as in RFC 3339, in UTC, not beyond `latest`.
pub(super) fn time(text: &str, latest: OffsetDateTime) -> Result<OffsetDateTime, Wrong> {
    let time = OffsetDateTime::parse(text, &Rfc3339)
        .map_err(|_| (format!("\"{}\" is no time", shorten(text)), TIME))?;
    believable(time.to_offset(UtcOffset::UTC), text, latest)
}

/// A time that is not in the future, nor before the count of time begins.
pub(super) fn believable(
    time: OffsetDateTime,
    text: &str,
    latest: OffsetDateTime,
) -> Result<OffsetDateTime, Wrong> {
    if time > latest {
        let what = format!("{} lies in the future", shorten(text));
        return Err((what, "check the clock and the offset of the sender"));
    }
    if time < OffsetDateTime::UNIX_EPOCH {
        let what = format!("{} lies before 1970", shorten(text));
        return Err((what, "check the clock of the sender"));
    }
    Ok(time)
}

/// A quality in words.
pub(super) fn quality_word(text: &str) -> Result<Quality, Wrong> {
    let grade = match text {
        "good" => Grade::Good,
        "uncertain" => Grade::Uncertain,
        "bad" => Grade::Bad,
        other => return Err((format!("unknown quality \"{}\"", shorten(other)), QUALITY)),
    };
    Ok(Quality { grade, code: None })
}

/// A quality as a status code, which was written as `text`.
pub(super) fn status_code(text: &str, code: Option<u32>) -> Result<Quality, Wrong> {
    let wrong = || {
        (
            format!("{} is no status code of 32 bits", shorten(text)),
            QUALITY,
        )
    };
    let code = code.ok_or_else(wrong)?;
    Ok(Quality {
        grade: grade(code),
        code: Some(code),
    })
}

/// The name of a batch or tag.
pub(super) fn name(text: &str) -> Result<&str, Wrong> {
    let length = text.chars().count();
    if length == 0 || length > LONGEST_NAME {
        let what = format!("a name of {length} characters");
        return Err((what, "a name has 1 to 128 characters"));
    }
    if text.chars().any(char::is_control) {
        return Err(("a control character in a name".to_owned(), "leave it out"));
    }
    Ok(text)
}

/// The member of a key.
pub(super) fn find<'n, 'a>(members: &'n [Member<'a>], key: &str) -> Option<&'n Member<'a>> {
    members.iter().find(|member| member.key == key)
}

/// What a value is, in words.
pub(super) fn kind(value: &Value<'_>) -> &'static str {
    match value {
        Value::Null => "null",
        Value::Bool(_) => "true or false",
        Value::Number { .. } => "a number",
        Value::String(_) => "a string",
        Value::Array(_) => "a list",
        Value::Object(_) => "an object",
        Value::Faulty => "something unreadable",
    }
}

/// Severity of an OPC UA status code: its two highest bits (OPC UA Part 4,
/// section 7.39, from memory). 11 is reserved, and to be taken as bad.
pub(super) fn grade(code: u32) -> Grade {
    match code >> 30 {
        0 => Grade::Good,
        1 => Grade::Uncertain,
        _ => Grade::Bad,
    }
}
