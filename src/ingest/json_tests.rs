//! What is JSON, what is read past, and where it stood.

use super::*;

fn faults(source: &str) -> Vec<(String, String)> {
    let mut faults = Faults::new(source);
    let _ = read(source, &mut faults);
    faults
        .finish()
        .into_iter()
        .map(|fault| (fault.path, fault.what))
        .collect()
}

#[test]
fn agrees_with_serde_json_on_what_is_json() {
    let texts = [
        "null",
        "true",
        "0",
        "-0.5e-3",
        "01",
        "1.",
        ".5",
        "+1",
        "1e",
        "-",
        "\"a\\u00e9\\n\"",
        "\"\\ud83d\\ude00\"",
        "\"\\ud83d\"",
        "\"\\x\"",
        "\"a\nb\"",
        "[1, 2]",
        "[1,]",
        "[",
        "{}",
        "{\"a\": 1}",
        "{\"a\" 1}",
        "{a: 1}",
        "{\"a\": 1,}",
        "",
        " ",
        "1 2",
        "nul",
        "\"abc",
        "[1 2]",
    ];
    for text in texts {
        let ours = faults(text).is_empty();
        let theirs = serde_json::from_str::<serde_json::Value>(text).is_ok();
        assert_eq!(ours, theirs, "{text}");
    }
}

#[test]
fn strings_are_unescaped() {
    let source = r#""a\"\\\/\b\f\n\r\té😀é""#;
    let mut notes = Faults::new(source);
    let node = read(source, &mut notes).expect("valid");
    let Value::String(text) = node.value else {
        panic!("{node:?}")
    };
    assert_eq!(text, "a\"\\/\u{8}\u{c}\n\r\t\u{e9}\u{1f600}\u{e9}");
}

#[test]
fn goes_on_after_what_is_no_number() {
    let found = faults("[NaN, -Infinity, 1e400, {\"a/b\": 1, \"a/b\": 2}]");
    let paths: Vec<&str> = found.iter().map(|(path, _)| path.as_str()).collect();
    assert_eq!(paths, ["/0", "/1", "/2", "/3/a~1b"]);
    assert!(found[0].1.contains("NaN"));
    assert!(found[2].1.contains("1e400"));
}

#[test]
fn deep_nesting_is_named() {
    let found = faults(&"[".repeat(100_000));
    assert_eq!(found.len(), 1);
    assert!(found[0].1.contains("nested deeper"), "{found:?}");
}

#[test]
fn places_are_lines_and_columns_in_characters() {
    let source = "{\n  \"\u{e9}\": 1, NaN";
    let mut notes = Faults::new(source);
    let _ = read(source, &mut notes);
    let fault = &notes.finish()[0];
    assert_eq!((fault.line, fault.column), (Some(2), Some(11)));
}
