//! Every reader of text from outside, given anything: none panics, every fault
//! has a place inside the text and words, and what is accepted is sound.
//!
//! Two kinds of text: bytes of any sort, and sound documents that have been
//! damaged, which come much further. The checks are shared with the targets in
//! `fuzz`.

use crate::harness::{NOW, PLANT, batch};
use counterpoise::demo;
use counterpoise::ingest;
use counterpoise::plant::{self, Dimension, Fault, Format, Severity};
use proptest::prelude::*;

/// A change to a text.
#[derive(Clone, Debug)]
pub enum Damage {
    Cut(u16, u8),
    Put(u16, Vec<u8>),
    Copy(u16, u16, u8),
    Word(u16, u8),
}

/// What tends to matter to a reader.
const WORDS: [&str; 40] = [
    "\"",
    "'",
    "\\",
    "\\u",
    "\\ud800",
    "\"\"\"",
    "{",
    "}",
    "[",
    "]",
    "[[",
    ",",
    ":",
    "=",
    ".",
    "\n",
    "\r\n",
    "\0",
    "#",
    "-",
    "1e400",
    "NaN",
    "-Infinity",
    "1e-400",
    "0x1f",
    "9223372036854775808",
    "null",
    "true",
    "\u{feff}",
    "\u{1f6b0}",
    "t/h",
    "bar",
    "Cel",
    "%",
    "K",
    "tag",
    "value",
    "unit",
    "uncertainty",
    "2031-04-02T10:00:60Z",
];

/// Damages a document; places are taken modulo its length.
pub fn damage(document: &str, damages: &[Damage]) -> Vec<u8> {
    let mut bytes = document.as_bytes().to_vec();
    for one in damages {
        let place = |at: u16| usize::from(at) * 7 % (bytes.len() + 1);
        match one {
            Damage::Cut(at, length) => {
                let from = place(*at);
                let to = (from + usize::from(*length)).min(bytes.len());
                bytes.drain(from..to);
            }
            Damage::Put(at, put) => {
                let at = place(*at);
                bytes.splice(at..at, put.iter().copied());
            }
            Damage::Copy(from, to, length) => {
                let (from, to) = (place(*from), place(*to));
                let end = (from + usize::from(*length)).min(bytes.len());
                let copied = bytes[from..end].to_vec();
                bytes.splice(to..to, copied);
            }
            Damage::Word(at, word) => {
                let at = place(*at);
                let word = WORDS[usize::from(*word) % WORDS.len()];
                bytes.splice(at..at, word.bytes());
            }
        }
    }
    bytes
}

/// Damages from bytes of any sort: what a fuzzer plays with.
pub fn damages(mut bytes: &[u8]) -> Vec<Damage> {
    let mut found = Vec::new();
    while let [kind, a, b, c, d, length, rest @ ..] = bytes {
        let (one, two) = (u16::from_le_bytes([*a, *b]), u16::from_le_bytes([*c, *d]));
        let put = &rest[..rest.len().min(usize::from(length % 8))];
        bytes = &rest[put.len()..];
        found.push(match kind % 4 {
            0 => Damage::Cut(one, *length),
            1 => Damage::Put(one, put.to_vec()),
            2 => Damage::Copy(one, two, *length),
            _ => Damage::Word(one, *length),
        });
    }
    found
}

pub fn any_damages() -> impl Strategy<Value = Vec<Damage>> {
    let damage = prop_oneof![
        (any::<u16>(), any::<u8>()).prop_map(|(at, length)| Damage::Cut(at, length)),
        (any::<u16>(), prop::collection::vec(any::<u8>(), 1..4))
            .prop_map(|(at, put)| Damage::Put(at, put)),
        (any::<u16>(), any::<u16>(), any::<u8>())
            .prop_map(|(from, to, length)| Damage::Copy(from, to, length)),
        (any::<u16>(), any::<u8>()).prop_map(|(at, word)| Damage::Word(at, word)),
    ];
    prop::collection::vec(damage, 1..6)
}

/// A fault has words, and a place inside the text where it has one.
fn is_told(fault: &Fault, text: &str) {
    assert!(
        !fault.what.is_empty() && !fault.mend.is_empty(),
        "{fault:?}"
    );
    assert!(
        fault.path.is_empty() || fault.path.starts_with('/'),
        "{fault:?}"
    );
    let (Some(line), Some(column)) = (fault.line, fault.column) else {
        assert_eq!((fault.line, fault.column), (None, None), "{fault:?}");
        return;
    };
    // A line ends with a line feed; the last may be empty, and a fault may stand
    // at the end of any.
    let lines: Vec<&str> = text.split('\n').collect();
    assert!(
        (1..=lines.len()).contains(&line),
        "{fault:?} of {} lines",
        lines.len()
    );
    let columns = lines[line - 1].chars().count() + 1;
    assert!(
        (1..=columns).contains(&column),
        "{fault:?} of {columns} columns"
    );
}

/// Reads bytes as a batch.
pub fn is_a_batch_or_told(bytes: &[u8]) {
    match ingest::parse(bytes, NOW) {
        Ok(parsed) => {
            let batch = parsed.batch;
            assert!(!batch.name.is_empty() && batch.start < batch.end);
            assert!(
                batch
                    .readings
                    .iter()
                    .all(|reading| reading.value.is_none_or(f64::is_finite))
            );
            assert!(batch.readings.is_sorted_by(|one, next| one.tag < next.tag));
        }
        Err(refusal) => {
            assert!(!refusal.faults.is_empty());
            let text = String::from_utf8_lossy(bytes);
            refusal
                .faults
                .iter()
                .for_each(|fault| is_told(fault, &text));
            let placed = refusal.faults.iter().filter(|fault| fault.line.is_some());
            assert!(placed.count() > 0, "{:?}", refusal.faults);
        }
    }
}

/// Reads bytes as a plant file in both formats.
pub fn is_a_plant_or_told(bytes: &[u8]) {
    let text = String::from_utf8_lossy(bytes);
    for format in [Format::Toml, Format::Json] {
        let canonical = plant::canonical_json(&text, format);
        match plant::read(&text, format) {
            Ok(file) => {
                assert!(canonical.is_ok(), "accepted without a structure");
                assert!(!file.plant.name.is_empty());
                file.warnings.iter().for_each(|fault| is_told(fault, &text));
            }
            Err(faults) => {
                faults.0.iter().for_each(|fault| is_told(fault, &text));
                assert!(
                    faults
                        .0
                        .iter()
                        .any(|fault| fault.severity == Severity::Error)
                );
                assert!(!faults.render(&text, "plant").is_empty());
            }
        }
    }
}

/// Reads a text as a unit of everything.
fn is_a_unit_or_told(text: &str) {
    let dimensions = [
        Dimension::MassFlow,
        Dimension::Pressure,
        Dimension::Temperature,
        Dimension::SpecificEnthalpy,
        Dimension::Power,
        Dimension::Fraction,
    ];
    for dimension in dimensions
        .into_iter()
        .flat_map(|one| [one, one.of_difference()])
    {
        match dimension.unit(text) {
            Ok(unit) => {
                let there = unit.to_internal(1.5);
                assert!(there.is_finite(), "{text}: {there}");
                let back = unit.from_internal(there);
                assert!((back - 1.5).abs() < 1e-6, "{text}: {back}");
            }
            Err(fault) => assert!(!fault.what.is_empty() && !fault.mend.is_empty()),
        }
    }
}

/// The plant file of the tests with one text exchanged.
fn with(text: &str, from: &str) -> String {
    assert!(PLANT.contains(from), "{from}");
    PLANT.replacen(from, &format!("\"{}\"", text.escape_default()), 1)
}

/// The sound documents that are damaged.
pub fn sound_plants() -> [String; 3] {
    let toml = PLANT.to_owned();
    let json = plant::canonical_json(PLANT, Format::Toml).expect("a plant");
    [toml, json.to_string(), demo::plant_file().to_owned()]
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 256, ..ProptestConfig::default() })]

    #[test]
    fn bytes_as_a_batch(bytes in prop::collection::vec(any::<u8>(), 0..300)) {
        is_a_batch_or_told(&bytes);
    }

    #[test]
    fn text_as_a_batch(text in "[\\[\\]{}\":,\\\\ 0-9eE.+a-z\n\u{e9}-]{0,200}") {
        is_a_batch_or_told(text.as_bytes());
    }

    #[test]
    fn damaged_batches(damages in any_damages()) {
        is_a_batch_or_told(&damage(&batch("b", 0, 150.0), &damages));
    }

    #[test]
    fn bytes_as_a_plant_file(bytes in prop::collection::vec(any::<u8>(), 0..300)) {
        is_a_plant_or_told(&bytes);
    }

    #[test]
    fn text_as_a_plant_file(text in "[\\[\\]{}\"'=:,.#\\\\ 0-9a-z\n\r\u{e9}-]{0,200}") {
        is_a_plant_or_told(text.as_bytes());
    }

    #[test]
    fn damaged_plant_files(which in 0..2_usize, damages in any_damages()) {
        is_a_plant_or_told(&damage(&sound_plants()[which], &damages));
    }

    #[test]
    fn units(text in "(\\PC{0,12}|[kMmKbarthCelgWs/.*0-9()\\[\\]^%-]{0,10})") {
        is_a_unit_or_told(&text);
    }

    /// Number and unit, as assumptions and uncertainties give them.
    #[test]
    fn quantities(text in "(\\PC{0,16}|[-+]?[0-9.eE]{0,6} ?(t/h|kg/s|%|bar|K|barg)?[a-z ]{0,3})") {
        for from in ["\"0.1 bar\"", "\"1 %\"", "\"1 K\"", "\"t/h\"", "\"water\"", "\"mass-flow\""] {
            is_a_plant_or_told(with(&text, from).as_bytes());
        }
    }

    #[test]
    fn times(text in "(\\PC{0,24}|[0-9]{1,5}-[0-9]{1,2}-[0-9]{1,2}[Tt _][0-9:.]{0,14}(Z|z|[-+][0-9:]{0,6})?)") {
        let good = batch("b", 0, 150.0);
        let quoted = serde_json::to_string(&text).expect("JSON");
        is_a_batch_or_told(good.replacen("\"2031-04-02T10:00:00Z\"", &quoted, 1).as_bytes());
        is_a_batch_or_told(good.replacen("\"2031-04-02T10:00:30Z\"", &quoted, 1).as_bytes());
    }
}
