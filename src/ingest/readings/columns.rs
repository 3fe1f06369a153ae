//! A line of CSV (RFC 4180) by the names in the header.

use crate::ingest::fields::{self, Wrong, believable, quality_word, status_code};
use crate::ingest::json::shorten;
use crate::plant::{Fault, Grade, Quality, Sample, Severity};
use std::borrow::Cow;
use time::OffsetDateTime;

/// What a column holds.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Column {
    Tag,
    Time,
    UnixTime,
    Value,
    Quality,
}

const NAMES: [(&str, Column); 5] = [
    ("tag", Column::Tag),
    ("time", Column::Time),
    ("unix-time", Column::UnixTime),
    ("value", Column::Value),
    ("quality", Column::Quality),
];

const HEADER: &str = "the columns are tag, time or unix-time, value and quality (which may lack)";

const NO_VALUE: &str = "write a number, or nothing with quality bad";

/// The columns of a CSV in their order.
#[derive(Debug)]
pub(super) struct Columns(Vec<Column>);

impl Columns {
    /// Reads a header.
    pub fn new(line: &str) -> Result<Self, Vec<Fault>> {
        let fields = split(line).map_err(|wrong| vec![fault(line, 0, "", wrong)])?;
        let mut columns: Vec<Column> = Vec::new();
        let mut faults = Vec::new();
        for (place, field) in fields.iter().enumerate() {
            let field = field.trim();
            let found = NAMES.iter().find(|(name, _)| *name == field);
            match found {
                Some((_, column)) if columns.contains(column) => {
                    let what = format!("the column `{field}` stands twice");
                    faults.push(fault(
                        line,
                        place,
                        field,
                        (what, "leave one of the two out"),
                    ));
                }
                Some((_, column)) => columns.push(*column),
                None => {
                    let what = format!("unknown column \"{}\"", shorten(field));
                    faults.push(fault(line, place, "", (what, HEADER)));
                }
            }
        }
        let times = [Column::Time, Column::UnixTime].map(|column| columns.contains(&column));
        for (is_missing, name) in [
            (!columns.contains(&Column::Tag), "tag"),
            (times == [false, false], "time"),
            (!columns.contains(&Column::Value), "value"),
        ] {
            if is_missing {
                let what = format!("the column `{name}` is missing");
                faults.push(fault(line, 0, name, (what, HEADER)));
            }
        }
        if times == [true, true] {
            let what = "two columns of time".to_owned();
            faults.push(fault(line, 0, "time", (what, "leave one of the two out")));
        }
        if faults.is_empty() {
            Ok(Columns(columns))
        } else {
            Err(faults)
        }
    }

    /// Reads a line.
    pub fn read<'l>(
        &self,
        line: &'l str,
        latest: OffsetDateTime,
    ) -> Result<(Cow<'l, str>, Sample), Vec<Fault>> {
        let mut fields = split(line).map_err(|wrong| vec![fault(line, 0, "", wrong)])?;
        if fields.len() != self.0.len() {
            let (found, wanted) = (fields.len(), self.0.len());
            let what = format!("{found} fields where the header has {wanted}");
            let mend = "put text that holds a comma in double quotes; write a decimal point";
            return Err(vec![fault(line, 0, "", (what, mend))]);
        }
        let mut faults = Vec::new();
        let place = |column: Column| self.0.iter().position(|known| *known == column);
        let mut note = |place: usize, name: &str, wrong: Wrong| {
            faults.push(fault(line, place, name, wrong));
        };
        // A column that is not there reads as if it were empty.
        let text = |column: Column| place(column).map_or("", |at| fields[at].trim());
        let at = |column: Column| place(column).unwrap_or(0);
        if let Err(wrong) = fields::name(text(Column::Tag)) {
            note(at(Column::Tag), "tag", wrong);
        }
        let (column, name, time) = match place(Column::UnixTime) {
            Some(_) => (
                Column::UnixTime,
                "unix-time",
                unix_time(text(Column::UnixTime), latest),
            ),
            None => (
                Column::Time,
                "time",
                fields::time(text(Column::Time), latest),
            ),
        };
        let time = time.map_err(|wrong| note(at(column), name, wrong)).ok();
        let quality = quality(text(Column::Quality));
        let quality = quality
            .map_err(|wrong| note(at(Column::Quality), "quality", wrong))
            .ok();
        // A quality that could not be read must not add a second fault.
        let may_lack = quality.is_none_or(|quality| quality.grade == Grade::Bad);
        let value = value(text(Column::Value), may_lack);
        let value = value
            .map_err(|wrong| note(at(Column::Value), "value", wrong))
            .ok();
        match (time, value, quality) {
            (Some(time), Some(value), Some(quality)) if faults.is_empty() => {
                let sample = Sample {
                    time,
                    value,
                    quality,
                };
                let tag = fields.swap_remove(at(Column::Tag));
                Ok((trimmed(tag), sample))
            }
            _ => Err(faults),
        }
    }
}

fn trimmed(text: Cow<'_, str>) -> Cow<'_, str> {
    match text {
        Cow::Borrowed(text) => Cow::Borrowed(text.trim()),
        Cow::Owned(text) => Cow::Owned(text.trim().to_owned()),
    }
}

/// The fields of a line; quotes are seldom, so only lines that have some are
/// taken apart by the CSV reader.
fn split(line: &str) -> Result<Vec<Cow<'_, str>>, Wrong> {
    if !line.contains('"') {
        return Ok(line.split(',').map(Cow::Borrowed).collect());
    }
    let open = (
        "a quote that is not closed",
        "close it, and double it within text",
    );
    if line.matches('"').count() % 2 == 1 {
        return Err((open.0.to_owned(), open.1));
    }
    let mut reader = csv::ReaderBuilder::new()
        .has_headers(false)
        .flexible(true)
        .buffer_capacity(line.len())
        .from_reader(line.as_bytes());
    let mut records = reader.records();
    let wrong = || ("this is no line of CSV".to_owned(), "see RFC 4180");
    let record = records.next().and_then(Result::ok).ok_or_else(wrong)?;
    let fields = record.iter().map(|field| Cow::Owned(field.to_owned()));
    Ok(fields.collect())
}

fn quality(text: &str) -> Result<Quality, Wrong> {
    if text.is_empty() {
        return Ok(Quality {
            grade: Grade::Good,
            code: None,
        });
    }
    if let Some(digits) = text.strip_prefix("0x").or_else(|| text.strip_prefix("0X")) {
        let is_hex = digits.bytes().all(|digit| digit.is_ascii_hexdigit());
        let code = is_hex.then(|| u32::from_str_radix(digits, 16).ok());
        return status_code(text, code.flatten());
    }
    if text.bytes().all(|digit| digit.is_ascii_digit()) {
        return status_code(text, text.parse().ok());
    }
    quality_word(text)
}

fn value(text: &str, may_lack: bool) -> Result<Option<f64>, Wrong> {
    if text.is_empty() {
        return match may_lack {
            true => Ok(None),
            false => Err(("a reading without a value".to_owned(), NO_VALUE)),
        };
    }
    // Words like `inf` are numbers to the standard library.
    let is_number = text
        .bytes()
        .all(|byte| matches!(byte, b'0'..=b'9' | b'+' | b'-' | b'.' | b'e' | b'E'));
    match text.parse::<f64>() {
        Ok(value) if is_number && value.is_finite() => Ok(Some(value)),
        Ok(_) if is_number => {
            let what = format!(
                "the number {} is beyond the range of a double",
                shorten(text)
            );
            Err((what, NO_VALUE))
        }
        _ => Err((format!("\"{}\" is no number", shorten(text)), NO_VALUE)),
    }
}

/// Seconds since 1970, to nine decimals.
fn unix_time(text: &str, latest: OffsetDateTime) -> Result<OffsetDateTime, Wrong> {
    const MEND: &str = "write seconds since 1970-01-01T00:00Z, such as 1773741900.25";
    let wrong = || (format!("\"{}\" is no time", shorten(text)), MEND);
    let (whole, part) = text.split_once('.').unwrap_or((text, ""));
    let digits = |text: &str| text.bytes().all(|digit| digit.is_ascii_digit());
    if whole.is_empty() || !digits(whole) || !digits(part) || part.len() > 9 {
        return Err(wrong());
    }
    let seconds: i64 = whole.parse().map_err(|_| wrong())?;
    let nanoseconds: i64 = format!("{part:0<9}").parse().map_err(|_| wrong())?;
    let time = OffsetDateTime::from_unix_timestamp(seconds).map_err(|_| wrong())?;
    believable(
        time + time::Duration::nanoseconds(nanoseconds),
        text,
        latest,
    )
}

/// A fault of a field, whose line is told by who knows it.
fn fault(line: &str, field: usize, name: &str, (what, mend): Wrong) -> Fault {
    Fault {
        severity: Severity::Error,
        path: if name.is_empty() {
            String::new()
        } else {
            format!("/{name}")
        },
        line: None,
        column: Some(column(line, field)),
        what,
        mend: mend.to_owned(),
    }
}

/// Where a field begins, in characters from 1.
fn column(line: &str, field: usize) -> usize {
    let mut left = field;
    let mut quoted = false;
    for (at, character) in line.chars().enumerate() {
        match character {
            _ if left == 0 => return at + 1,
            '"' => quoted = !quoted,
            ',' if !quoted => left -= 1,
            _ => {}
        }
    }
    line.chars().count() + 1
}
