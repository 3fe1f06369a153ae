//! Faults of a batch: bounded in number and in size, and placed by one walk
//! through the text however many there are.

use crate::plant::{Fault, Severity};

/// Most faults that are told of one body; one more entry counts the rest.
pub(super) const MOST_FAULTS: usize = 1000;

/// Longest key that a pointer shows in full, in characters: a longer one must
/// not swell every fault below it.
const LONGEST_KEY: usize = 200;

/// A JSON pointer (RFC 6901), as a list that grows towards the root.
#[derive(Clone, Copy)]
pub(super) enum Path<'p> {
    Root,
    Key(&'p Path<'p>, &'p str),
    Index(&'p Path<'p>, usize),
}

impl Path<'_> {
    pub fn pointer(&self) -> String {
        match self {
            Path::Root => String::new(),
            Path::Key(parent, key) => {
                let shown: String = key.chars().take(LONGEST_KEY).collect();
                let key = shown.replace('~', "~0").replace('/', "~1");
                format!("{}/{key}", parent.pointer())
            }
            Path::Index(parent, index) => format!("{}/{index}", parent.pointer()),
        }
    }
}

/// Collects faults with their offsets.
pub(super) struct Faults<'a> {
    source: &'a str,
    found: Vec<(usize, Fault)>,
    untold: usize,
    /// Some of them are faults of the JSON itself.
    pub syntax: bool,
}

impl<'a> Faults<'a> {
    pub fn new(source: &'a str) -> Self {
        Faults {
            source,
            found: Vec::new(),
            untold: 0,
            syntax: false,
        }
    }

    pub fn is_empty(&self) -> bool {
        self.found.is_empty()
    }

    /// Adds a fault at an offset, which is a boundary of characters.
    pub fn add(
        &mut self,
        path: &Path<'_>,
        offset: usize,
        what: impl Into<String>,
        mend: impl Into<String>,
    ) {
        if self.found.len() >= MOST_FAULTS {
            self.untold += 1;
            return;
        }
        let fault = Fault {
            severity: Severity::Error,
            path: path.pointer(),
            line: None,
            column: None,
            what: what.into(),
            mend: mend.into(),
        };
        self.found.push((offset, fault));
    }

    /// The same for a fault of the JSON itself.
    pub fn add_syntax(
        &mut self,
        path: &Path<'_>,
        offset: usize,
        what: impl Into<String>,
        mend: impl Into<String>,
    ) {
        self.syntax = true;
        self.add(path, offset, what, mend);
    }

    /// All of them in the order of the text, with lines and columns.
    pub fn finish(mut self) -> Vec<Fault> {
        self.found.sort_by_key(|(offset, _)| *offset);
        let (mut at, mut line, mut column) = (0, 1, 1);
        let mut faults: Vec<Fault> = Vec::with_capacity(self.found.len() + 1);
        for (offset, mut fault) in self.found {
            for character in self.source[at..offset].chars() {
                if character == '\n' {
                    line += 1;
                    column = 1;
                } else {
                    column += 1;
                }
            }
            at = offset;
            fault.line = Some(line);
            fault.column = Some(column);
            faults.push(fault);
        }
        if self.untold > 0 {
            faults.push(untold(self.untold as u64));
        }
        faults
    }
}

/// What counts the faults that are not told.
pub(super) fn untold(count: u64) -> Fault {
    let noun = if count == 1 { "fault" } else { "faults" };
    Fault {
        severity: Severity::Error,
        path: String::new(),
        line: None,
        column: None,
        what: format!("{count} more {noun} not told here"),
        mend: "mend these first".to_owned(),
    }
}
