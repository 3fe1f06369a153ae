//! What a reading was averaged from, and whether the plant was steady: optional
//! parts of a batch, for clients that average themselves and for the batches that
//! are made from samples here.

use super::faults::Path;
use super::fields::{Reader, find, kind};
use super::json::{Member, Node, Value, shorten};
use crate::plant::{Averaged, Flag, Steadiness};

/// Longest reason for not using a value, in characters.
const LONGEST_REASON: usize = 500;

const AVERAGED: [&str; 7] = [
    "samples", "used", "covered", "scatter", "steady", "flags", "unused",
];

impl<'a> Reader<'a> {
    /// The field `averaged` of a reading.
    pub(super) fn averaged(
        &mut self,
        path: &Path<'_>,
        node: &Node<'a>,
    ) -> Option<Option<Averaged>> {
        let members = self.members(path, node, "what a reading is averaged from", &AVERAGED)?;
        let mut count = |key: &str| {
            let mend = "how many samples, a whole number";
            let node = self.required(path, node, members, key, mend)?;
            self.whole(&Path::Key(path, key), node)
        };
        let taken = count("samples");
        let used = count("used");
        let covered = self
            .required(
                path,
                node,
                members,
                "covered",
                "a part of the period, 0 to 1",
            )
            .and_then(|node| {
                let mend = "write the part of the period that good samples cover, 0 to 1";
                self.bounded(&Path::Key(path, "covered"), node, 1.0, mend)
            });
        let scatter = self.optional(path, members, "scatter", |reader, path, node| {
            let mend = "write the standard uncertainty of the mean in the tag's unit, 0 or more";
            reader.bounded(path, node, f64::MAX, mend)
        });
        let steady = self.optional(path, members, "steady", |reader, path, node| {
            reader.boolean(path, node)
        });
        let flags = self.optional(path, members, "flags", |reader, path, node| {
            reader.flags(path, node)
        });
        let unused = self.optional(path, members, "unused", |reader, path, node| {
            reader.reason(path, node)
        });
        Some(Some(Averaged {
            taken: taken?,
            used: used?,
            covered: covered?,
            scatter: scatter?,
            steady: steady?,
            flags: flags?.unwrap_or_default(),
            unused: unused?,
        }))
    }

    /// The field `steadiness` of a batch.
    pub(super) fn steadiness(
        &mut self,
        path: &Path<'_>,
        node: &Node<'a>,
    ) -> Option<Option<Steadiness>> {
        let members = self.members(path, node, "steadiness", &["steady", "judged", "unsteady"])?;
        let steady = self
            .required(path, node, members, "steady", "true or false")
            .and_then(|node| self.boolean(&Path::Key(path, "steady"), node));
        let judged = self
            .required(path, node, members, "judged", "how many tags were judged")
            .and_then(|node| self.whole(&Path::Key(path, "judged"), node));
        let unsteady = self.optional(path, members, "unsteady", |reader, path, node| {
            reader.names(path, node)
        });
        Some(Some(Steadiness {
            steady: steady?,
            judged: judged?,
            unsteady: unsteady?.unwrap_or_default(),
        }))
    }

    /// A member that may be left out or null.
    fn optional<T>(
        &mut self,
        path: &Path<'_>,
        members: &[Member<'a>],
        key: &str,
        read: impl FnOnce(&mut Self, &Path<'_>, &Node<'a>) -> Option<T>,
    ) -> Option<Option<T>> {
        match find(members, key).map(|member| &member.node) {
            None => Some(None),
            Some(node) if matches!(node.value, Value::Null) => Some(None),
            Some(node) => read(self, &Path::Key(path, key), node).map(Some),
        }
    }

    fn whole(&mut self, path: &Path<'_>, node: &Node<'a>) -> Option<u32> {
        let mend = "write a whole number, 0 to 4294967295";
        let Value::Number { text, .. } = &node.value else {
            self.wrong_type(path, node, "a number", mend);
            return None;
        };
        let found = text.parse::<u32>().ok();
        if found.is_none() {
            let what = format!("{} is no whole number of 32 bits", shorten(text));
            self.faults.add(path, node.offset, what, mend);
        }
        found
    }

    fn bounded(&mut self, path: &Path<'_>, node: &Node<'a>, most: f64, mend: &str) -> Option<f64> {
        let Value::Number { text, value } = &node.value else {
            self.wrong_type(path, node, "a number", mend);
            return None;
        };
        if !(0.0..=most).contains(value) {
            let what = format!("{} is out of bounds", shorten(text));
            self.faults.add(path, node.offset, what, mend);
            return None;
        }
        Some(*value)
    }

    fn boolean(&mut self, path: &Path<'_>, node: &Node<'a>) -> Option<bool> {
        if let Value::Bool(found) = node.value {
            return Some(found);
        }
        self.wrong_type(path, node, "true or false", "write it without quotes");
        None
    }

    fn flags(&mut self, path: &Path<'_>, node: &Node<'a>) -> Option<Vec<(Flag, u32)>> {
        let names = Flag::ALL.map(Flag::name);
        let members = self.members(path, node, "the flags of samples", &names)?;
        let mut flags = Vec::new();
        for flag in Flag::ALL {
            if let Some(member) = find(members, flag.name()) {
                let count = self.whole(&Path::Key(path, flag.name()), &member.node)?;
                flags.push((flag, count));
            }
        }
        Some(flags)
    }

    fn reason(&mut self, path: &Path<'_>, node: &Node<'a>) -> Option<String> {
        let mend = format!("write a reason of 1 to {LONGEST_REASON} characters");
        let Value::String(text) = &node.value else {
            self.wrong_type(path, node, "a reason", &mend);
            return None;
        };
        let length = text.chars().count();
        if length == 0 || length > LONGEST_REASON {
            let what = format!("a reason of {length} characters");
            self.faults.add(path, node.offset, what, mend);
            return None;
        }
        Some(text.clone().into_owned())
    }

    fn names(&mut self, path: &Path<'_>, node: &Node<'a>) -> Option<Vec<String>> {
        let Value::Array(items) = &node.value else {
            let what = format!("{} where a list of tags is needed", kind(&node.value));
            self.faults
                .add(path, node.offset, what, "write [\"FT-201\"]");
            return None;
        };
        let each = items.iter().enumerate();
        let names: Vec<Option<String>> = each
            .map(|(index, item)| self.name(&Path::Index(path, index), item))
            .collect();
        names.into_iter().collect()
    }
}
