//! Every fault of a batch has its name and its place.

use super::*;
use time::macros::datetime;

const NOW: OffsetDateTime = datetime!(2031-04-02 10:06 UTC);

const GOOD: &str = r#"{"batch": "b-1", "start": "2031-04-02T12:00:00+02:00", "end": "2031-04-02T10:05:00Z",
  "readings": [{"tag": "B", "value": 2, "quality": "uncertain"}, {"tag": "A", "value": 1.5}]}"#;

fn paths(body: &str) -> Vec<String> {
    let refusal = parse(body.as_bytes(), NOW).expect_err("a refusal");
    refusal.faults.into_iter().map(|fault| fault.path).collect()
}

fn whats(body: &str) -> String {
    let refusal = parse(body.as_bytes(), NOW).expect_err("a refusal");
    refusal
        .faults
        .into_iter()
        .map(|fault| fault.what + "\n")
        .collect()
}

fn with_readings(readings: &str) -> String {
    format!(
        r#"{{"batch": "b", "start": "2031-04-02T10:00:00Z", "end": "2031-04-02T10:05:00Z", "readings": {readings}}}"#
    )
}

#[test]
fn a_good_batch_is_read() {
    let parsed = parse(GOOD.as_bytes(), NOW).expect("a batch");
    assert_eq!(parsed.batch.start, datetime!(2031-04-02 10:00 UTC));
    let tags: Vec<&str> = parsed
        .batch
        .readings
        .iter()
        .map(|r| r.tag.as_str())
        .collect();
    assert_eq!(tags, ["A", "B"]);
    assert_eq!(parsed.batch.readings[1].quality.grade, Grade::Uncertain);
}

#[test]
fn spelling_and_order_do_not_change_the_digest_and_content_does() {
    let same = r#"{"readings":[{"value":15e-1,"tag":"A","quality":"good"},{"tag":"B","quality":"uncertain","value":2.0}],
        "end":"2031-04-02T10:05:00Z","start":"2031-04-02T10:00:00Z","batch":"b\u002d1"}"#;
    let digest = |body: &str| parse(body.as_bytes(), NOW).expect("a batch").digest;
    assert_eq!(digest(GOOD), digest(same));
    for (from, to) in [
        ("1.5", "1.6"),
        ("b-1", "b-2"),
        ("uncertain", "bad"),
        ("\"A\"", "\"C\""),
        ("10:05", "10:04"),
    ] {
        assert_ne!(digest(GOOD), digest(&GOOD.replace(from, to)), "{to}");
    }
}

#[test]
fn every_fault_is_told_at_once() {
    let body = r#"{"batch": "", "start": "yesterday", "end": "2031-04-02T10:05:00Z", "colour": 1,
        "readings": [{"tag": "A", "value": "1"}, {"tag": "B", "value": 1e400}, {"value": 1},
                     {"tag": "C", "value": NaN}, {"tag": "D", "value": 1, "quality": "fine"},
                     {"tag": "E"}, {"tag": "F", "value": 1}, {"tag": "F", "value": 1}, 7]}"#;
    let mut found = paths(body);
    found.sort();
    assert_eq!(
        found,
        [
            "/batch",
            "/colour",
            "/readings/0/value",
            "/readings/1/value",
            "/readings/2/tag",
            "/readings/3/value",
            "/readings/4/quality",
            "/readings/5/value",
            "/readings/7/tag",
            "/readings/8",
            "/start",
        ]
    );
}

/// One line, and as many lines as faults: neither may cost more than a walk
/// through the text, nor an answer larger than some hundred kilobytes.
#[test]
fn a_crowd_of_faults_is_answered_in_bounded_size() {
    let items = 1_000_000;
    for separator in [",", ",\n"] {
        let body = with_readings(&format!("[1{}]", format!("{separator}1").repeat(items - 1)));
        let refusal = parse(body.as_bytes(), NOW).expect_err("a refusal");
        assert_eq!(refusal.faults.len(), 1001);
        let size: usize = refusal
            .faults
            .iter()
            .map(|f| f.path.len() + f.what.len() + f.mend.len())
            .sum();
        assert!(size < 200_000, "{size} bytes");
        assert_eq!(refusal.faults[999].path, "/readings/999");
        let first = body.find("[1").expect("a list") + 1;
        let place = (refusal.faults[999].line, refusal.faults[999].column);
        let expected = match separator {
            "," => (1, first + 1 + 2 * 999),
            _ => (1000, 1),
        };
        assert_eq!(place, (Some(expected.0), Some(expected.1)));
        let last = &refusal.faults[1000];
        assert!(last.what.contains("999000 more"), "{}", last.what);
    }
}

#[test]
fn a_long_key_does_not_swell_every_fault_below_it() {
    let body = format!(
        "{{\"{}\": [{}1]}}",
        "k".repeat(1 << 20),
        "NaN, ".repeat(2000)
    );
    let refusal = parse(body.as_bytes(), NOW).expect_err("a refusal");
    assert!(refusal.syntax);
    assert_eq!(refusal.faults.len(), 1001);
    assert!(refusal.faults.iter().all(|fault| fault.path.len() < 220));
}

#[test]
fn a_name_that_no_address_can_hold_is_refused() {
    for name in [".", ".."] {
        let body = with_readings("[]").replace("\"b\"", &format!("\"{name}\""));
        assert_eq!(paths(&body), ["/batch"], "{name}");
    }
    let body = with_readings("[]").replace("\"b\"", "\"...\"");
    assert!(parse(body.as_bytes(), NOW).is_ok());
}

#[test]
fn what_is_missing_is_named() {
    assert_eq!(paths("{}"), ["/batch", "/start", "/end", "/readings"]);
    assert_eq!(paths("[]"), [""]);
}

#[test]
fn the_period_must_run_forward_and_be_past() {
    assert_eq!(paths(&GOOD.replace("10:05", "09:55")), ["/end"]);
    assert!(whats(&GOOD.replace("10:05", "10:17")).contains("future"));
    assert!(parse(GOOD.replace("10:05", "10:15").as_bytes(), NOW).is_ok());
    assert!(whats(&GOOD.replace("2031-04-02T12", "1931-04-02T12")).contains("1970"));
    let reading = r#"[{"tag": "A", "value": 1, "time": "2031-04-02T11:00:00Z"}]"#;
    assert_eq!(paths(&with_readings(reading)), ["/readings/0/time"]);
}

#[test]
fn null_needs_bad_quality() {
    let lacks = |quality: &str| {
        with_readings(&format!(
            r#"[{{"tag": "A", "value": null, "quality": {quality}}}]"#
        ))
    };
    assert!(parse(lacks("\"bad\"").as_bytes(), NOW).is_ok());
    assert!(parse(lacks("2147483648").as_bytes(), NOW).is_ok());
    assert_eq!(paths(&lacks("\"uncertain\"")), ["/readings/0/value"]);
}

#[test]
fn status_codes_of_32_bits() {
    let grade_of = |code: &str| {
        let body = with_readings(&format!(
            r#"[{{"tag": "A", "value": 1, "quality": {code}}}]"#
        ));
        parse(body.as_bytes(), NOW).map(|parsed| parsed.batch.readings[0].quality.grade)
    };
    assert_eq!(grade_of("0"), Ok(Grade::Good));
    assert_eq!(grade_of("1083179008"), Ok(Grade::Uncertain));
    assert_eq!(grade_of("2147483648"), Ok(Grade::Bad));
    assert_eq!(grade_of("4294967295"), Ok(Grade::Bad));
    assert!(grade_of("4294967296").is_err());
    assert!(grade_of("-1").is_err());
    assert!(grade_of("0.5").is_err());
}

#[test]
fn text_that_is_not_utf8_is_named() {
    let refusal = parse(b"{\"batch\": \"\xff\"}", NOW).expect_err("a refusal");
    assert!(refusal.syntax);
    assert!(refusal.faults[0].what.contains("UTF-8"));
}

#[test]
fn every_truncation_is_refused() {
    for length in 0..GOOD.len() {
        assert!(parse(&GOOD.as_bytes()[..length], NOW).is_err(), "{length}");
    }
}

proptest::proptest! {
    #[test]
    fn any_bytes_are_answered(bytes in proptest::collection::vec(proptest::num::u8::ANY, 0..200)) {
        if let Err(refusal) = parse(&bytes, NOW) {
            proptest::prop_assert!(!refusal.faults.is_empty());
        }
    }

    #[test]
    fn any_damage_to_a_batch_is_answered(at in 0..GOOD.len(), byte in proptest::num::u8::ANY) {
        let mut body = GOOD.as_bytes().to_vec();
        body[at] = byte;
        if let Err(refusal) = parse(&body, NOW) {
            proptest::prop_assert!(!refusal.faults.is_empty());
        }
    }

    #[test]
    fn values_come_back_bit_for_bit(value in proptest::num::f64::NORMAL) {
        let body = with_readings(&format!(r#"[{{"tag": "A", "value": {value:e}}}]"#));
        let parsed = parse(body.as_bytes(), NOW).expect("a batch");
        let read = parsed.batch.readings[0].value.expect("a value");
        proptest::prop_assert_eq!(read.to_bits(), value.to_bits());
    }
}
