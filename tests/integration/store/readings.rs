//! Samples, and the periods that they open.

use super::{on_every_store, plant};
use crate::harness::NOW;
use counterpoise::plant::{Grade, Quality, Sample};
use counterpoise::store::{
    BackfillMark, Closed, Incoming, NewSamples, NewTagSamples, OpenPeriod, PeriodBatch,
    SamplesTaken, Store, StoreError, TagSamples,
};
use time::{Duration, OffsetDateTime};

/// 2031-04-02T10:00:00Z and some seconds.
pub fn at(second: i64) -> OffsetDateTime {
    let start = OffsetDateTime::from_unix_timestamp(1_932_976_800).expect("a time");
    start + Duration::seconds(second)
}

pub fn sample(second: i64, value: f64) -> Sample {
    Sample {
        time: at(second),
        value: Some(value),
        quality: Quality {
            grade: Grade::Good,
            code: None,
        },
    }
}

/// A tag whose values hold for two minutes, and reach back as far as said.
pub fn tag(name: &str, reaches_back: i64, samples: &[Sample]) -> NewTagSamples {
    NewTagSamples {
        tag: name.to_owned(),
        holds: Duration::minutes(2),
        reaches_back: Duration::seconds(reaches_back),
        samples: samples.to_vec(),
    }
}

/// Samples of a plant with periods of one minute.
pub fn samples(tags: Vec<NewTagSamples>) -> NewSamples {
    NewSamples {
        plant: "p".to_owned(),
        received: NOW,
        period: Duration::minutes(1),
        tags,
        backfill: None,
    }
}

pub async fn added(store: &dyn Store, new: NewSamples) -> SamplesTaken {
    let taken = store.add_samples(new).await.expect("kept");
    taken.expect("a plant")
}

pub async fn open(store: &dyn Store) -> Vec<OpenPeriod> {
    let far = at(1_000_000);
    store.open_periods("p", far, 1000).await.expect("read")
}

/// Start of each open period, in minutes.
pub async fn open_minutes(store: &dyn Store) -> Vec<i64> {
    let open = open(store).await.into_iter();
    open.map(|period| (period.start - at(0)).whole_minutes())
        .collect()
}

pub fn batch_of(period: &OpenPeriod, digest: u8) -> PeriodBatch {
    let minute = (period.start - at(0)).whole_minutes();
    PeriodBatch {
        incoming: Incoming {
            plant: period.plant.clone(),
            batch: format!("minute {minute}"),
            digest: [digest; 32],
            start: period.start,
            end: period.end,
            received: NOW + Duration::seconds(i64::from(digest)),
            body: format!("body {digest} of minute {minute}").into_bytes(),
        },
        generation: period.generation,
        revision: 1,
    }
}

pub async fn closed(store: &dyn Store, period: &OpenPeriod, digest: u8) -> Closed {
    let closed = store.close_period(batch_of(period, digest));
    closed.await.expect("closed")
}

#[tokio::test]
async fn samples_are_kept_as_they_came() {
    on_every_store(async |store| {
        store.put_plant(plant("p", "{}")).await.expect("put");
        store.put_plant(plant("q", "{}")).await.expect("put");
        let all = [
            sample(-150, 0.5),
            sample(-100, 0.1 + 0.2),
            Sample {
                value: None,
                quality: Quality {
                    grade: Grade::Bad,
                    code: Some(0x8000_0000),
                },
                ..sample(0, 0.0)
            },
            Sample {
                value: Some(f64::MIN_POSITIVE / 3.0),
                quality: Quality {
                    grade: Grade::Uncertain,
                    code: Some(u32::MAX),
                },
                ..sample(59, 0.0)
            },
            Sample {
                time: at(60) + Duration::nanoseconds(1),
                ..sample(0, -1e300)
            },
            sample(70, f64::INFINITY),
        ];
        let mut backwards = all.to_vec();
        backwards.reverse();
        let taken = added(store, samples(vec![tag("F-1", 0, &backwards)])).await;
        assert_eq!((taken.new, taken.known), (6, 0));
        added(store, samples(vec![tag("A-1", 0, &[sample(30, 1.0)])])).await;
        added(store, samples(vec![tag("B-1", 0, &[sample(300, 1.0)])])).await;
        let of = |tag: &str, samples: &[Sample]| TagSamples {
            tag: tag.to_owned(),
            samples: samples.to_vec(),
        };
        let hold = |seconds| Duration::seconds(seconds);
        for (from, to, holds, expected) in [
            (
                0,
                60,
                100,
                vec![of("A-1", &[sample(30, 1.0)]), of("F-1", &all[1..5])],
            ),
            (
                0,
                60,
                99,
                vec![of("A-1", &[sample(30, 1.0)]), of("F-1", &all[2..5])],
            ),
            (
                0,
                60,
                0,
                vec![of("A-1", &[sample(30, 1.0)]), of("F-1", &all[2..4])],
            ),
            (59, 70, 0, vec![of("F-1", &all[3..6])]),
            (59, 71, 1, vec![of("F-1", &all[3..6])]),
            (100, 160, 10, vec![]),
            (100, 160, 31, vec![of("F-1", &all[5..])]),
        ] {
            let read = store.samples("p", at(from), at(to), hold(holds)).await;
            assert_eq!(read.expect("read"), expected, "{from} to {to}, {holds}");
        }
        for other in ["q", "r"] {
            let read = store.samples(other, at(-500), at(500), hold(0)).await;
            assert_eq!(read.expect("read"), [], "{other}");
        }
    })
    .await;
}

#[tokio::test]
async fn what_is_known_opens_nothing_and_the_first_value_stands() {
    on_every_store(async |store| {
        store.put_plant(plant("p", "{}")).await.expect("put");
        let first = [sample(1, 10.0), sample(2, 20.0)];
        added(store, samples(vec![tag("F-1", 0, &first)])).await;
        let period = open(store).await.remove(0);
        assert!(matches!(closed(store, &period, 1).await, Closed::New(_)));
        let worse = Sample {
            quality: Quality {
                grade: Grade::Uncertain,
                code: None,
            },
            ..sample(2, 20.0)
        };
        let with_code = Sample {
            quality: Quality {
                grade: Grade::Good,
                code: Some(0),
            },
            ..sample(2, 20.0)
        };
        let more = [sample(2, 21.0), sample(1, 10.0), worse, with_code];
        let twice = samples(vec![tag("F-1", 0, &first[..1]), tag("F-1", 0, &more)]);
        let taken = added(store, twice).await;
        let expected = SamplesTaken {
            new: 0,
            known: 2,
            conflicting: vec![(1, 0), (1, 2), (1, 3)],
        };
        assert_eq!(taken, expected);
        assert_eq!(open(store).await, []);
        let read = store.samples("p", at(0), at(60), Duration::ZERO).await;
        assert_eq!(read.expect("read")[0].samples, first);

        // Within one call the first that comes stands too.
        let at_once = [sample(70, 1.0), sample(70, 1.0), sample(70, 2.0)];
        let taken = added(store, samples(vec![tag("F-1", 0, &at_once)])).await;
        let expected = SamplesTaken {
            new: 1,
            known: 1,
            conflicting: vec![(0, 2)],
        };
        assert_eq!(taken, expected);
        assert_eq!(open_minutes(store).await, [1]);
    })
    .await;
}

#[tokio::test]
async fn nothing_is_kept_of_what_cannot_be() {
    on_every_store(async |store| {
        let nowhere = store.add_samples(samples(vec![tag("F-1", 0, &[sample(1, 1.0)])]));
        assert_eq!(nowhere.await.expect("done"), None);
        store.put_plant(plant("p", "{}")).await.expect("put");
        let no_number = samples(vec![tag("F-1", 0, &[sample(1, 1.0), sample(2, f64::NAN)])]);
        let no_period = NewSamples {
            period: Duration::ZERO,
            ..samples(vec![])
        };
        for refused in [no_number, no_period] {
            let error = store.add_samples(refused).await.expect_err("a refusal");
            assert!(matches!(error, StoreError::Corrupt(_)), "{error:?}");
        }
        assert_eq!(open(store).await, []);
        let read = store.samples("p", at(0), at(60), Duration::ZERO).await;
        assert_eq!(read.expect("read"), []);
        let none = samples(vec![tag("F-1", 0, &[])]);
        assert_eq!(added(store, none).await, SamplesTaken::default());
    })
    .await;
}

#[tokio::test]
async fn open_periods_come_live_and_early_first() {
    on_every_store(async |store| {
        store.put_plant(plant("p", "{}")).await.expect("put");
        store.put_plant(plant("q", "{}")).await.expect("put");
        let none = store.plants_with_open_periods().await.expect("read");
        assert_eq!(none, [""; 0]);
        let mark = BackfillMark {
            name: "a year".to_owned(),
            bytes: 1,
            lines: 1,
            refused: 0,
            header: None,
        };
        let backfill = |second| NewSamples {
            backfill: Some(mark.clone()),
            ..samples(vec![tag("F-1", 0, &[sample(second, 1.0)])])
        };
        added(store, backfill(0)).await;
        added(store, backfill(60)).await;
        let hour = samples(vec![tag("F-1", 0, &[sample(3600, 1.0)])]);
        added(store, hour).await;
        added(store, samples(vec![tag("F-1", 0, &[sample(1800, 1.0)])])).await;
        assert_eq!(open_minutes(store).await, [30, 60, 0, 1]);
        let before: Vec<_> = open(store).await;
        assert_eq!(before.iter().filter(|period| period.backfill).count(), 2);
        let received = NOW + Duration::minutes(3);
        let live = NewSamples {
            received,
            ..samples(vec![tag("F-1", 0, &[sample(61, 1.0)])])
        };
        added(store, live).await;
        added(store, backfill(1801)).await;
        assert_eq!(open_minutes(store).await, [1, 30, 60, 0]);
        let after = open(store).await;
        assert_eq!(after[0].touched, received);
        assert!(!after[0].backfill && !after[1].backfill);
        for period in &before {
            let same = after.iter().find(|other| other.start == period.start);
            let same = same.expect("still open");
            let grown = [at(60), at(1800)].contains(&period.start);
            assert_eq!(same.generation > period.generation, grown, "{period:?}");
        }
        let due = store.open_periods("p", at(120), 10).await.expect("read");
        assert_eq!(due.len(), 2, "the end counts");
        assert_eq!((due[0].end, due[1].end), (at(120), at(60)));
        let due = store.open_periods("p", at(119), 10).await.expect("read");
        assert_eq!(due.len(), 1);
        let one = store.open_periods("p", at(9999), 1).await.expect("read");
        assert_eq!(one, after[..1]);
        assert_eq!(
            store.open_periods("q", at(9999), 9).await.expect("read"),
            []
        );
        let plants = store.plants_with_open_periods().await.expect("read");
        assert_eq!(plants, ["p"]);
    })
    .await;
}

/// A few samples across a long time full of others are looked for one by one;
/// what comes of them is the same.
#[tokio::test]
async fn a_few_samples_among_many_open_no_more_than_they_change() {
    on_every_store(async |store| {
        store.put_plant(plant("p", "{}")).await.expect("put");
        let many: Vec<Sample> = (0..3600).map(|second| sample(second, 1.0)).collect();
        added(store, samples(vec![tag("F-1", 60, &many)])).await;
        for period in open(store).await {
            let closed = closed(store, &period, 1).await;
            assert!(matches!(closed, Closed::New(_)), "{closed:?}");
        }
        let half = Duration::milliseconds(500);
        let mut few: Vec<Sample> = (0..60).map(|minute| sample(minute * 60, 1.0)).collect();
        for minute in (0..60).step_by(3) {
            few[minute].time += half;
        }
        for minute in (1..60).step_by(3) {
            few[minute].value = Some(2.0);
        }
        few.push(sample(3600, 1.0));
        let taken = added(store, samples(vec![tag("F-1", 60, &few)])).await;
        let expected = SamplesTaken {
            new: 21,
            known: 20,
            conflicting: (1..60).step_by(3).map(|place| (0, place)).collect(),
        };
        assert_eq!(taken, expected);
        // The last one continues the line of the hour's last sample.
        let mut opened: Vec<i64> = (0..60).step_by(3).collect();
        opened.extend([59, 60]);
        assert_eq!(open_minutes(store).await, opened);
        let read = store.samples("p", at(0), at(3600), Duration::ZERO).await;
        assert_eq!(read.expect("read")[0].samples.len(), 3621);
    })
    .await;
}
