//! Faults of a plant file: where, what, and what would mend it.

use std::fmt;

use serde::{Deserialize, Serialize};
use utoipa::ToSchema;

/// How bad a fault is.
#[derive(
    Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize, ToSchema,
)]
#[serde(rename_all = "lowercase")]
pub enum Severity {
    /// The plant cannot work: the file is refused.
    Error,
    /// The plant works and will disappoint.
    Warning,
}

/// One thing that is wrong with a plant file.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize, ToSchema)]
pub struct Fault {
    /// Error or warning.
    pub severity: Severity,
    /// Place as a JSON pointer (RFC 6901), such as `/tags/FT-201/unit`; empty
    /// for the file as a whole.
    pub path: String,
    /// Line of the place, from 1.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub line: Option<usize>,
    /// Column of the place in characters, from 1.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub column: Option<usize>,
    /// What is wrong.
    pub what: String,
    /// What would mend it.
    pub mend: String,
}

impl fmt::Display for Severity {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(match self {
            Severity::Error => "error",
            Severity::Warning => "warning",
        })
    }
}

impl fmt::Display for Fault {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "{}", self.severity)?;
        if let (Some(line), Some(column)) = (self.line, self.column) {
            write!(f, " at {line}:{column}")?;
        }
        if !self.path.is_empty() {
            write!(f, " ({})", self.path)?;
        }
        write!(f, ": {}; {}", self.what, self.mend)
    }
}

/// Every fault of a refused plant file, its warnings among them, in the order
/// of the file. At least one is an error.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize, ToSchema)]
#[serde(transparent)]
pub struct Faults(pub Vec<Fault>);

impl std::error::Error for Faults {}

impl Faults {
    /// Every fault as [`render`] prints it, with an empty line between.
    pub fn render(&self, source: &str, file_name: &str) -> String {
        let rendered = self.0.iter().map(|fault| render(fault, source, file_name));
        rendered.collect::<Vec<_>>().join("\n")
    }
}

impl fmt::Display for Faults {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let errors = self.0.iter().filter(|x| x.severity == Severity::Error);
        match errors.count() {
            1 => write!(f, "the plant file has 1 error")?,
            n => write!(f, "the plant file has {n} errors")?,
        }
        for fault in &self.0 {
            write!(f, "\n{fault}")?;
        }
        Ok(())
    }
}

/// Longest stretch of a source line that [`render`] shows, in characters.
const WINDOW: usize = 120;

/// A fault as a compiler prints it: `file:line:column`, the line of `source`
/// with the place underlined, and the mend. Ends with a newline.
pub fn render(fault: &Fault, source: &str, file_name: &str) -> String {
    let mut out = format!("{}: {}\n", fault.severity, fault.what);
    let placed = fault.line.zip(fault.column).and_then(|(line, column)| {
        let text = source.lines().nth(line.checked_sub(1)?)?;
        Some((line, column, text))
    });
    let Some((line, column, text)) = placed else {
        out.push_str(&format!(" --> {file_name}\n  = mend: {}\n", fault.mend));
        return out;
    };
    let gutter = " ".repeat(line.to_string().len());
    let shown: Vec<char> = text
        .chars()
        .map(|c| if c.is_control() { ' ' } else { c })
        .collect();
    let at = (column - 1).min(shown.len());
    let length = token_length(&shown[at..]);
    let from = if shown.len() <= WINDOW {
        0
    } else {
        at.saturating_sub(WINDOW / 3)
    };
    let to = shown.len().min(from + WINDOW);
    let length = length.min(to.saturating_sub(at)).max(1);
    let (before, after) = (
        if from > 0 { "..." } else { "" },
        if to < shown.len() { "..." } else { "" },
    );
    let excerpt: String = shown[from..to].iter().collect();
    let indent = " ".repeat(before.len() + at - from);
    let path = if fault.path.is_empty() {
        String::new()
    } else {
        format!("  {}", fault.path)
    };
    out.push_str(&format!(
        "{gutter}--> {file_name}:{line}:{column}{path}\n\
         {gutter} |\n\
         {line} | {before}{excerpt}{after}\n\
         {gutter} | {indent}{}\n\
         {gutter} = mend: {}\n",
        "^".repeat(length),
        fault.mend
    ));
    out
}

/// Length of the string, bracketed value or word that `text` opens with.
fn token_length(text: &[char]) -> usize {
    let Some(&first) = text.first() else {
        return 1;
    };
    match first {
        '"' | '\'' => quoted_length(text, first),
        '[' | '{' => {
            let mut depth = 0usize;
            let mut i = 0;
            while i < text.len() {
                match text[i] {
                    '"' | '\'' => i += quoted_length(&text[i..], text[i]) - 1,
                    '[' | '{' => depth += 1,
                    ']' | '}' => depth -= 1,
                    _ => {}
                }
                i += 1;
                if depth == 0 {
                    break;
                }
            }
            i
        }
        _ => {
            let stops = |c: &char| c.is_whitespace() || ",=:]}#".contains(*c);
            text.iter().position(stops).unwrap_or(text.len()).max(1)
        }
    }
}

fn quoted_length(text: &[char], quote: char) -> usize {
    let mut i = 1;
    while i < text.len() {
        if text[i] == '\\' && quote == '"' {
            i += 1;
        } else if text[i] == quote {
            return i + 1;
        }
        i += 1;
    }
    text.len()
}

#[cfg(test)]
mod tests {
    use super::*;

    fn fault(line: usize, column: usize) -> Fault {
        Fault {
            severity: Severity::Error,
            path: "/tags/FT-1/unit".into(),
            line: Some(line),
            column: Some(column),
            what: "`bar` is no mass flow".into(),
            mend: "write t/h".into(),
        }
    }

    #[test]
    fn the_place_is_underlined() {
        let source = "a = 1\nFT-1 = { unit = \"bar\" }\n";
        assert_eq!(
            render(&fault(2, 17), source, "p.toml"),
            "error: `bar` is no mass flow\n \
             --> p.toml:2:17  /tags/FT-1/unit\n  \
             |\n\
             2 | FT-1 = { unit = \"bar\" }\n  \
             |                 ^^^^^\n  \
             = mend: write t/h\n"
        );
    }

    #[test]
    fn a_long_line_is_cut_around_the_place() {
        let source = format!("{}\"bar\"{}", "x".repeat(5000), "y".repeat(5000));
        let text = render(&fault(1, 5001), &source, "p.json");
        assert!(text.lines().all(|l| l.chars().count() < 140), "{text}");
        let lines: Vec<&str> = text.lines().collect();
        let caret = lines[4].find('^').unwrap_or(0);
        assert_eq!(&lines[3][caret..caret + 5], "\"bar\"");
    }

    #[test]
    fn a_place_beyond_the_text_does_not_panic() {
        for (line, column) in [(1, 99), (9, 1), (1, 1)] {
            assert!(render(&fault(line, column), "", "p").contains("mend"));
            assert!(render(&fault(line, column), "[}", "p").contains("mend"));
            assert!(render(&fault(line, column), "]", "p").contains("mend"));
        }
    }
}
