//! Reading the small JSON bodies in which people act: unknown fields refused,
//! every fault at once, each with its place.
//!
//! A derived reader stops at the first fault and keeps the last of two equal
//! keys in silence, so a body becomes a tree that keeps all of them and is then
//! taken apart field by field.

mod tree;

use super::App;
use super::body::{self, media_type};
use super::error::{Kind, Problem, count};
use super::revisions::JSON;
use crate::ingest::FUTURE_ALLOWANCE;
use crate::plant::{Fault, Severity};
use axum::extract::Request;
use axum::http::header;
use serde::de::DeserializeOwned;
use serde_json::Value;
use time::format_description::well_known::Rfc3339;
use time::{OffsetDateTime, UtcOffset};
use tree::Node;

/// Longest name of a person, in characters.
const LONGEST_NAME: usize = 128;

/// Longest text, in characters.
const LONGEST_TEXT: usize = 2000;

/// Most faults that are told of one body.
const MOST_FAULTS: usize = 100;

/// An object of a body, taken apart one field after another, with the faults of
/// the whole body so far.
pub(super) struct Fields {
    path: String,
    members: Vec<(String, Node)>,
    faults: Vec<Fault>,
}

/// Reads the body of a request.
///
/// # Errors
///
/// As [`body::read`]; where it is not JSON, or no object.
pub(super) async fn read(app: &App, request: Request) -> Result<Fields, Problem> {
    if media_type(request.headers()) != JSON {
        return Err(Problem::new(
            Kind::UnsupportedMediaType,
            "the body comes as application/json",
        )
        .with_header(header::ACCEPT, JSON));
    }
    let bytes = body::read(app, request, app.limits.document).await?;
    of_text(body::text(&bytes)?)
}

fn of_text(text: &str) -> Result<Fields, Problem> {
    let root = serde_json::from_str(text).map_err(|error| {
        let fault = Fault {
            line: Some(error.line()),
            column: Some(error.column()),
            ..fault("", "the body is not JSON", &error.to_string())
        };
        Problem::new(Kind::Malformed, "1 fault in the body").with_faults(vec![fault])
    })?;
    match root {
        Node::Object(members) => Ok(Fields {
            path: String::new(),
            members,
            faults: Vec::new(),
        }),
        _ => {
            let fault = fault("", "the body is no object", "send one JSON object");
            Err(Problem::new(Kind::Unacceptable, "1 fault in the body").with_faults(vec![fault]))
        }
    }
}

impl Fields {
    /// Notes what is wrong with a field.
    pub fn fault(&mut self, key: &str, what: impl AsRef<str>, mend: impl AsRef<str>) {
        let path = self.place(key);
        self.faults.push(fault(&path, what.as_ref(), mend.as_ref()));
    }

    /// Notes the faults of a document that is a field.
    pub fn faults_in(&mut self, key: &str, faults: Vec<Fault>) {
        let path = self.place(key);
        let within = faults.into_iter().map(|fault| Fault {
            path: format!("{path}{}", fault.path),
            ..fault
        });
        self.faults.extend(within);
    }

    /// Whether there is a field with something in it.
    pub fn has(&self, key: &str) -> bool {
        let mut members = self.members.iter();
        members.any(|(name, node)| name == key && !matches!(node, Node::Scalar(Value::Null)))
    }

    /// Who acts.
    pub fn by(&mut self) -> Option<String> {
        self.limited("by", true, LONGEST_NAME)
    }

    /// A text that has to be there.
    pub fn text(&mut self, key: &str) -> Option<String> {
        self.limited(key, true, LONGEST_TEXT)
    }

    /// A text that may be left out.
    pub fn optional_text(&mut self, key: &str) -> Option<String> {
        self.limited(key, false, LONGEST_TEXT)
    }

    /// A finite number that has to be there.
    pub fn number(&mut self, key: &str) -> Option<f64> {
        let node = self.required(key)?;
        self.finite(key, &node)
    }

    /// A finite number that may be left out.
    pub fn optional_number(&mut self, key: &str) -> Option<f64> {
        let node = self.take(key)?;
        self.finite(key, &node)
    }

    /// A whole number from 1 that may be left out.
    pub fn optional_count(&mut self, key: &str) -> Option<u32> {
        let node = self.take(key)?;
        let count = match &node {
            Node::Scalar(value) => value.as_u64().and_then(|n| u32::try_from(n).ok()),
            _ => None,
        };
        let count = count.filter(|&number| number > 0);
        if count.is_none() {
            self.fault(key, "this is no whole number from 1", "write one, as in 3");
        }
        count
    }

    /// A time that has to be there.
    pub fn time(&mut self, key: &str) -> Option<OffsetDateTime> {
        let node = self.required(key)?;
        self.moment(key, &node)
    }

    /// A time that may be left out.
    pub fn optional_time(&mut self, key: &str) -> Option<OffsetDateTime> {
        let node = self.take(key)?;
        self.moment(key, &node)
    }

    /// A time that has to be there and not in the future.
    pub fn past(&mut self, key: &str, now: OffsetDateTime) -> Option<OffsetDateTime> {
        let time = self.time(key)?;
        if time > now + FUTURE_ALLOWANCE {
            self.fault(key, "this time is in the future", "check the clock");
        }
        Some(time)
    }

    /// One of some words, as serde knows them.
    pub fn word<T: DeserializeOwned>(&mut self, key: &str, words: &str) -> Option<T> {
        let node = self.required(key)?;
        let word = match node {
            Node::Scalar(value @ Value::String(_)) => serde_json::from_value(value).ok(),
            _ => None,
        };
        if word.is_none() {
            self.fault(
                key,
                "this is none of the known words",
                format!("one of {words}"),
            );
        }
        word
    }

    /// Any JSON that has to be there.
    pub fn any(&mut self, key: &str) -> Option<Value> {
        let node = self.required(key)?;
        if node.repeats() {
            self.fault(key, "a key in it stands more than once", "give it once");
        }
        Some(node.into_value())
    }

    /// An object that may be left out, taken apart by `read`.
    pub fn optional_object<T>(
        &mut self,
        key: &str,
        read: impl FnOnce(&mut Fields) -> Option<T>,
    ) -> Option<T> {
        let node = self.take(key)?;
        let path = self.place(key);
        self.object(path, node, read)
    }

    /// A list of objects that has to be there, each taken apart by `read`.
    pub fn list<T>(
        &mut self,
        key: &str,
        most: usize,
        read: impl Fn(&mut Fields) -> Option<T>,
    ) -> Option<Vec<T>> {
        let path = self.place(key);
        let items = match self.required(key)? {
            Node::Array(items) if (1..=most).contains(&items.len()) => items,
            _ => {
                let mend = format!("give a list of 1 to {most} objects");
                self.fault(key, "this is no such list", mend);
                return None;
            }
        };
        let items = items.into_iter().enumerate();
        let read: Vec<Option<T>> = items
            .map(|(at, node)| self.object(format!("{path}/{at}"), node, &read))
            .collect();
        read.into_iter().collect()
    }

    /// Refuses what is left, and tells every fault; `value` is what was made of
    /// the fields.
    ///
    /// # Errors
    ///
    /// Where there is a fault.
    pub fn finish<T>(mut self, value: Option<T>) -> Result<T, Problem> {
        self.refuse_rest();
        match value {
            Some(value) if self.faults.is_empty() => Ok(value),
            _ => {
                let detail = format!("{} in the body", count(&self.faults));
                self.faults.truncate(MOST_FAULTS);
                Err(Problem::new(Kind::Unacceptable, detail).with_faults(self.faults))
            }
        }
    }

    fn place(&self, key: &str) -> String {
        let shown: String = key.chars().take(LONGEST_NAME).collect();
        let key = shown.replace('~', "~0").replace('/', "~1");
        format!("{}/{key}", self.path)
    }

    /// A member that may be left out; null is as good as nothing.
    fn take(&mut self, key: &str) -> Option<Node> {
        let mut found = None;
        let mut times = 0;
        let members = std::mem::take(&mut self.members);
        for (name, node) in members {
            if name == key {
                times += 1;
                found.get_or_insert(node);
            } else {
                self.members.push((name, node));
            }
        }
        if times > 1 {
            self.fault(key, "this field stands more than once", "give it once");
        }
        found.filter(|node| !matches!(node, Node::Scalar(Value::Null)))
    }

    fn required(&mut self, key: &str) -> Option<Node> {
        let node = self.take(key);
        if node.is_none() {
            self.fault(key, "this field is missing", "give it");
        }
        node
    }

    fn limited(&mut self, key: &str, required: bool, most: usize) -> Option<String> {
        let node = if required {
            self.required(key)?
        } else {
            self.take(key)?
        };
        let text = match node {
            Node::Scalar(Value::String(text)) => text,
            _ => {
                self.fault(key, "this is no text", "put it in double quotes");
                return None;
            }
        };
        let text = text.trim();
        if text.is_empty() || text.chars().count() > most {
            let mend = format!("write 1 to {most} characters");
            self.fault(key, "this text is empty or too long", mend);
            return None;
        }
        Some(text.to_owned())
    }

    fn finite(&mut self, key: &str, node: &Node) -> Option<f64> {
        let number = match node {
            Node::Scalar(value) => value.as_f64().filter(|number| number.is_finite()),
            _ => None,
        };
        if number.is_none() {
            self.fault(key, "this is no number", "write a number, as in 1.5");
        }
        number
    }

    fn moment(&mut self, key: &str, node: &Node) -> Option<OffsetDateTime> {
        let time = match node {
            Node::Scalar(Value::String(text)) => OffsetDateTime::parse(text, &Rfc3339).ok(),
            _ => None,
        };
        // What is kept is nanoseconds in 64 bits.
        let time = time.filter(|time| i64::try_from(time.unix_timestamp_nanos()).is_ok());
        if time.is_none() {
            let mend = "write it as in RFC 3339: \"2026-03-17T10:05:00Z\"";
            self.fault(key, "this is no time", mend);
        }
        time.map(|time| time.to_offset(UtcOffset::UTC))
    }

    fn object<T>(
        &mut self,
        path: String,
        node: Node,
        read: impl FnOnce(&mut Fields) -> Option<T>,
    ) -> Option<T> {
        let Node::Object(members) = node else {
            let what = fault(&path, "this is no object", "write it in braces");
            self.faults.push(what);
            return None;
        };
        let mut inner = Fields {
            path,
            members,
            faults: Vec::new(),
        };
        let value = read(&mut inner);
        inner.refuse_rest();
        self.faults.append(&mut inner.faults);
        value
    }

    fn refuse_rest(&mut self) {
        for (key, _) in std::mem::take(&mut self.members) {
            self.fault(
                &key,
                "this field is not known",
                "leave it out; /docs lists them",
            );
        }
    }
}

fn fault(path: &str, what: &str, mend: &str) -> Fault {
    Fault {
        severity: Severity::Error,
        path: path.to_owned(),
        line: None,
        column: None,
        what: what.to_owned(),
        mend: mend.to_owned(),
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::alarms::Outcome;

    fn places(problem: &Problem) -> Vec<String> {
        let document: Value = serde_json::from_slice(&problem.document()).expect("JSON");
        let faults = document["faults"].as_array().expect("faults");
        let places = faults.iter().map(|f| f["path"].as_str().expect("a place"));
        places.map(str::to_owned).collect()
    }

    #[test]
    fn every_fault_is_told_with_its_place() {
        let text = r#"{"by": " ", "until": "soon", "n": 0, "outcome": "perhaps", "x": "a",
            "a/b": 1, "note": 3, "note": "n", "list": [{"z": 1}, 7, {"value": 2}]}"#;
        let mut fields = of_text(text).expect("an object");
        assert_eq!(fields.by(), None);
        assert_eq!(fields.time("until"), None);
        assert_eq!(fields.optional_count("n"), None);
        let outcome: Option<Outcome> = fields.word("outcome", "confirmed");
        assert_eq!(outcome, None);
        assert_eq!(fields.number("x"), None);
        assert_eq!(fields.optional_text("note"), None);
        let list = fields.list("list", 3, |item| item.number("value"));
        assert_eq!(list, None);
        assert_eq!(fields.text("missing"), None);
        let problem = fields.finish(Some(())).expect_err("faults");
        let expected = [
            "/by",
            "/until",
            "/n",
            "/outcome",
            "/x",
            "/note",
            "/note",
            "/list/0/value",
            "/list/0/z",
            "/list/1",
            "/missing",
            "/a~1b",
        ];
        assert_eq!(places(&problem), expected);
    }

    #[test]
    fn what_is_there_is_read() {
        let text = r#"{"by": " R. Moss ", "at": "2031-04-02T12:00:00+02:00", "size": -1,
            "more": null, "inner": {"unit": "t/h"}, "u": {"absolute": "1 K"}}"#;
        let mut fields = of_text(text).expect("an object");
        assert_eq!(fields.by().as_deref(), Some("R. Moss"));
        let now = time::macros::datetime!(2031-04-02 10:00 UTC);
        assert_eq!(fields.past("at", now), Some(now));
        assert_eq!(fields.number("size"), Some(-1.0));
        assert_eq!(fields.optional_number("more"), None);
        let unit = fields.optional_object("inner", |inner| inner.text("unit"));
        assert_eq!(unit.as_deref(), Some("t/h"));
        let any = fields.any("u").expect("there");
        assert_eq!(any["absolute"], "1 K");
        fields.finish(Some(())).expect("no fault");
    }

    #[test]
    fn what_is_no_object_is_refused() {
        for text in ["", "{", "{\"by\": NaN}", "{\"by\": 1e400}", "{} {}"] {
            let refused = of_text(text).err().expect(text);
            assert_eq!(refused.status(), Problem::new(Kind::Malformed, "").status());
        }
        for text in ["[]", "1", "null", "\"x\""] {
            let refused = of_text(text).err().expect(text);
            assert_eq!(
                refused.status(),
                Problem::new(Kind::Unacceptable, "").status()
            );
        }
    }
}
