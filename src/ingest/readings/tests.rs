//! Readings come back as they were written, whatever the form and the blocks, and
//! every fault has its name and its place.

use super::*;
use proptest::prelude::*;
use time::macros::datetime;

const NOW: OffsetDateTime = datetime!(2031-04-02 10:06 UTC);

fn read(body: &str, form: ReadingsForm) -> Readings {
    readings(body.as_bytes(), form, NOW).expect("readings")
}

/// Faults as `line:column path what`.
fn faults(body: &str, form: ReadingsForm) -> Vec<String> {
    let refusal = readings(body.as_bytes(), form, NOW).expect_err("a refusal");
    let told = refusal.faults.iter().map(|fault| {
        let place = |at: Option<usize>| at.map_or("-".to_owned(), |at| at.to_string());
        format!(
            "{}:{} {} {}",
            place(fault.line),
            place(fault.column),
            fault.path,
            fault.what
        )
    });
    told.collect()
}

const CSV: &str = "\u{feff}quality,unix-time,tag,value\r\n\
                   good,1932890400,\"F,1\",1.5\r\n\r\n\
                   0x80000000,1932890400.25,B,\r\n\
                   ,1932890401,\"F,1\",-2e-3";

#[test]
fn the_three_forms_say_the_same() {
    let ndjson = r#"{"tag": "F,1", "time": "2031-04-02T10:00:00Z", "value": 1.5, "quality": "good"}
{"tag": "B", "time": "2031-04-02T12:00:00.25+02:00", "quality": 2147483648}

{"tag": "F,1", "time": "2031-04-02T10:00:01Z", "value": -0.002}
"#;
    let listed: Vec<&str> = ndjson.lines().filter(|line| !line.is_empty()).collect();
    let json = format!(r#"{{"readings": [{}]}}"#, listed.join(","));
    let csv = read(CSV, ReadingsForm::Csv);
    assert_eq!(csv, read(ndjson, ReadingsForm::Ndjson));
    assert_eq!(csv, read(&json, ReadingsForm::Json));
    assert_eq!((csv.count, csv.tags["F,1"].len()), (3, 2));
    let bad = &csv.tags["B"][0];
    assert_eq!(
        (bad.value, bad.quality.grade, bad.quality.code),
        (None, Grade::Bad, Some(1 << 31))
    );
    assert_eq!(read(listed[0], ReadingsForm::Json).count, 1);
    assert_eq!(read("", ReadingsForm::Ndjson).count, 0);
}

#[test]
fn every_fault_of_a_csv_is_told_at_once() {
    let body = "tag,time,value,quality\n\
                A,2031-04-02T10:00:00Z,NaN,good\n\
                A,yesterday,1e400,fine\n\
                A,2031-04-02T10:00:00Z,1,5,good\n\
                \"A,2031-04-02T10:00:00Z,1,good\n\
                ,2031-05-02T10:00:00Z,,good\n\
                A,2031-04-02T10:00:00Z,inf,0x1G\n\
                A,2031-04-02T10:00:00Z,1,4294967296\n";
    assert_eq!(
        faults(body, ReadingsForm::Csv),
        [
            "2:24 /value \"NaN\" is no number",
            "3:3 /time \"yesterday\" is no time",
            "3:19 /quality unknown quality \"fine\"",
            "3:13 /value the number 1e400 is beyond the range of a double",
            "4:1  5 fields where the header has 4",
            "5:1  a quote that is not closed",
            "6:1 /tag a name of 0 characters",
            "6:2 /time 2031-05-02T10:00:00Z lies in the future",
            "6:23 /value a reading without a value",
            "7:28 /quality 0x1G is no status code of 32 bits",
            "7:24 /value \"inf\" is no number",
            "8:26 /quality 4294967296 is no status code of 32 bits",
        ]
    );
}

#[test]
fn every_fault_of_a_header_is_told_at_once() {
    assert_eq!(
        faults(
            "tag,colour,tag,unix-time,time\nA,1,2,3,4\n",
            ReadingsForm::Csv
        ),
        [
            "1:5  unknown column \"colour\"",
            "1:12 /tag the column `tag` stands twice",
            "1:1 /value the column `value` is missing",
            "1:1 /time two columns of time",
        ]
    );
    assert_eq!(faults("", ReadingsForm::Csv), ["1:-  there is no header"]);
}

#[test]
fn every_fault_of_json_lines_is_told_at_once() {
    let body = r#"{"tag": "A", "time": "2031-04-02T10:00:00Z", "value": NaN}
{"tag": "A", "time": "2031-04-02T10:00:00Z", "value": 1, "colour": 2}
{"tag": "A"
{"tag": "A", "value": "1"}
[1]
"#;
    assert_eq!(
        faults(body, ReadingsForm::Ndjson),
        [
            "1:55 /value NaN is no JSON number, and no reading",
            "2:58 /colour unknown field \"colour\"",
            "3:12  the text ends in the middle of a JSON document",
            "4:1 /time `time` is missing",
            "4:23 /value a string where a number is needed",
            "5:1  a list where a reading is needed",
        ]
    );
}

#[test]
fn a_crowd_of_faults_is_answered_in_bounded_size() {
    let body = "tag,time,value\n".to_owned() + &"x\n".repeat(100_000);
    let told = faults(&body, ReadingsForm::Csv);
    assert_eq!(told.len(), 1001);
    assert!(
        told[1000].ends_with("99000 more faults not told here"),
        "{}",
        told[1000]
    );
}

#[test]
fn a_line_without_end_is_not_held() {
    let mut lines = ReadingsLines::new(ReadingsForm::Ndjson, NOW);
    for _ in 0..100 {
        lines.feed(&[b'['; 10_000]);
        assert!(lines.rest.len() <= 1 << 16);
    }
    lines.feed(b"\n{\"tag\": \"A\", \"time\": \"2031-04-02T10:00:00Z\", \"value\": 1}\n");
    let block = lines.take();
    assert_eq!((block.faulty, block.readings.count, block.lines), (1, 1, 2));
    assert!(block.faults[0].what.contains("a line of more than"));
}

#[test]
fn a_cut_content_goes_on_where_it_stopped() {
    let whole = read(CSV, ReadingsForm::Csv);
    for cut in 0..CSV.len() {
        let mut first = ReadingsLines::new(ReadingsForm::Csv, NOW);
        first.feed(&CSV.as_bytes()[..cut]);
        let mut got = first.take();
        assert!(got.bytes as usize <= cut);
        let header = first.header().map(str::to_owned);
        let mut second = ReadingsLines::resumed(
            ReadingsForm::Csv,
            NOW,
            header.as_deref(),
            got.bytes,
            got.lines,
        );
        second.feed(&CSV.as_bytes()[got.bytes as usize..]);
        second.end();
        let rest = second.take();
        assert_eq!(
            (rest.faulty, rest.bytes, rest.lines),
            (0, CSV.len() as u64, 5)
        );
        for (tag, samples) in rest.readings.tags {
            for sample in samples {
                got.readings.add(&tag, sample);
            }
        }
        assert_eq!(got.readings, whole, "cut at {cut}");
    }
}

fn any_reading() -> impl Strategy<Value = (String, Sample)> {
    let tag = "[A-Za-z0-9,\"é;.-]([A-Za-z0-9 ,\"é;.-]{0,18}[A-Za-z0-9,\"é;.-])?";
    let value = prop::num::f64::NORMAL | prop::num::f64::ZERO | prop::num::f64::SUBNORMAL;
    let time = 0..1_932_890_400_000_000_000_i64;
    (tag, time, value, any::<u32>(), any::<bool>()).prop_map(|(tag, time, value, code, lacks)| {
        let grade = fields_grade(code);
        let sample = Sample {
            time: OffsetDateTime::from_unix_timestamp_nanos(time.into()).unwrap(),
            value: (grade != Grade::Bad || !lacks).then_some(value),
            quality: Quality {
                grade,
                code: Some(code),
            },
        };
        (tag, sample)
    })
}

fn fields_grade(code: u32) -> Grade {
    super::super::fields::grade(code)
}

fn rfc3339(time: OffsetDateTime) -> String {
    time.format(&time::format_description::well_known::Rfc3339)
        .unwrap()
}

proptest! {
    /// What was written is read, in whatever blocks it comes.
    #[test]
    fn round_trips(list in prop::collection::vec(any_reading(), 0..20), size in 1_usize..200, hex: bool) {
        let mut expected = Readings::default();
        let mut csv = csv::Writer::from_writer(Vec::new());
        csv.write_record(["tag", "time", "value", "quality"]).unwrap();
        let mut ndjson = String::new();
        for (tag, sample) in &list {
            expected.add(tag, sample.clone());
            let code = sample.quality.code.unwrap();
            let quality = if hex { format!("0x{code:08X}") } else { code.to_string() };
            let value = sample.value.map_or(String::new(), |value| value.to_string());
            csv.write_record([tag.as_str(), &rfc3339(sample.time), &value, &quality]).unwrap();
            let line = serde_json::json!({
                "tag": tag, "time": rfc3339(sample.time), "value": sample.value, "quality": code,
            });
            ndjson += &format!("{line}\n");
        }
        for (form, body) in [(ReadingsForm::Csv, csv.into_inner().unwrap()), (ReadingsForm::Ndjson, ndjson.into_bytes())] {
            let mut lines = ReadingsLines::new(form, NOW);
            for block in body.chunks(size) {
                lines.feed(block);
            }
            lines.end();
            let block = lines.take();
            prop_assert_eq!(&block.faults, &[]);
            prop_assert_eq!(&block.readings, &expected);
            prop_assert_eq!(block.bytes, body.len() as u64);
        }
    }

    /// Whatever comes is readings or faults.
    #[test]
    fn anything_is_answered(body in prop::collection::vec(any::<u8>(), 0..300), text in "[\\x00-\\x7f{}\":,tagtimevalue0-9\n]{0,200}") {
        for form in [ReadingsForm::Json, ReadingsForm::Ndjson, ReadingsForm::Csv] {
            let _ = readings(&body, form, NOW);
            let _ = readings(text.as_bytes(), form, NOW);
            let _ = readings(format!("tag,time,value,quality\n{text}").as_bytes(), form, NOW);
        }
    }
}
