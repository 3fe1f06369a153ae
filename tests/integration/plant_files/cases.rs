//! A table of broken plant files, each a change to the good one, with the faults
//! that it must be answered with: pointer, place, cause and mend.

use counterpoise::plant::{Format, Severity};

use super::{GOOD, findings, listing};

/// One case of the table below.
pub struct Case {
    pub text: String,
    expected: Vec<Expected>,
}

/// What one fault must say.
struct Expected {
    severity: Severity,
    path: String,
    /// What stands at its line and column.
    token: String,
    /// Parts of its cause and of its mend.
    what: String,
    mend: String,
}

/// Reads a table: in each case `-` is a text that stands once in the good file
/// (a whole line goes with its end), `+` lines take its place, `!` is an error
/// and `?` a warning that must come of it, as pointer | token | cause | mend.
fn cases(table: &str) -> Vec<Case> {
    table.split("\n\n").map(case).collect()
}

/// Reads one case.
pub fn case(lines: &str) -> Case {
    let mut changes: Vec<(&str, Vec<&str>)> = Vec::new();
    let mut expected = Vec::new();
    for line in lines
        .lines()
        .filter(|l| !l.is_empty() && !l.starts_with('#'))
    {
        let (mark, rest) = line.split_at(2);
        match mark {
            "- " => changes.push((rest, Vec::new())),
            "+ " => changes.last_mut().unwrap().1.push(rest),
            _ => {
                let parts: Vec<&str> = rest.split(" | ").collect();
                assert_eq!(parts.len(), 4, "{line}");
                expected.push(Expected {
                    severity: if mark == "? " {
                        Severity::Warning
                    } else {
                        Severity::Error
                    },
                    path: parts[0].trim().to_owned(),
                    token: parts[1].to_owned(),
                    what: parts[2].to_owned(),
                    mend: parts[3].to_owned(),
                });
            }
        }
    }
    let mut text = GOOD.to_owned();
    for (from, to) in changes {
        let whole_line = format!("{from}\n");
        let from = if to.is_empty() && text.contains(&whole_line) {
            &whole_line
        } else {
            from
        };
        assert_eq!(text.matches(from).count(), 1, "`{from}`");
        text = text.replace(from, &to.join("\n"));
    }
    Case { text, expected }
}

/// Holds each case to exactly the faults that it lists.
pub fn check(table: &str) {
    for Case { text, expected } in cases(table) {
        let found = findings(&text, Format::Toml);
        let shown = listing(&found, &text);
        assert_eq!(found.len(), expected.len(), "{shown}");
        for (fault, expected) in found.iter().zip(&expected) {
            let Expected {
                severity,
                path,
                token,
                what,
                mend,
            } = expected;
            assert_eq!((fault.severity, &fault.path), (*severity, path), "{shown}");
            let line = text
                .lines()
                .nth(fault.line.unwrap() - 1)
                .unwrap_or_default();
            let rest: String = line.chars().skip(fault.column.unwrap() - 1).collect();
            assert!(
                rest.starts_with(token),
                "`{token}` is not at the place:\n{shown}"
            );
            assert!(fault.what.contains(what), "`{what}` is not said:\n{shown}");
            assert!(
                fault.mend.contains(mend),
                "`{mend}` is not advised:\n{shown}"
            );
        }
    }
}
