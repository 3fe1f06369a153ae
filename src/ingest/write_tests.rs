//! A batch that is written is read back, and its digest tells what it holds.

use super::super::{Parsed, parse};
use super::*;
use proptest::prelude::*;
use time::macros::datetime;

const NOW: OffsetDateTime = datetime!(2031-04-02 10:06 UTC);

fn any_quality() -> impl Strategy<Value = Quality> {
    let words = prop::sample::select(vec![Grade::Good, Grade::Uncertain, Grade::Bad]);
    prop_oneof![
        words.prop_map(|grade| Quality { grade, code: None }),
        any::<u32>().prop_map(|code| Quality {
            grade: super::super::fields::grade(code),
            code: Some(code),
        }),
    ]
}

fn any_number() -> impl Strategy<Value = f64> {
    prop::num::f64::NORMAL | prop::num::f64::ZERO | prop::num::f64::SUBNORMAL
}

fn any_averaged() -> impl Strategy<Value = Averaged> {
    let flags = prop::sample::subsequence(Flag::ALL.to_vec(), 0..=6);
    let counts = (any::<u32>(), any::<u32>(), any::<u32>());
    let scatter = prop::option::of(any_number().prop_map(f64::abs));
    let unused = prop::option::of("[a-z0-9 %(),é]{1,60}");
    let steady = prop::option::of(any::<bool>());
    (counts, 0.0..=1.0, scatter, steady, flags, unused).prop_map(
        |((taken, used, count), covered, scatter, steady, flags, unused)| Averaged {
            taken,
            used,
            covered,
            scatter,
            steady,
            flags: flags.into_iter().map(|flag| (flag, count)).collect(),
            unused,
        },
    )
}

fn any_batch() -> impl Strategy<Value = Batch> {
    let reading = (
        any_number(),
        any_quality(),
        prop::option::of(any_averaged()),
        any::<bool>(),
    );
    let readings = prop::collection::btree_map("[A-Z]{1,3}-[0-9é\"]{1,3}", reading, 0..8);
    let steadiness = (
        any::<bool>(),
        any::<u32>(),
        prop::collection::vec("[A-Z]{1,4}", 0..4),
    );
    let steadiness =
        prop::option::of(
            steadiness.prop_map(|(steady, judged, unsteady)| Steadiness {
                steady,
                judged,
                unsteady,
            }),
        );
    (
        "[a-zA-Z0-9:é\\\\\"-]{1,40}",
        0..1_900_000_000_i64,
        1_i64..90_000,
        readings,
        steadiness,
    )
        .prop_map(|(name, start, length, readings, steadiness)| {
            let start = OffsetDateTime::from_unix_timestamp(start).unwrap();
            let readings = readings
                .into_iter()
                .map(|(tag, (value, quality, averaged, lacks))| Reading {
                    tag,
                    value: (quality.grade != Grade::Bad || !lacks).then_some(value),
                    quality,
                    averaged,
                });
            Batch {
                name,
                start,
                end: start + time::Duration::seconds(length),
                readings: readings.collect(),
                steadiness,
            }
        })
}

fn back(batch: &Batch) -> Parsed {
    parse(&write(batch), NOW).expect("a batch")
}

proptest! {
    #[test]
    fn what_is_written_is_read_back(batch in any_batch()) {
        let parsed = back(&batch);
        prop_assert_eq!(&parsed.batch, &batch);
        prop_assert_eq!(write(&parsed.batch), write(&batch));
    }

    /// The digest tells apart what differs only in what it was averaged from.
    #[test]
    fn the_digest_tells(batch in any_batch(), averaged in any_averaged()) {
        let mut other = batch.clone();
        let Some(reading) = other.readings.first_mut() else { return Ok(()) };
        reading.averaged = Some(averaged);
        prop_assert_eq!(back(&other).digest == back(&batch).digest, other == batch);
        let mut bare = batch.clone();
        bare.steadiness = None;
        prop_assert_eq!(back(&bare).digest == back(&batch).digest, bare == batch);
    }
}

/// Batches that are stored already keep the digest that they were stored with
/// (this one was worked out before there was anything averaged).
#[test]
fn the_digest_of_a_plain_batch_is_what_it_was() {
    let body = br#"{"batch": "b-1", "start": "2031-04-02T10:00:00Z", "end": "2031-04-02T10:05:00Z",
        "readings": [{"tag": "A", "value": 1.5}, {"tag": "B", "value": null, "quality": 2147483648}]}"#;
    let digest = parse(body, NOW).expect("a batch").digest;
    let hex: String = digest.iter().map(|byte| format!("{byte:02x}")).collect();
    assert_eq!(
        hex,
        "702719038af2c545349aa20ea4efa828de8acc32546008fc9e4f0c400dee9b43"
    );
}

#[test]
fn every_fault_of_the_new_fields_is_told() {
    let body = br#"{"batch": "b-1", "start": "2031-04-02T10:00:00Z", "end": "2031-04-02T10:05:00Z",
        "steadiness": {"steady": 1, "unsteady": "A"},
        "readings": [{"tag": "A", "value": 1.5, "averaged": {"samples": 1.5, "covered": 1.2,
            "scatter": -1, "steady": "yes", "flags": {"bad": -1, "odd": 1}, "unused": ""}}]}"#;
    let refusal = parse(body, NOW).expect_err("a refusal");
    let paths: Vec<&str> = refusal
        .faults
        .iter()
        .map(|fault| fault.path.as_str())
        .collect();
    let of = |field: &str| format!("/readings/0/averaged{field}");
    let expected = [
        "/steadiness/judged".to_owned(),
        "/steadiness/steady".to_owned(),
        "/steadiness/unsteady".to_owned(),
        of("/used"),
        of("/samples"),
        of("/covered"),
        of("/scatter"),
        of("/steady"),
        of("/flags/bad"),
        of("/flags/odd"),
        of("/unused"),
    ];
    assert_eq!(paths, expected.each_ref().map(String::as_str));
}
