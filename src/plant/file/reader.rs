//! Reading tables of the neutral tree: every fault is noted, none ends the
//! reading.

use super::suggest::Suggester;
use super::tree::{Content, Entry, Findings, Node, Place};

/// What the whole reading shares.
pub(super) struct Context<'t> {
    pub findings: Findings<'t>,
    pub suggester: Suggester,
}

/// A value, its place, and the place of its key.
#[derive(Clone, Debug)]
pub(super) struct At<'n> {
    pub node: &'n Node,
    /// Where the value stands.
    pub place: Place,
    /// Where its key stands: what lacks something is shown there.
    pub key: Place,
}

/// A table whose keys are all known.
#[derive(Clone, Debug)]
pub(super) struct Fields<'n> {
    pub place: Place,
    entries: &'n [Entry],
}

/// The keys of a table, and what the table is, for messages.
pub(super) struct Shape {
    pub owner: &'static str,
    pub keys: &'static [&'static str],
}

impl<'t> Context<'t> {
    pub fn new(text: &'t str) -> Self {
        Context {
            findings: Findings::new(text),
            suggester: Suggester::new(),
        }
    }

    pub fn error(&mut self, place: &Place, what: impl Into<String>, mend: impl Into<String>) {
        self.findings.error(place, what, mend);
    }

    /// "did you mean `x`?", or else `otherwise`.
    pub fn did_you_mean<'k>(
        &mut self,
        word: &str,
        names: impl IntoIterator<Item = &'k str>,
        otherwise: impl FnOnce() -> String,
    ) -> String {
        match self.suggester.closest(word, names) {
            Some(name) => format!("did you mean `{name}`?"),
            None => otherwise(),
        }
    }
}

impl<'n> At<'n> {
    /// The whole file.
    pub fn root(node: &'n Node) -> Self {
        let place = Place {
            path: String::new(),
            offset: 0,
        };
        At {
            node,
            key: place.clone(),
            place,
        }
    }

    /// The member of a table.
    pub fn member(parent: &Place, entry: &'n Entry) -> Self {
        let key = parent.child(&entry.key, entry.key_span.start);
        At {
            node: &entry.node,
            place: Place {
                path: key.path.clone(),
                offset: entry.node.span.start,
            },
            key,
        }
    }

    /// The text of a string.
    pub fn string(&self, cx: &mut Context<'_>, example: &str) -> Option<&'n str> {
        match &self.node.value {
            Content::String(s) => Some(s),
            other => self.wrong_sort(cx, "a string", other, example),
        }
    }

    /// A finite number.
    pub fn number(&self, cx: &mut Context<'_>, example: &str) -> Option<f64> {
        match &self.node.value {
            Content::Number(x) if x.is_finite() => Some(*x),
            Content::Number(_) => {
                cx.error(
                    &self.place,
                    "the number is infinite, not a number, or beyond 1.8e308",
                    format!("write a finite number, such as {example}"),
                );
                None
            }
            other => self.wrong_sort(cx, "a number", other, example),
        }
    }

    /// `true` or `false`.
    pub fn boolean(&self, cx: &mut Context<'_>) -> Option<bool> {
        match &self.node.value {
            Content::Boolean(b) => Some(*b),
            other => self.wrong_sort(cx, "true or false", other, "true"),
        }
    }

    /// The members of an array.
    pub fn array(&self, cx: &mut Context<'_>, example: &str) -> Option<Vec<At<'n>>> {
        match &self.node.value {
            Content::Array(items) => {
                let members = items.iter().enumerate().map(|(i, node)| {
                    let place = self.place.child(&i.to_string(), node.span.start);
                    At {
                        node,
                        key: place.clone(),
                        place,
                    }
                });
                Some(members.collect())
            }
            other => self.wrong_sort(cx, "an array", other, example),
        }
    }

    /// The entries of a table with free keys.
    pub fn entries(&self, cx: &mut Context<'_>, example: &str) -> Option<Vec<(&'n str, At<'n>)>> {
        match &self.node.value {
            Content::Table(table) => Some(self.members(&table.entries)),
            other => self.wrong_sort(cx, "a table", other, example),
        }
    }

    /// The entries of a table whose keys were there already.
    pub fn repeated(&self) -> Vec<(&'n str, At<'n>)> {
        match &self.node.value {
            Content::Table(table) => self.members(&table.repeated),
            _ => Vec::new(),
        }
    }

    fn members(&self, entries: &'n [Entry]) -> Vec<(&'n str, At<'n>)> {
        let entries = entries.iter();
        entries
            .map(|entry| (entry.key.as_str(), At::member(&self.key, entry)))
            .collect()
    }

    /// Whether the value is a table.
    pub fn is_table(&self) -> bool {
        matches!(self.node.value, Content::Table(_))
    }

    /// Whether the value is an array.
    pub fn is_array(&self) -> bool {
        matches!(self.node.value, Content::Array(_))
    }

    /// A table with fixed keys; unknown ones are faults.
    pub fn fields(&self, cx: &mut Context<'_>, shape: &Shape, example: &str) -> Option<Fields<'n>> {
        let entries = match &self.node.value {
            Content::Table(table) => &table.entries,
            other => return self.wrong_sort(cx, "a table", other, example),
        };
        let fields = Fields {
            place: self.key.clone(),
            entries,
        };
        for entry in entries {
            if !shape.keys.contains(&entry.key.as_str()) {
                let at = At::member(&self.key, entry);
                let mend = cx.did_you_mean(&entry.key, shape.keys.iter().copied(), || {
                    format!("remove it; the keys are {}", quoted(shape.keys))
                });
                let what = format!("`{}` is no key of {}", entry.key, shape.owner);
                cx.error(&at.key, what, mend);
            }
        }
        Some(fields)
    }

    fn wrong_sort<T>(
        &self,
        cx: &mut Context<'_>,
        wanted: &str,
        found: &Content,
        example: &str,
    ) -> Option<T> {
        let what = format!("{wanted} is needed here, this is {}", found.sort());
        cx.error(&self.place, what, format!("write {example}"));
        None
    }
}

impl<'n> Fields<'n> {
    /// The value of a key, if it is there.
    pub fn get(&self, key: &str) -> Option<At<'n>> {
        let entry = self.entries.iter().find(|entry| entry.key == key)?;
        Some(At::member(&self.place, entry))
    }

    /// The value of a key that must be there.
    pub fn require(&self, key: &str, cx: &mut Context<'_>, mend: &str) -> Option<At<'n>> {
        let found = self.get(key);
        if found.is_none() {
            cx.error(&self.place, format!("`{key}` is missing"), mend);
        }
        found
    }
}

/// Names in backquotes, with commas.
pub(super) fn quoted<S: AsRef<str>>(names: &[S]) -> String {
    let quoted: Vec<String> = names.iter().map(|n| format!("`{}`", n.as_ref())).collect();
    quoted.join(", ")
}

/// Longest name of a plant, stream, piece of equipment, tag or assumption.
pub(super) const MAX_NAME: usize = 128;

/// Checks a name; `forbidden` lists characters that it may not hold.
pub(super) fn check_name(name: &str, forbidden: &[char], place: &Place, cx: &mut Context<'_>) {
    let length = name.chars().count();
    if length == 0 || length > MAX_NAME {
        cx.error(
            place,
            format!("the name has {length} characters"),
            format!("use 1 to {MAX_NAME} characters"),
        );
    } else if let Some(c) = name.chars().find(|c| forbidden.contains(c)) {
        cx.error(
            place,
            format!("`{c}` in the name `{name}`"),
            format!("leave the `{c}` out, or write `-` for it"),
        );
    } else if name.trim() != name || name.chars().any(char::is_control) {
        cx.error(
            place,
            "a control character, or white space at an end of the name",
            "leave it out",
        );
    }
}
