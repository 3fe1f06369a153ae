//! JSON (RFC 8259) into the neutral tree, with the place of every value.
//!
//! Unlike a map-building reader it keeps places, reports a duplicate key where
//! it stands, and refuses nesting beyond [`MAX_DEPTH`] before the stack is hurt.

use super::tree::{Content, Entry, Findings, Node, Place, Table};

/// Deepest nesting that is read; a plant file needs six levels.
pub(super) const MAX_DEPTH: usize = 64;

/// Reads `text`; `None` after a syntax error, which is then among `findings`.
pub(super) fn read(text: &str, findings: &mut Findings<'_>) -> Option<Node> {
    let mut reader = Reader {
        text,
        at: 0,
        findings,
    };
    reader.at = if text.starts_with('\u{feff}') { 3 } else { 0 };
    match reader.document() {
        Ok(node) => Some(node),
        Err(Syntax { offset, what }) => {
            findings.error(&Place::at(offset), what, "correct the JSON at this place");
            None
        }
    }
}

/// The keys above a value: a pointer is put together only where it is needed.
#[derive(Clone, Copy)]
struct Trail<'a> {
    above: Option<&'a Trail<'a>>,
    key: &'a str,
}

impl Trail<'_> {
    fn place(&self) -> Place {
        match self.above {
            Some(above) => above.place().child(self.key, 0),
            None => Place::file(),
        }
    }
}

struct Syntax {
    offset: usize,
    what: String,
}

struct Reader<'t, 'f, 'g> {
    text: &'t str,
    at: usize,
    findings: &'f mut Findings<'g>,
}

impl Reader<'_, '_, '_> {
    fn document(&mut self) -> Result<Node, Syntax> {
        self.skip_space();
        let root = Trail {
            above: None,
            key: "",
        };
        let node = self.value(&root, 0)?;
        self.skip_space();
        match self.peek() {
            None => Ok(node),
            Some(_) => Err(self.unexpected("the end of the file")),
        }
    }

    fn value(&mut self, trail: &Trail<'_>, depth: usize) -> Result<Node, Syntax> {
        if depth > MAX_DEPTH {
            return self.fail(format!("nested deeper than {MAX_DEPTH} levels"));
        }
        let start = self.at;
        let value = match self.peek() {
            Some(b'{') => self.table(trail, depth)?,
            Some(b'[') => self.array(trail, depth)?,
            Some(b'"') => Content::String(self.string()?),
            Some(b'-' | b'0'..=b'9') => Content::Number(self.number()?),
            Some(b't') => self.word("true", Content::Boolean(true))?,
            Some(b'f') => self.word("false", Content::Boolean(false))?,
            Some(b'n') => self.word("null", Content::Other("null"))?,
            _ => return Err(self.unexpected("a value")),
        };
        Ok(Node {
            span: start..self.at,
            value,
        })
    }

    fn table(&mut self, trail: &Trail<'_>, depth: usize) -> Result<Content, Syntax> {
        self.at += 1;
        let mut table = Table::default();
        let mut seen = std::collections::HashSet::new();
        self.skip_space();
        if self.take(b'}') {
            return Ok(Content::Table(table));
        }
        loop {
            self.skip_space();
            if self.peek() != Some(b'"') {
                return Err(self.unexpected("a key in double quotes"));
            }
            let start = self.at;
            let key = self.string()?;
            let key_span = start..self.at;
            self.skip_space();
            self.expect(b':', "`:`")?;
            self.skip_space();
            let below = Trail {
                above: Some(trail),
                key: &key,
            };
            let node = self.value(&below, depth + 1)?;
            let is_new = seen.insert(key.clone());
            if !is_new {
                duplicate(&trail.place().child(&key, start), &key, self.findings);
            }
            let entry = Entry {
                key,
                key_span,
                node,
            };
            if is_new {
                table.entries.push(entry);
            } else {
                table.repeated.push(entry);
            }
            self.skip_space();
            if self.take(b'}') {
                return Ok(Content::Table(table));
            }
            self.expect(b',', "`,` or `}`")?;
        }
    }

    fn array(&mut self, trail: &Trail<'_>, depth: usize) -> Result<Content, Syntax> {
        self.at += 1;
        let mut items = Vec::new();
        self.skip_space();
        if self.take(b']') {
            return Ok(Content::Array(items));
        }
        loop {
            self.skip_space();
            let index = items.len().to_string();
            let below = Trail {
                above: Some(trail),
                key: &index,
            };
            items.push(self.value(&below, depth + 1)?);
            self.skip_space();
            if self.take(b']') {
                return Ok(Content::Array(items));
            }
            self.expect(b',', "`,` or `]`")?;
        }
    }

    fn string(&mut self) -> Result<String, Syntax> {
        self.at += 1;
        let mut out = String::new();
        loop {
            let run = self.text[self.at..]
                .bytes()
                .position(|b| b == b'"' || b == b'\\' || b < 0x20);
            let Some(run) = run else {
                self.at = self.text.len();
                return Err(self.unexpected("the closing `\"` of a string"));
            };
            out.push_str(&self.text[self.at..self.at + run]);
            self.at += run;
            match self.peek() {
                Some(b'"') => {
                    self.at += 1;
                    return Ok(out);
                }
                Some(b'\\') => out.push(self.escape()?),
                _ => return self.fail("a control character inside a string".into()),
            }
        }
    }

    fn escape(&mut self) -> Result<char, Syntax> {
        self.at += 1;
        let simple = match self.peek() {
            Some(b'u') => {
                self.at += 1;
                return self.unicode_escape();
            }
            Some(c @ (b'"' | b'\\' | b'/')) => char::from(c),
            Some(b'b') => '\u{8}',
            Some(b'f') => '\u{c}',
            Some(b'n') => '\n',
            Some(b'r') => '\r',
            Some(b't') => '\t',
            _ => return Err(self.unexpected("one of `\"\\/bfnrtu` after `\\`")),
        };
        self.at += 1;
        Ok(simple)
    }

    fn unicode_escape(&mut self) -> Result<char, Syntax> {
        let first = self.hex4()?;
        let code = if (0xd800..0xdc00).contains(&first) {
            if !(self.take(b'\\') && self.take(b'u')) {
                return self.fail("half of a surrogate pair".into());
            }
            let second = self.hex4()?;
            if !(0xdc00..0xe000).contains(&second) {
                return self.fail("half of a surrogate pair".into());
            }
            0x10000 + ((first - 0xd800) << 10) + (second - 0xdc00)
        } else {
            first
        };
        match char::from_u32(code) {
            Some(c) => Ok(c),
            None => self.fail("half of a surrogate pair".into()),
        }
    }

    fn hex4(&mut self) -> Result<u32, Syntax> {
        let digits = self.text.get(self.at..self.at + 4);
        let digits = digits.filter(|d| d.bytes().all(|b| b.is_ascii_hexdigit()));
        match digits.and_then(|d| u32::from_str_radix(d, 16).ok()) {
            Some(code) => {
                self.at += 4;
                Ok(code)
            }
            None => self.fail("`\\u` needs four hexadecimal digits".into()),
        }
    }

    fn number(&mut self) -> Result<f64, Syntax> {
        let start = self.at;
        self.take(b'-');
        if !self.take(b'0') {
            self.digits()?;
        }
        if self.take(b'.') {
            self.digits()?;
        }
        if self.take(b'e') || self.take(b'E') {
            let _ = self.take(b'+') || self.take(b'-');
            self.digits()?;
        }
        match self.text[start..self.at].parse() {
            Ok(x) => Ok(x),
            Err(_) => self.fail("not a number".into()),
        }
    }

    fn digits(&mut self) -> Result<(), Syntax> {
        let start = self.at;
        while matches!(self.peek(), Some(b'0'..=b'9')) {
            self.at += 1;
        }
        if self.at == start {
            return Err(self.unexpected("a digit"));
        }
        Ok(())
    }

    fn word(&mut self, word: &str, value: Content) -> Result<Content, Syntax> {
        if !self.text[self.at..].starts_with(word) {
            return Err(self.unexpected("a value"));
        }
        self.at += word.len();
        Ok(value)
    }

    fn skip_space(&mut self) {
        while matches!(self.peek(), Some(b' ' | b'\t' | b'\n' | b'\r')) {
            self.at += 1;
        }
    }

    fn peek(&self) -> Option<u8> {
        self.text.as_bytes().get(self.at).copied()
    }

    fn take(&mut self, byte: u8) -> bool {
        let found = self.peek() == Some(byte);
        if found {
            self.at += 1;
        }
        found
    }

    fn expect(&mut self, byte: u8, name: &str) -> Result<(), Syntax> {
        if self.take(byte) {
            Ok(())
        } else {
            Err(self.unexpected(name))
        }
    }

    fn unexpected(&self, wanted: &str) -> Syntax {
        let found = match self.text[self.at..].chars().next() {
            Some(c) => format!("`{}`", c.escape_debug()),
            None => "the end of the file".into(),
        };
        Syntax {
            offset: self.at,
            what: format!("not JSON: expected {wanted}, found {found}"),
        }
    }

    fn fail<T>(&self, what: String) -> Result<T, Syntax> {
        Err(Syntax {
            offset: self.at,
            what: format!("not JSON that can be read: {what}"),
        })
    }
}

/// Reports a key that stands twice in one table.
pub(super) fn duplicate(place: &Place, key: &str, findings: &mut Findings<'_>) {
    findings.error(
        place,
        format!("`{key}` is there twice"),
        "rename this one or remove it",
    );
}
