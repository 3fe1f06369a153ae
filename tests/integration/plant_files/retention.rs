//! The table `[retention]`.

use super::GOOD;
use super::cases::check;
use counterpoise::plant::{Format, Retention, canonical_json, read};
use time::Duration;

fn retention(table: &str) -> (Retention, usize) {
    let text = format!("{GOOD}{table}");
    let file = read(&text, Format::Toml).unwrap();
    // The same by way of JSON.
    let json = canonical_json(&text, Format::Toml).unwrap().to_string();
    let same = read(&json, Format::Json).unwrap().plant.retention;
    assert_eq!(same, file.plant.retention);
    (file.plant.retention, file.warnings.len())
}

#[test]
fn nothing_is_removed_unless_it_is_said() {
    let nothing = Retention {
        samples: None,
        reports: None,
    };
    assert_eq!(retention(""), (nothing, 0));
    assert_eq!(retention("[retention]\n"), (nothing, 0));
}

#[test]
fn every_key_is_read() {
    let table = "[retention]\nsamples = \"60 d\"\nreports = \"9600 h\"\n";
    let expected = Retention {
        samples: Some(Duration::days(60)),
        reports: Some(Duration::days(400)),
    };
    assert_eq!(retention(table), (expected, 0));
}

#[test]
fn what_is_short_is_warned_of() {
    for (table, warnings) in [
        ("samples = \"2 d\"", 1),
        ("samples = \"13 d\"", 1),
        ("samples = \"14 d\"", 0),
        ("reports = \"89 d\"", 1),
        ("reports = \"90 d\"", 0),
        ("samples = \"2 d\"\nreports = \"2 d\"", 2),
    ] {
        assert_eq!(
            retention(&format!("[retention]\n{table}\n")).1,
            warnings,
            "{table}"
        );
    }
}

#[test]
fn faults() {
    let holdup = r#"holdup = { value-of = "holdup-change", of = "deaerator", value = "0 kg/s", uncertainty = { absolute = "1 t/h" } }"#;
    for table in [
        "+ samples = \"1 d\"\n! /retention/samples | \"1 d\" | out of bounds | 2 d to 36525 d",
        "+ reports = \"1000000 d\"\n! /retention/reports | \"1000000 d\" | out of bounds | 2 d to",
        "+ reports = \"2 a\"\n! /retention/reports | \"2 a\" | no unit of time | s, min, h or d",
        "+ samples = 400\n! /retention/samples | 400 | without a unit | write number and unit",
        "+ report = \"400 d\"\n! /retention/report | report | no key of the retention | `reports`",
        // Every fault at once.
        "+ samples = \"1 d\"\n+ reports = \"0 d\"\n\
         ! /retention/samples | \"1 d\" | out of bounds | 2 d\n\
         ! /retention/reports | \"0 d\" | out of bounds | 2 d",
    ] {
        check(&format!("- {holdup}\n+ {holdup}\n+ [retention]\n{table}"));
    }
}
