//! Readings by lines, in blocks of bytes as they come.

use super::columns::Columns;
use super::{Readings, ReadingsForm};
use crate::ingest::faults::{Faults, MOST_FAULTS, Path, untold};
use crate::ingest::fields::{FUTURE_ALLOWANCE, Reader};
use crate::ingest::json;
use crate::plant::{Fault, Severity};
use time::OffsetDateTime;

/// Longest line that is read, in bytes: a reading has a few hundred.
const LONGEST_LINE: usize = 64 << 10;

/// Reads readings line by line from blocks of bytes; holds no more than the block
/// and one line.
#[derive(Debug)]
pub struct ReadingsLines {
    latest: OffsetDateTime,
    columns: Header,
    /// The beginning of a line whose end has not come.
    pub(super) rest: Vec<u8>,
    /// The line that is being read is too long; it is passed over.
    too_long: bool,
    /// Bytes of the line that has begun.
    begun: u64,
    bytes: u64,
    lines: u64,
    block: Block,
}

/// What came of the lines since the last one was taken.
#[derive(Clone, Debug, Default)]
pub struct Block {
    /// Readings without a fault.
    pub readings: Readings,
    /// Bytes of the whole content up to the end of the last whole line.
    pub bytes: u64,
    /// Lines of the whole content up to there, the header and blank ones too.
    pub lines: u64,
    /// Faults with line (of the whole content) and column: the first thousand.
    pub faults: Vec<Fault>,
    /// How many faults there are.
    pub faulty: u64,
    /// Some of them are faults of the JSON or CSV itself.
    pub syntax: bool,
}

/// The header of a CSV.
#[derive(Debug)]
enum Header {
    /// There is none: JSON.
    None,
    Expected,
    Read(String, Columns),
    /// It cannot be used, so nothing after it can be read.
    Broken,
}

impl Block {
    /// The faults, with one more that counts those that are left out.
    pub fn faults_told(self) -> Vec<Fault> {
        let left = self.faulty - self.faults.len() as u64;
        let mut faults = self.faults;
        faults.extend((left > 0).then(|| untold(left)));
        faults
    }
}

impl ReadingsLines {
    /// A reader from the beginning; `now` is when the content is received. A form
    /// that has no lines is read as JSON by lines.
    pub fn new(form: ReadingsForm, now: OffsetDateTime) -> Self {
        ReadingsLines {
            latest: now + FUTURE_ALLOWANCE,
            columns: match form {
                ReadingsForm::Csv => Header::Expected,
                ReadingsForm::Json | ReadingsForm::Ndjson => Header::None,
            },
            rest: Vec::new(),
            too_long: false,
            begun: 0,
            bytes: 0,
            lines: 0,
            block: Block::default(),
        }
    }

    /// A reader that goes on after so many bytes and lines of the content, with the
    /// header that [`header`](Self::header) told of its beginning.
    pub fn resumed(
        form: ReadingsForm,
        now: OffsetDateTime,
        header: Option<&str>,
        bytes: u64,
        lines: u64,
    ) -> Self {
        let mut reader = ReadingsLines::new(form, now);
        reader.bytes = bytes;
        reader.lines = lines;
        if let (ReadingsForm::Csv, Some(header)) = (form, header) {
            reader.header_line(header);
        }
        reader
    }

    /// The header line of a CSV, once it has been read.
    pub fn header(&self) -> Option<&str> {
        match &self.columns {
            Header::Read(line, _) => Some(line),
            _ => None,
        }
    }

    /// Whether the header of a CSV cannot be used, so that nothing after it is read.
    pub fn is_broken(&self) -> bool {
        matches!(self.columns, Header::Broken)
    }

    /// Reads a block of bytes; it may end anywhere.
    pub fn feed(&mut self, bytes: &[u8]) {
        let mut left = bytes;
        while let Some(end) = left.iter().position(|&byte| byte == b'\n') {
            let (line, after) = left.split_at(end + 1);
            self.begun += line.len() as u64;
            if self.rest.is_empty() && !self.too_long && line.len() <= LONGEST_LINE {
                self.line(line);
            } else {
                self.hold(line);
                self.held();
            }
            self.settle();
            left = after;
        }
        self.begun += left.len() as u64;
        self.hold(left);
    }

    /// The content has ended: its last line may lack an end.
    pub fn end(&mut self) {
        if self.begun > 0 {
            self.held();
            self.settle();
        }
        if matches!(self.columns, Header::Expected) {
            self.columns = Header::Broken;
            let mend = "write the names of the columns into the first line: tag,time,value,quality";
            self.fault("", None, "there is no header", mend);
        }
    }

    /// What has come of the lines since the last call.
    pub fn take(&mut self) -> Block {
        let mut block = std::mem::take(&mut self.block);
        block.bytes = self.bytes;
        block.lines = self.lines;
        block
    }

    fn hold(&mut self, part: &[u8]) {
        if self.too_long || self.rest.len() + part.len() > LONGEST_LINE {
            self.too_long = true;
            self.rest = Vec::new();
        } else {
            self.rest.extend_from_slice(part);
        }
    }

    fn held(&mut self) {
        let line = std::mem::take(&mut self.rest);
        if std::mem::take(&mut self.too_long) {
            let what = format!("a line of more than {LONGEST_LINE} bytes");
            self.fault("", Some(1), &what, "write one reading into each line");
        } else {
            self.line(&line);
        }
    }

    /// The number of the line that is being read.
    fn number(&self) -> usize {
        self.lines as usize + 1
    }

    fn settle(&mut self) {
        self.bytes += std::mem::take(&mut self.begun);
        self.lines += 1;
    }

    fn line(&mut self, line: &[u8]) {
        let text = match std::str::from_utf8(line) {
            Ok(text) => text,
            Err(error) => {
                // The part before is UTF-8 by the meaning of `valid_up_to`.
                let readable = String::from_utf8_lossy(&line[..error.valid_up_to()]);
                let column = readable.chars().count() + 1;
                self.block.syntax = true;
                self.fault(
                    "",
                    Some(column),
                    "the text is not UTF-8",
                    "send it in UTF-8",
                );
                return;
            }
        };
        let text = match self.lines {
            0 => text.strip_prefix('\u{feff}').unwrap_or(text),
            _ => text,
        };
        let text = text.trim_end_matches(['\n', '\r']);
        if text.trim().is_empty() {
            return;
        }
        match &self.columns {
            Header::None => self.json(text),
            Header::Expected => self.header_line(text),
            Header::Read(_, columns) => match columns.read(text, self.latest) {
                Ok((tag, sample)) => self.block.readings.add(&tag, sample),
                Err(faults) => self.faults(faults),
            },
            Header::Broken => {}
        }
    }

    fn json(&mut self, text: &str) {
        let mut faults = Faults::new(text);
        let root = json::read(text, &mut faults);
        let mut reader = Reader {
            faults,
            latest: self.latest,
        };
        let found = root.ok().and_then(|root| reader.one(&Path::Root, &root));
        self.block.syntax |= reader.faults.syntax;
        match found {
            Some((tag, sample)) if reader.faults.is_empty() => {
                self.block.readings.add(&tag, sample);
            }
            _ => self.faults(reader.faults.finish()),
        }
    }

    fn header_line(&mut self, text: &str) {
        match Columns::new(text) {
            Ok(columns) => self.columns = Header::Read(text.to_owned(), columns),
            Err(faults) => {
                self.columns = Header::Broken;
                self.block.syntax = true;
                self.faults(faults);
            }
        }
    }

    fn faults(&mut self, faults: Vec<Fault>) {
        for mut fault in faults {
            fault.line = Some(self.number());
            self.note(fault);
        }
    }

    fn fault(&mut self, path: &str, column: Option<usize>, what: &str, mend: &str) {
        let line = Some(self.number());
        self.note(Fault {
            severity: Severity::Error,
            path: path.to_owned(),
            line,
            column,
            what: what.to_owned(),
            mend: mend.to_owned(),
        });
    }

    fn note(&mut self, fault: Fault) {
        self.block.faulty += 1;
        if self.block.faults.len() < MOST_FAULTS {
            self.block.faults.push(fault);
        }
    }
}
