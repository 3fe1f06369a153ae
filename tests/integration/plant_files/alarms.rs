//! The table `[alarms]`.

use counterpoise::plant::{AlarmSettings, Format, Priorities, Priority, canonical_json, read};

use super::GOOD;
use super::cases::check;

fn settings(table: &str) -> AlarmSettings {
    let text = format!("{GOOD}{table}");
    let file = read(&text, Format::Toml).unwrap();
    assert_eq!(file.warnings, []);
    // The same by way of JSON.
    let json = canonical_json(&text, Format::Toml).unwrap().to_string();
    assert_eq!(
        read(&json, Format::Json).unwrap().plant.alarms,
        file.plant.alarms
    );
    file.plant.alarms
}

#[test]
fn every_key_may_be_left_out() {
    let usual = AlarmSettings {
        raise_after: 3,
        clear_after: 3,
        dead_band: 0.2,
        priorities: Priorities {
            suspect: Priority::High,
            imbalance: Priority::Medium,
            adjustment: Priority::Low,
        },
    };
    assert_eq!(settings(""), usual);
    assert_eq!(settings("[alarms]\n"), usual);
    assert_eq!(
        settings("[alarms]\nclear-after = 5\nimbalance = \"high\"\n"),
        AlarmSettings {
            clear_after: 5,
            priorities: Priorities {
                imbalance: Priority::High,
                ..usual.priorities
            },
            ..usual
        }
    );
}

#[test]
fn every_key_is_read() {
    let table = "[alarms]\nraise-after = 1\nclear-after = 1000\ndead-band = \"35 %\"\n\
                 suspect = \"low\"\nimbalance = \"low\"\nadjustment = \"medium\"\n";
    assert_eq!(
        settings(table),
        AlarmSettings {
            raise_after: 1,
            clear_after: 1000,
            dead_band: 0.35,
            priorities: Priorities {
                suspect: Priority::Low,
                imbalance: Priority::Low,
                adjustment: Priority::Medium,
            },
        }
    );
    for (written, band) in [("\"0 %\"", 0.0), ("\"90 %\"", 0.9), ("0.25", 0.25)] {
        let table = format!("[alarms]\ndead-band = {written}\n");
        assert_eq!(settings(&table).dead_band, band);
    }
}

/// The settings are a part of the structure: a change of them is a new revision.
#[test]
fn the_settings_are_in_the_structure() {
    let structure = |table: &str| canonical_json(&format!("{GOOD}{table}"), Format::Toml).unwrap();
    assert_ne!(structure("[alarms]\nraise-after = 2\n"), structure(""));
    assert_eq!(
        structure("[alarms]\nraise-after = 2\n"),
        structure("[alarms]\nraise-after = 2.0\n")
    );
}

#[test]
fn faults() {
    let with = |table: &str| {
        let holdup = r#"holdup = { value-of = "holdup-change", of = "deaerator", value = "0 kg/s", uncertainty = { absolute = "1 t/h" } }"#;
        format!("- {holdup}\n+ {holdup}\n+ [alarms]\n{table}")
    };
    for table in [
        "+ raise-after = 0\n! /alarms/raise-after | 0 | 0 is no number of batches | from 1 to 1000",
        "+ raise-after = 1001\n! /alarms/raise-after | 1001 | 1001 is no number | from 1 to 1000",
        "+ clear-after = 2.5\n! /alarms/clear-after | 2.5 | 2.5 is no number | a whole number",
        "+ clear-after = -3\n! /alarms/clear-after | -3 | -3 is no number | from 1 to 1000",
        "+ clear-after = nan\n! /alarms/clear-after | nan | not a number | finite",
        "+ clear-after = \"3\"\n! /alarms/clear-after | \"3\" | a number is needed here | write 3",
        "+ dead-band = \"95 %\"\n! /alarms/dead-band | \"95 %\" | cannot fall below | 0 % to 90 %",
        "+ dead-band = \"-1 %\"\n! /alarms/dead-band | \"-1 %\" | cannot fall below | 0 % to 90 %",
        "+ dead-band = 20\n! /alarms/dead-band | 20 | cannot fall below | \"20 %\"",
        "+ dead-band = \"2 bar\"\n! /alarms/dead-band | \"2 bar\" | unit of pressure | `%`",
        "+ suspect = \"hihg\"\n! /alarms/suspect | \"hihg\" | `hihg` is no priority | did you mean `high`?",
        "+ imbalance = \"urgent\"\n! /alarms/imbalance | \"urgent\" | no priority | `high`, `medium`, `low`",
        "+ adjustment = 1\n! /alarms/adjustment | 1 | a string is needed | \"high\"",
        "+ raise-atfer = 3\n! /alarms/raise-atfer | raise-atfer | no key of the alarms | did you mean `raise-after`?",
        // Every fault at once.
        "+ raise-after = 0\n+ clear-after = 0\n+ suspect = \"none\"\n\
         ! /alarms/raise-after | 0 | no number of batches | 1 to 1000\n\
         ! /alarms/clear-after | 0 | no number of batches | 1 to 1000\n\
         ! /alarms/suspect | \"none\" | no priority | write one of",
    ] {
        check(&with(table));
    }
    check(
        "- title = \"Tarn Mill steam plant\"\n+ title = \"Tarn Mill steam plant\"\n+ alarms = 3\n\
         ! /alarms | 3 | a table is needed here | raise-after = 3",
    );
}
