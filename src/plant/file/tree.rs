//! The neutral tree that TOML and JSON are read into: values with places.

use std::ops::Range;

use serde_json::{Map, Value};

use super::fault::{Fault, Severity};

/// A value and the bytes of the text that it stands in.
#[derive(Clone, Debug)]
pub(super) struct Node {
    pub span: Range<usize>,
    pub value: Content,
}

/// What a node holds.
#[derive(Clone, Debug)]
pub(super) enum Content {
    /// Strings.
    String(String),
    /// All numbers; infinite where the text is beyond the range of a double.
    Number(f64),
    /// Booleans.
    Boolean(bool),
    /// Arrays.
    Array(Vec<Node>),
    /// Tables.
    Table(Table),
    /// What a plant file has no use for (`null`, a date), by its name.
    Other(&'static str),
}

/// Keys with values, in the order of the text.
#[derive(Clone, Debug, Default)]
pub(super) struct Table {
    /// The first entry of each key.
    pub entries: Vec<Entry>,
    /// Entries whose key was there already, each reported as a fault: they are
    /// looked at only to keep one fault from causing others.
    pub repeated: Vec<Entry>,
}

impl Table {
    /// Drops the members of a member that stand beyond an offset.
    pub fn forget_after(&mut self, key: &str, offset: usize) {
        let entry = self.entries.iter_mut().find(|entry| entry.key == key);
        if let Some(Content::Table(table)) = entry.map(|entry| &mut entry.node.value) {
            table
                .entries
                .retain(|member| member.key_span.start < offset);
        }
    }
}

/// One key and its value.
#[derive(Clone, Debug)]
pub(super) struct Entry {
    pub key: String,
    pub key_span: Range<usize>,
    pub node: Node,
}

impl Content {
    /// The sort of value, for messages.
    pub fn sort(&self) -> &'static str {
        match self {
            Content::String(_) => "a string",
            Content::Number(_) => "a number",
            Content::Boolean(_) => "a boolean",
            Content::Array(_) => "an array",
            Content::Table(_) => "a table",
            Content::Other(name) => name,
        }
    }
}

impl Node {
    /// The structure as JSON with sorted keys: equal for files that differ only
    /// in format, white space, comments, order of keys or spelling of numbers.
    pub fn to_json(&self) -> Value {
        match &self.value {
            Content::String(s) => Value::String(s.clone()),
            Content::Number(x) => number(*x),
            Content::Boolean(b) => Value::Bool(*b),
            Content::Array(items) => items.iter().map(Node::to_json).collect(),
            Content::Table(table) => {
                let mut sorted: Vec<&Entry> = table.entries.iter().collect();
                sorted.sort_by(|a, b| a.key.cmp(&b.key));
                let pairs = sorted.iter().map(|e| (e.key.clone(), e.node.to_json()));
                Value::Object(pairs.collect::<Map<_, _>>())
            }
            Content::Other(_) => Value::Null,
        }
    }
}

/// Largest whole number that a double holds with all its predecessors.
const MAX_WHOLE: f64 = 9_007_199_254_740_992.0;

fn number(x: f64) -> Value {
    if x.fract() == 0.0 && x.abs() <= MAX_WHOLE {
        // Whole and within 2^53: the conversion is exact; -0.0 becomes 0.
        Value::from(x as i64)
    } else {
        Value::from(x)
    }
}

/// A text and what was found wrong with it so far.
pub(super) struct Findings<'t> {
    text: &'t str,
    found: Vec<(usize, Fault)>,
    errors: usize,
    unreported: usize,
}

/// Most faults that one answer lists.
const MAX_FAULTS: usize = 5000;

/// A place: JSON pointer and byte offset.
#[derive(Clone, Debug)]
pub(super) struct Place {
    pub path: String,
    pub offset: usize,
}

/// Longest key that a pointer shows in full: one that is longer is a fault of
/// its own, and must not swell every fault below it.
const MAX_KEY: usize = 200;

impl Place {
    /// The file as a whole.
    pub fn file() -> Place {
        Place::at(0)
    }

    /// An offset in the file as a whole.
    pub fn at(offset: usize) -> Place {
        Place {
            path: String::new(),
            offset,
        }
    }

    /// The place of a member of this one.
    pub fn child(&self, key: &str, offset: usize) -> Place {
        let shown: String = key.chars().take(MAX_KEY).collect();
        let escaped = shown.replace('~', "~0").replace('/', "~1");
        Place {
            path: format!("{}/{escaped}", self.path),
            offset,
        }
    }
}

impl<'t> Findings<'t> {
    pub fn new(text: &'t str) -> Self {
        Findings {
            text,
            found: Vec::new(),
            errors: 0,
            unreported: 0,
        }
    }

    pub fn error(&mut self, place: &Place, what: impl Into<String>, mend: impl Into<String>) {
        self.errors += 1;
        self.add(Severity::Error, place, what.into(), mend.into());
    }

    pub fn warning(&mut self, place: &Place, what: impl Into<String>, mend: impl Into<String>) {
        self.add(Severity::Warning, place, what.into(), mend.into());
    }

    /// Number of errors found.
    pub fn errors(&self) -> usize {
        self.errors
    }

    /// All faults in the order of the text, with lines and columns.
    pub fn into_faults(mut self) -> Vec<Fault> {
        if self.unreported > 0 {
            let what = format!("{} more faults are not listed", self.unreported + 1);
            self.found.pop();
            self.add(
                Severity::Error,
                &Place::at(self.text.len()),
                what,
                "mend these first".into(),
            );
        }
        self.found.sort_by_key(|(offset, _)| *offset);
        let mut cursor = Cursor::new(self.text);
        let found = self.found.into_iter().map(|(offset, mut fault)| {
            let (line, column) = cursor.go_to(offset);
            fault.line = Some(line);
            fault.column = Some(column);
            fault
        });
        found.collect()
    }

    fn add(&mut self, severity: Severity, place: &Place, what: String, mend: String) {
        if self.found.len() >= MAX_FAULTS {
            self.unreported += 1;
            return;
        }
        let fault = Fault {
            severity,
            path: place.path.clone(),
            line: None,
            column: None,
            what,
            mend,
        };
        self.found.push((place.offset, fault));
    }
}

/// Walks a text forward once, counting lines and columns.
struct Cursor<'t> {
    text: &'t str,
    offset: usize,
    line: usize,
    column: usize,
}

impl<'t> Cursor<'t> {
    fn new(text: &'t str) -> Self {
        Cursor {
            text,
            offset: 0,
            line: 1,
            column: 1,
        }
    }

    /// Line and column of an offset not before the last one.
    fn go_to(&mut self, offset: usize) -> (usize, usize) {
        let mut offset = offset.min(self.text.len());
        while !self.text.is_char_boundary(offset) {
            offset -= 1;
        }
        for c in self.text[self.offset.min(offset)..offset].chars() {
            if c == '\n' {
                self.line += 1;
                self.column = 1;
            } else {
                self.column += 1;
            }
        }
        self.offset = self.offset.max(offset);
        (self.line, self.column)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn faults_come_in_file_order_with_line_and_column() {
        let text = "äb\ncd\n";
        let mut findings = Findings::new(text);
        for offset in [5, 3, 0, 99] {
            findings.error(&Place::at(offset), format!("at {offset}"), "");
        }
        let places: Vec<_> = findings
            .into_faults()
            .iter()
            .map(|f| (f.line, f.column))
            .collect();
        let at = |line, column| (Some(line), Some(column));
        assert_eq!(places, [at(1, 1), at(1, 3), at(2, 2), at(3, 1)]);
    }

    #[test]
    fn pointers_are_escaped() {
        assert_eq!(Place::file().child("a/b~c", 0).path, "/a~1b~0c");
    }

    #[test]
    fn the_list_of_faults_is_bounded() {
        let mut findings = Findings::new("x");
        for _ in 0..MAX_FAULTS + 10 {
            findings.error(&Place::file(), "bad", "");
        }
        let faults = findings.into_faults();
        assert_eq!(faults.len(), MAX_FAULTS);
        assert_eq!(faults[MAX_FAULTS - 1].what, "11 more faults are not listed");
    }
}
