//! TOML 1.1 into the neutral tree, with the place of every value.
//!
//! A duplicate key does not end the reading: the first value stands, the second
//! is reported, and everything else is checked as well. The parser bounds the
//! nesting of brackets and of dotted keys by itself.

use std::collections::{HashMap, HashSet};
use std::ops::Range;

use toml::Spanned;
use toml::de::{DeInteger, DeTable, DeValue};

use super::json::duplicate;
use super::tree::{Content, Entry, Findings, Node, Place, Table};

/// Reads `text`; `None` after a syntax error, which is then among `findings`.
pub(super) fn read(text: &str, findings: &mut Findings<'_>) -> Option<Node> {
    let (document, errors) = DeTable::parse_recoverable(text);
    let mut root = table(document.into_inner(), 0..text.len());
    let mut definitions = None;
    for error in errors {
        let span = error.span().unwrap_or(0..0);
        let message = error.message();
        let key = key_text(text, &span);
        if message == "duplicate key" {
            let definitions = definitions.get_or_insert_with(|| Definitions::of(&root));
            let Some(parent) = definitions.parent(&key, span.start) else {
                continue;
            };
            duplicate(&parent.child(&key, span.start), &key, findings);
            if let Some(section) = section(&mut root, &parent) {
                let entry = repeated(text, key, span);
                if matches!(entry.node.value, Content::Other(_)) {
                    // The parser mixes the keys below a second heading with
                    // those below the first.
                    let path = parent.child(&entry.key, 0).path;
                    definitions.closed.insert(path);
                    section.forget_after(&entry.key, entry.key_span.start);
                }
                section.repeated.push(entry);
            }
        } else if message.starts_with("cannot extend value") {
            let what = format!("the dotted key reaches into `{key}`, which is complete already");
            let mend = "put a name with a dot in quotes: \"A.B\" = { ... }";
            findings.error(&Place::at(span.start), what, mend);
        } else {
            let what = format!("not TOML: {message}");
            let mend = "correct the TOML at this place";
            findings.error(&Place::at(span.start), what, mend);
            return None;
        }
    }
    Some(root)
}

/// The table of the top level that a place stands for.
fn section<'n>(root: &'n mut Node, place: &Place) -> Option<&'n mut Table> {
    let name = place.path.strip_prefix('/')?;
    let Content::Table(top) = &mut root.value else {
        return None;
    };
    let entry = top.entries.iter_mut().find(|entry| entry.key == name)?;
    match &mut entry.node.value {
        Content::Table(table) => Some(table),
        _ => None,
    }
}

/// The entry of a key that the parser passed over, read again from the rest of
/// its line; with no value where it does not stand there whole.
fn repeated(text: &str, key: String, key_span: Range<usize>) -> Entry {
    let rest = text[key_span.end..].lines().next().unwrap_or_default();
    let value = rest.trim_start().strip_prefix('=').unwrap_or_default();
    let start = key_span.end + rest.len() - value.len();
    let node = match DeValue::parse(value.trim_end()) {
        Ok(value) => shifted(node(value), start),
        Err(_) => Node {
            span: key_span.clone(),
            value: Content::Other("a second table"),
        },
    };
    Entry {
        key,
        key_span,
        node,
    }
}

/// A node further on in the text.
fn shifted(mut node: Node, by: usize) -> Node {
    let shift = |span: &Range<usize>| span.start + by..span.end + by;
    node.span = shift(&node.span);
    node.value = match node.value {
        Content::Array(items) => {
            Content::Array(items.into_iter().map(|item| shifted(item, by)).collect())
        }
        Content::Table(mut table) => {
            for entry in &mut table.entries {
                entry.key_span = shift(&entry.key_span);
                let value = std::mem::replace(&mut entry.node.value, Content::Boolean(false));
                let span = entry.node.span.clone();
                entry.node = shifted(Node { span, value }, by);
            }
            Content::Table(table)
        }
        other => other,
    };
    node
}

fn table(table: DeTable<'_>, span: Range<usize>) -> Node {
    let mut entries: Vec<Entry> = table
        .into_iter()
        .map(|(key, value)| Entry {
            key_span: key.span(),
            key: key.into_inner().into_owned(),
            node: node(value),
        })
        .collect();
    entries.sort_by_key(|entry| entry.key_span.start);
    Node {
        span,
        value: Content::Table(Table {
            entries,
            repeated: Vec::new(),
        }),
    }
}

fn node(value: Spanned<DeValue<'_>>) -> Node {
    let span = value.span();
    let value = match value.into_inner() {
        DeValue::Table(t) => return table(t, span),
        DeValue::String(s) => Content::String(s.into_owned()),
        DeValue::Integer(i) => Content::Number(integer(&i)),
        // Infinite and NaN pass: whoever wants a number asks for a finite one.
        DeValue::Float(f) => Content::Number(f.as_str().parse().unwrap_or(f64::NAN)),
        DeValue::Boolean(b) => Content::Boolean(b),
        DeValue::Array(items) => Content::Array(items.into_iter().map(node).collect()),
        DeValue::Datetime(_) => Content::Other("a date or time"),
    };
    Node { span, value }
}

fn integer(i: &DeInteger<'_>) -> f64 {
    if i.radix() == 10 {
        return i.as_str().parse().unwrap_or(f64::NAN);
    }
    i128::from_str_radix(i.as_str(), i.radix()).map_or(f64::INFINITY, |x| x as f64)
}

/// The key at `span`, without its quotes.
fn key_text(text: &str, span: &Range<usize>) -> String {
    let key = text.get(span.clone()).unwrap_or_default();
    key.trim_matches(['"', '\'']).to_owned()
}

/// Where each key is defined, by its text.
struct Definitions {
    found: HashMap<String, Vec<(usize, Place)>>,
    /// Tables in which repeated keys are reported no more.
    closed: HashSet<String>,
}

impl Definitions {
    fn of(root: &Node) -> Self {
        let mut found: HashMap<String, Vec<(usize, Place)>> = HashMap::new();
        let mut open = vec![(root, Place::file())];
        while let Some((node, place)) = open.pop() {
            let Content::Table(table) = &node.value else {
                continue;
            };
            for entry in &table.entries {
                let start = entry.key_span.start;
                let of_key = found.entry(entry.key.clone()).or_default();
                of_key.push((start, place.clone()));
                if matches!(entry.node.value, Content::Table(_)) {
                    open.push((&entry.node, place.child(&entry.key, start)));
                }
            }
        }
        for places in found.values_mut() {
            places.sort_by_key(|(start, _)| *start);
        }
        Definitions {
            found,
            closed: HashSet::new(),
        }
    }

    /// The table in which a key was last defined up to an offset: the one in
    /// which the parser met it again (a repeated heading takes the place of the
    /// first). `None` where that is of no interest.
    fn parent(&self, key: &str, offset: usize) -> Option<Place> {
        let places = self.found.get(key).map_or(&[][..], Vec::as_slice);
        let before = places.partition_point(|(start, _)| *start <= offset);
        let parent = match before.checked_sub(1) {
            Some(last) => places[last].1.clone(),
            None => Place::file(),
        };
        (!self.closed.contains(&parent.path)).then_some(parent)
    }
}
