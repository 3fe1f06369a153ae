//! Samples, the periods that they open, and the batches made from them.

use super::{accepted, incoming, on_every_store, plant, report};
use crate::harness::NOW;
use counterpoise::plant::{Grade, Quality, Sample};
use counterpoise::store::{
    Again, BackfillMark, Closed, Incoming, NewSamples, NewTagSamples, OpenPeriod, PeriodBatch,
    SamplesTaken, Store, StoreError, Stored, TagSamples, Ticket,
};
use std::sync::Arc;
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
    }
}

pub async fn closed(store: &dyn Store, period: &OpenPeriod, digest: u8) -> Closed {
    let closed = store.close_period(batch_of(period, digest));
    closed.await.expect("closed")
}

/// Closes the one period that is open.
async fn made(store: &dyn Store, digest: u8) -> Closed {
    let open = open(store).await;
    assert_eq!(open.len(), 1, "{open:?}");
    closed(store, &open[0], digest).await
}

fn new(closed: Closed) -> Ticket {
    match closed {
        Closed::New(ticket) => ticket,
        other => panic!("{other:?}"),
    }
}

fn changed(closed: Closed) -> Ticket {
    match closed {
        Closed::Changed(ticket) => ticket,
        other => panic!("{other:?}"),
    }
}

fn late() -> Again {
    Again {
        at: NOW,
        by: "late readings".to_owned(),
        reason: "samples came".to_owned(),
        deed: None,
    }
}

/// Tickets that wait, with whether they have a result.
pub async fn waiting(store: &dyn Store) -> Vec<(i64, u32, bool)> {
    let unfinished = store.unfinished(0, 100).await.expect("read").into_iter();
    unfinished
        .map(|one| {
            assert!(one.pending);
            (one.ticket.id, one.ticket.body, one.again)
        })
        .collect()
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
        new(made(store, 1).await);
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

#[tokio::test]
async fn a_period_becomes_a_batch_and_late_samples_another_body() {
    on_every_store(async |store| {
        store.put_plant(plant("p", "{}")).await.expect("put");
        added(store, samples(vec![tag("F-1", 0, &[sample(1, 1.0)])])).await;
        let first = new(made(store, 1).await);
        assert_eq!((first.body, first.revision), (1, 1));
        assert_eq!(open(store).await, []);
        assert_eq!(waiting(store).await, [(first.id, 1, false)]);
        let result = Arc::new(report(&first, 0, 1.0, "t/h"));
        store
            .finish(first.clone(), Arc::clone(&result), None)
            .await
            .expect("kept");
        assert_eq!(waiting(store).await, []);

        store.put_plant(plant("p", "{\"a\":1}")).await.expect("put");
        added(store, samples(vec![tag("F-1", 0, &[sample(2, 2.0)])])).await;
        assert_eq!(
            closed(store, &open(store).await[0], 1).await,
            Closed::Same(first.clone())
        );
        assert_eq!(waiting(store).await, [], "the same content");
        added(store, samples(vec![tag("F-1", 0, &[sample(3, 3.0)])])).await;
        let second = changed(made(store, 2).await);
        let expected = Ticket {
            body: 2,
            ..first.clone()
        };
        assert_eq!(second, expected, "under its own revision");
        assert_eq!(waiting(store).await, [(first.id, 2, true)]);
        let found = store
            .inbox("p", "minute 0")
            .await
            .expect("read")
            .expect("a batch");
        assert_eq!(found.body, b"body 2 of minute 0");
        assert_eq!(found.received, NOW + Duration::seconds(2));
        assert!(found.again && found.pending && !found.backfill);
        assert_eq!(found.ticket, second);
        let present = store.batch("p", "minute 0").await.expect("read");
        assert_eq!(present, Some(Stored::Done(Box::new((*result).clone()))));

        let made_again = store.finish_again(second.clone(), Arc::clone(&result), late());
        assert_eq!(made_again.await.expect("kept"), Some(2));
        assert_eq!(waiting(store).await, []);
        let found = store
            .inbox("p", "minute 0")
            .await
            .expect("read")
            .expect("a batch");
        assert!(found.again && !found.pending);
        let versions = store.versions("p", "minute 0").await.expect("read");
        let bodies: Vec<u32> = versions.iter().map(|line| line.body).collect();
        assert_eq!(bodies, [1, 2]);
        for (body, expected) in [
            (0, None),
            (1, Some("body 1 of minute 0")),
            (2, Some("body 2 of minute 0")),
            (3, None),
        ] {
            let read = store.body("p", "minute 0", body).await.expect("read");
            assert_eq!(read.as_deref(), expected.map(str::as_bytes), "body {body}");
        }
        let backwards = store.finish_again(first, result, late());
        assert_eq!(backwards.await.expect("done"), None, "an older body");
    })
    .await;
}

/// A body that is replaced while its former is being reconciled.
#[tokio::test]
async fn a_result_of_an_older_body_does_not_end_the_waiting() {
    on_every_store(async |store| {
        store.put_plant(plant("p", "{}")).await.expect("put");
        added(store, samples(vec![tag("F-1", 0, &[sample(1, 1.0)])])).await;
        let first = new(made(store, 1).await);
        added(store, samples(vec![tag("F-1", 0, &[sample(2, 2.0)])])).await;
        let second = changed(made(store, 2).await);
        assert_eq!(
            waiting(store).await,
            [(first.id, 2, false)],
            "once, with the newest"
        );
        let pending = store.batch("p", "minute 0").await.expect("read");
        assert_eq!(pending, Some(Stored::Pending(second.clone())));
        let result = Arc::new(report(&first, 0, 1.0, "t/h"));
        let finish = |ticket: &Ticket| store.finish(ticket.clone(), Arc::clone(&result), None);
        assert_eq!(finish(&first).await.expect("kept"), Some(vec![]));
        assert_eq!(waiting(store).await, [(first.id, 2, true)]);
        assert_eq!(finish(&second).await.expect("done"), None, "it has one");

        added(store, samples(vec![tag("F-1", 0, &[sample(3, 3.0)])])).await;
        let third = changed(made(store, 3).await);
        let again =
            |ticket: &Ticket| store.finish_again(ticket.clone(), Arc::clone(&result), late());
        assert_eq!(again(&second).await.expect("kept"), Some(2));
        assert_eq!(waiting(store).await, [(first.id, 3, true)]);
        assert_eq!(again(&third).await.expect("kept"), Some(3));
        assert_eq!(waiting(store).await, []);
        assert_eq!(again(&second).await.expect("done"), None, "an older body");
        let versions = store.versions("p", "minute 0").await.expect("read");
        let bodies: Vec<u32> = versions.iter().map(|line| line.body).collect();
        assert_eq!(bodies, [1, 2, 3]);
    })
    .await;
}

#[tokio::test]
async fn finishing_once_with_the_newest_body_is_enough() {
    on_every_store(async |store| {
        store.put_plant(plant("p", "{}")).await.expect("put");
        added(store, samples(vec![tag("F-1", 0, &[sample(1, 1.0)])])).await;
        new(made(store, 1).await);
        added(store, samples(vec![tag("F-1", 0, &[sample(2, 2.0)])])).await;
        let second = changed(made(store, 2).await);
        let result = Arc::new(report(&second, 0, 1.0, "t/h"));
        store.finish(second, result, None).await.expect("kept");
        assert_eq!(waiting(store).await, []);
        let versions = store.versions("p", "minute 0").await.expect("read");
        assert_eq!((versions.len(), versions[0].body), (1, 2));
    })
    .await;
}

#[tokio::test]
async fn what_comes_meanwhile_keeps_a_period_open() {
    on_every_store(async |store| {
        store.put_plant(plant("p", "{}")).await.expect("put");
        added(store, samples(vec![tag("F-1", 0, &[sample(1, 1.0)])])).await;
        let seen = open(store).await.remove(0);
        added(store, samples(vec![tag("F-1", 0, &[sample(2, 2.0)])])).await;
        assert_eq!(closed(store, &seen, 1).await, Closed::Overtaken);
        store.drop_period(seen.clone()).await.expect("done");
        assert_eq!(open_minutes(store).await, [0]);
        assert_eq!(waiting(store).await, []);
        let newer = open(store).await.remove(0);
        let ticket = new(closed(store, &newer, 2).await);
        // A second closer of the same: nothing is left to be done.
        assert_eq!(closed(store, &newer, 2).await, Closed::Same(ticket));
        assert_eq!(closed(store, &newer, 3).await, Closed::Overtaken);
        // Generations do not begin anew.
        added(store, samples(vec![tag("F-1", 0, &[sample(3, 3.0)])])).await;
        for former in [&seen, &newer] {
            assert_eq!(closed(store, former, 4).await, Closed::Overtaken);
        }
        let last = open(store).await.remove(0);
        assert!(last.generation > newer.generation);
        store.drop_period(last).await.expect("done");
        assert_eq!(open(store).await, []);
        let body = store.body("p", "minute 0", 2).await.expect("read");
        assert_eq!(body, None);
    })
    .await;
}

#[tokio::test]
async fn a_name_that_a_client_has_taken_stays_the_clients() {
    on_every_store(async |store| {
        store.put_plant(plant("p", "{}")).await.expect("put");
        let theirs = accepted(store, incoming("p", "minute 0", 0, 7)).await;
        added(store, samples(vec![tag("F-1", 0, &[sample(1, 1.0)])])).await;
        assert_eq!(made(store, 1).await, Closed::NameTaken);
        assert_eq!(open(store).await, []);
        assert_eq!(waiting(store).await, [(theirs.id, 1, false)]);
        let found = store
            .inbox("p", "minute 0")
            .await
            .expect("read")
            .expect("a batch");
        assert_eq!(found.body, b"body of minute 0");
        // Their batch is no period of ours: a late sample opens its own only.
        added(store, samples(vec![tag("F-1", 60, &[sample(61, 1.0)])])).await;
        assert_eq!(open_minutes(store).await, [1]);
        let nowhere = OpenPeriod {
            plant: "r".to_owned(),
            ..open(store).await.remove(0)
        };
        assert_eq!(closed(store, &nowhere, 1).await, Closed::NoPlant);
    })
    .await;
}

/// A client may send what was made from samples, and gets its report.
#[tokio::test]
async fn a_batch_made_from_samples_is_known_by_its_newest_content() {
    use counterpoise::store::Acceptance;
    on_every_store(async |store| {
        store.put_plant(plant("p", "{}")).await.expect("put");
        added(store, samples(vec![tag("F-1", 0, &[sample(1, 1.0)])])).await;
        new(made(store, 1).await);
        added(store, samples(vec![tag("F-1", 0, &[sample(2, 2.0)])])).await;
        let second = changed(made(store, 2).await);
        let sent = |digest| store.accept(incoming("p", "minute 0", 0, digest));
        assert_eq!(sent(1).await.expect("done"), Acceptance::Conflict);
        assert_eq!(sent(2).await.expect("done"), Acceptance::Known(second));
    })
    .await;
}
