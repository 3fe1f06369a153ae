//! A JSON reader (RFC 8259) that keeps places and goes on after a fault.
//!
//! What can be read past is noted and read past: a key that stands twice, a
//! number beyond the range of a double, `NaN` and `Infinity`, nesting that is
//! too deep. Only broken syntax ends the reading, because after it no place in
//! the text means anything.

use super::DEEPEST_NESTING;
use super::faults::{Faults, Path};
use std::borrow::Cow;
use std::collections::HashSet;

/// A value and where it starts.
#[derive(Debug)]
pub(super) struct Node<'a> {
    pub offset: usize,
    pub value: Value<'a>,
}

/// A JSON value; objects keep the order of their members.
#[derive(Debug)]
pub(super) enum Value<'a> {
    Null,
    Bool(bool),
    Number {
        text: &'a str,
        value: f64,
    },
    String(Cow<'a, str>),
    Array(Vec<Node<'a>>),
    Object(Vec<Member<'a>>),
    /// Something that has been noted as a fault already.
    Faulty,
}

/// A member of an object.
#[derive(Debug)]
pub(super) struct Member<'a> {
    pub offset: usize,
    pub key: Cow<'a, str>,
    pub node: Node<'a>,
}

/// Broken syntax: noted, and nothing after it can be read.
#[derive(Debug)]
pub(super) struct Broken;

/// Reads one JSON text; what is wrong with it is added to `faults`.
pub(super) fn read<'a>(source: &'a str, faults: &mut Faults<'a>) -> Result<Node<'a>, Broken> {
    let mut reader = Reader {
        source,
        bytes: source.as_bytes(),
        at: 0,
        faults,
    };
    reader.skip_space();
    let node = reader.node(&Path::Root, 0)?;
    reader.skip_space();
    if reader.at < reader.bytes.len() {
        return reader.broken(
            &Path::Root,
            "there is more after the end of the document",
            "send one JSON document, or application/x-ndjson with one per line",
        );
    }
    Ok(node)
}

struct Reader<'a, 'f> {
    source: &'a str,
    bytes: &'a [u8],
    at: usize,
    faults: &'f mut Faults<'a>,
}

impl<'a> Reader<'a, '_> {
    fn broken<T>(&mut self, path: &Path<'_>, what: &str, mend: &str) -> Result<T, Broken> {
        let end = self.source.len();
        if self.at >= end {
            self.faults.add_syntax(
                path,
                end,
                "the text ends in the middle of a JSON document",
                "send the whole document",
            );
        } else {
            let mut at = self.at;
            while !self.source.is_char_boundary(at) {
                at -= 1;
            }
            self.faults.add_syntax(path, at, what, mend);
        }
        Err(Broken)
    }

    fn peek(&self) -> Option<u8> {
        self.bytes.get(self.at).copied()
    }

    fn skip_space(&mut self) {
        while matches!(self.peek(), Some(b' ' | b'\t' | b'\n' | b'\r')) {
            self.at += 1;
        }
    }

    fn node(&mut self, path: &Path<'_>, depth: usize) -> Result<Node<'a>, Broken> {
        let offset = self.at;
        let value = match self.peek() {
            Some(b'{' | b'[') if depth >= DEEPEST_NESTING => {
                self.faults.add_syntax(
                    path,
                    offset,
                    format!("nested deeper than {DEEPEST_NESTING} levels"),
                    "a batch needs three: object, array of readings, reading",
                );
                return Err(Broken);
            }
            Some(b'{') => self.object(path, depth)?,
            Some(b'[') => self.array(path, depth)?,
            Some(b'"') => Value::String(self.string(path)?),
            Some(b'-' | b'+' | b'0'..=b'9' | b'.' | b'A'..=b'Z' | b'a'..=b'z') => {
                self.word(path)?
            }
            _ => return self.broken(path, "a JSON value is expected here", "see RFC 8259"),
        };
        Ok(Node { offset, value })
    }

    fn object(&mut self, path: &Path<'_>, depth: usize) -> Result<Value<'a>, Broken> {
        let mut members: Vec<Member<'a>> = Vec::new();
        let mut keys: HashSet<Cow<'a, str>> = HashSet::new();
        self.at += 1;
        self.skip_space();
        if self.peek() == Some(b'}') {
            self.at += 1;
            return Ok(Value::Object(members));
        }
        loop {
            self.skip_space();
            let offset = self.at;
            if self.peek() != Some(b'"') {
                return self.broken(
                    path,
                    "a key in double quotes is expected here",
                    "write \"key\": value",
                );
            }
            let key = self.string(path)?;
            self.skip_space();
            if self.peek() != Some(b':') {
                return self.broken(
                    path,
                    "a colon is expected after a key",
                    "write \"key\": value",
                );
            }
            self.at += 1;
            self.skip_space();
            let node = self.node(&Path::Key(path, &key), depth + 1)?;
            if keys.insert(key.clone()) {
                members.push(Member { offset, key, node });
            } else {
                self.faults.add(
                    &Path::Key(path, &key),
                    offset,
                    format!("the key \"{}\" stands twice in one object", shorten(&key)),
                    "leave one of the two out",
                );
            }
            self.skip_space();
            match self.peek() {
                Some(b',') => self.at += 1,
                Some(b'}') => {
                    self.at += 1;
                    return Ok(Value::Object(members));
                }
                _ => {
                    return self.broken(
                        path,
                        "a comma or } is expected here",
                        "separate members with commas",
                    );
                }
            }
        }
    }

    fn array(&mut self, path: &Path<'_>, depth: usize) -> Result<Value<'a>, Broken> {
        let mut items = Vec::new();
        self.at += 1;
        self.skip_space();
        if self.peek() == Some(b']') {
            self.at += 1;
            return Ok(Value::Array(items));
        }
        loop {
            self.skip_space();
            let item = self.node(&Path::Index(path, items.len()), depth + 1)?;
            items.push(item);
            self.skip_space();
            match self.peek() {
                Some(b',') => self.at += 1,
                Some(b']') => {
                    self.at += 1;
                    return Ok(Value::Array(items));
                }
                _ => {
                    return self.broken(
                        path,
                        "a comma or ] is expected here",
                        "separate items with commas",
                    );
                }
            }
        }
    }

    /// A number or a literal, and what people write in the place of either.
    fn word(&mut self, path: &Path<'_>) -> Result<Value<'a>, Broken> {
        let offset = self.at;
        while matches!(
            self.peek(),
            Some(b'-' | b'+' | b'.' | b'0'..=b'9' | b'A'..=b'Z' | b'a'..=b'z' | b'_')
        ) {
            self.at += 1;
        }
        let text = &self.source[offset..self.at];
        match text {
            "null" => return Ok(Value::Null),
            "true" => return Ok(Value::Bool(true)),
            "false" => return Ok(Value::Bool(false)),
            _ => {}
        }
        if is_number(text) {
            // Every text of this grammar is one that the standard library reads.
            let value = text.parse::<f64>().unwrap_or(f64::NAN);
            if value.is_finite() {
                return Ok(Value::Number { text, value });
            }
            self.faults.add(
                path,
                offset,
                format!(
                    "the number {} is beyond the range of a double",
                    shorten(text)
                ),
                "send null with quality \"bad\" where there is no value",
            );
            return Ok(Value::Faulty);
        }
        let bare = text.trim_start_matches(['-', '+']).to_ascii_lowercase();
        if matches!(bare.as_str(), "nan" | "inf" | "infinity") {
            self.faults.add_syntax(
                path,
                offset,
                format!("{text} is no JSON number, and no reading"),
                "send null with quality \"bad\" where there is no value",
            );
            return Ok(Value::Faulty);
        }
        self.at = offset;
        self.broken(
            path,
            &format!("\"{}\" is no JSON value", shorten(text)),
            "put text in double quotes; write numbers as in 1.5e3",
        )
    }

    fn string(&mut self, path: &Path<'_>) -> Result<Cow<'a, str>, Broken> {
        self.at += 1;
        let start = self.at;
        let mut unescaped: Option<String> = None;
        let mut run = start;
        loop {
            match self.peek() {
                None => return self.broken(path, "", ""),
                Some(b'"') => {
                    let tail = &self.source[run..self.at];
                    self.at += 1;
                    return Ok(match unescaped {
                        None => Cow::Borrowed(tail),
                        Some(mut text) => {
                            text.push_str(tail);
                            Cow::Owned(text)
                        }
                    });
                }
                Some(b'\\') => {
                    let text = unescaped.get_or_insert_default();
                    text.push_str(&self.source[run..self.at]);
                    let Some(character) = self.escape() else {
                        return self.broken(
                            path,
                            "a bad escape in a string",
                            "see RFC 8259, section 7",
                        );
                    };
                    unescaped.get_or_insert_default().push(character);
                    run = self.at;
                }
                Some(byte) if byte < 0x20 => {
                    return self.broken(
                        path,
                        "a control character in a string",
                        "write it as \\u00XX",
                    );
                }
                Some(_) => self.at += 1,
            }
        }
    }

    /// Reads an escape from its backslash on; stays within the text when it is
    /// no escape.
    fn escape(&mut self) -> Option<char> {
        let kind = *self.bytes.get(self.at + 1)?;
        let simple = match kind {
            b'"' => '"',
            b'\\' => '\\',
            b'/' => '/',
            b'b' => '\u{8}',
            b'f' => '\u{c}',
            b'n' => '\n',
            b'r' => '\r',
            b't' => '\t',
            b'u' => return self.unicode_escape(),
            _ => return None,
        };
        self.at += 2;
        Some(simple)
    }

    fn unicode_escape(&mut self) -> Option<char> {
        let high = self.four_digits(self.at)?;
        if let Some(character) = char::from_u32(high) {
            self.at += 6;
            return Some(character);
        }
        let low = self.four_digits(self.at + 6)?;
        if !(0xD800..0xDC00).contains(&high) || !(0xDC00..0xE000).contains(&low) {
            return None;
        }
        self.at += 12;
        char::from_u32(0x1_0000 + ((high - 0xD800) << 10) + (low - 0xDC00))
    }

    /// The code of the `\uXXXX` that starts at `at`.
    fn four_digits(&self, at: usize) -> Option<u32> {
        let escape = self.bytes.get(at..at + 6)?;
        let digits = std::str::from_utf8(escape.strip_prefix(b"\\u")?).ok()?;
        let all_digits = digits.bytes().all(|digit| digit.is_ascii_hexdigit());
        all_digits
            .then(|| u32::from_str_radix(digits, 16).ok())
            .flatten()
    }
}

/// The number grammar of RFC 8259, section 6.
fn is_number(text: &str) -> bool {
    let digits = |text: &str| text.bytes().take_while(u8::is_ascii_digit).count();
    let mut rest = text.strip_prefix('-').unwrap_or(text);
    let whole = digits(rest);
    if whole == 0 || (whole > 1 && rest.starts_with('0')) {
        return false;
    }
    rest = &rest[whole..];
    if let Some(fraction) = rest.strip_prefix('.') {
        let count = digits(fraction);
        if count == 0 {
            return false;
        }
        rest = &fraction[count..];
    }
    if let Some(exponent) = rest.strip_prefix(['e', 'E']) {
        let exponent = exponent.strip_prefix(['-', '+']).unwrap_or(exponent);
        let count = digits(exponent);
        return count > 0 && count == exponent.len();
    }
    rest.is_empty()
}

/// At most the first 24 characters.
pub(super) fn shorten(text: &str) -> String {
    if text.chars().count() <= 24 {
        return text.to_owned();
    }
    text.chars().take(24).chain("...".chars()).collect()
}

#[cfg(test)]
#[path = "json_tests.rs"]
mod tests;
