//! Batches that are reconciled again: the older result stays, the new one
//! stands in its place everywhere.

use super::{accepted, incoming, on_every_store, plant, report};
use crate::harness::NOW;
use counterpoise::report::{Report, SingleTest, Verdict};
use counterpoise::store::{Again, BatchQuery, Field, Selector, SeriesQuery, Stored, VersionLine};
use std::sync::Arc;

fn again(minute: i64, reason: &str) -> Again {
    Again {
        at: NOW + time::Duration::minutes(minute),
        by: "R. Engineer".to_owned(),
        reason: reason.to_owned(),
        deed: None,
    }
}

#[tokio::test]
async fn every_version_stays_and_the_newest_stands() {
    on_every_store(async |store| {
        store.put_plant(plant("p", "{}")).await.expect("put");
        let ticket = accepted(store, incoming("p", "b", 0, 1)).await;
        accepted(store, incoming("p", "other", 0, 1)).await;
        let reports = [
            report(&ticket, 0, 1.5, "t/h"),
            report(&ticket, 0, -2.5, "kg/s"),
            report(&ticket, 0, 3.5, "t/h"),
        ];
        let of = |place: usize| Arc::new(reports[place].clone());
        let early = store.finish_again(ticket.clone(), of(1), again(0, "too early"));
        assert_eq!(early.await.expect("done"), None);
        let pending = store.batch("p", "b").await.expect("read");
        assert_eq!(pending, Some(Stored::Pending(ticket.clone())));
        assert_eq!(store.versions("p", "b").await.expect("read"), []);
        assert_eq!(store.version("p", "b", 1).await.expect("read"), None);

        let first = store.finish(ticket.clone(), of(0), None).await;
        assert_eq!(first.expect("finished"), Some(vec![]));
        let reasons = [again(5, "F-1 was off"), again(9, "no, it was not")];
        for (place, reason) in [(1, &reasons[0]), (2, &reasons[1])] {
            let made = store.finish_again(ticket.clone(), of(place), reason.clone());
            assert_eq!(made.await.expect("done"), u32::try_from(place + 1).ok());
        }
        let line = |version, again: Option<&Again>, verdict, statistic| VersionLine {
            version,
            again: again.cloned(),
            verdict,
            statistic: Some(statistic),
            body: 1,
        };
        assert_eq!(
            store.versions("p", "b").await.expect("read"),
            [
                line(1, None, Verdict::Consistent, 1.5),
                line(2, Some(&reasons[0]), Verdict::Inconsistent, -2.5),
                line(3, Some(&reasons[1]), Verdict::Consistent, 3.5),
            ]
        );
        for (version, report) in (1..).zip(&reports) {
            let read = store.version("p", "b", version).await.expect("read");
            assert_eq!(read.as_ref(), Some(report), "version {version}");
        }
        for (batch, version) in [("b", 0), ("b", 4), ("other", 1), ("none", 1)] {
            let read = store.version("p", batch, version).await.expect("read");
            assert_eq!(read, None, "{batch} {version}");
        }
        let present = store.batch("p", "b").await.expect("read");
        assert_eq!(present, Some(Stored::Done(Box::new(reports[2].clone()))));
    })
    .await;
}

#[tokio::test]
async fn lists_and_series_show_the_newest_version() {
    on_every_store(async |store| {
        store.put_plant(plant("p", "{}")).await.expect("put");
        let ticket = accepted(store, incoming("p", "b", 0, 1)).await;
        let first = Arc::new(report(&ticket, 0, 1.5, "t/h"));
        store
            .finish(ticket.clone(), first, None)
            .await
            .expect("finished");
        let second = Arc::new(report(&ticket, 0, -2.5, "kg/s"));
        let made = store.finish_again(ticket, second, again(5, "a reason"));
        assert_eq!(made.await.expect("done"), Some(2));
        let query = BatchQuery {
            plant: "p".to_owned(),
            from: None,
            to: None,
            verdict: None,
            after: None,
            limit: 10,
        };
        let page = store.batches(query).await.expect("a page");
        assert_eq!(page.items.len(), 1);
        assert_eq!(page.items[0].verdict, Some(Verdict::Inconsistent));
        assert_eq!(page.items[0].statistic, Some(-2.5));
        let series = SeriesQuery {
            plant: "p".to_owned(),
            selectors: vec![Selector::Tag("F-1".to_owned())],
            field: Field::Measured,
            from: None,
            to: None,
            after: None,
            limit: 10,
        };
        let page = store.series(series).await.expect("a page");
        assert_eq!(page.rows.len(), 1);
        assert_eq!(page.rows[0].verdict, Verdict::Inconsistent);
        assert_eq!(page.columns.len(), 1);
        assert_eq!(page.columns[0].unit.as_deref(), Some("kg/s"));
        assert_eq!(page.columns[0].values, [Some(-2.5)]);
        assert_eq!(store.unfinished(0, 10).await.expect("read"), []);
    })
    .await;
}

#[tokio::test]
async fn a_batch_can_be_read_as_it_came() {
    on_every_store(async |store| {
        store.put_plant(plant("p", "{}")).await.expect("put");
        let ticket = accepted(store, incoming("p", "b", 0, 1)).await;
        for finished in [false, true] {
            if finished {
                let result = Arc::new(report(&ticket, 0, 1.0, "t/h"));
                let done = store.finish(ticket.clone(), result, None).await;
                done.expect("finished");
            }
            let found = store.inbox("p", "b").await.expect("read").expect("a batch");
            assert_eq!(found.ticket, ticket);
            assert_eq!(found.received, NOW);
            assert_eq!(found.body, b"body of b");
        }
        assert_eq!(store.inbox("p", "c").await.expect("read"), None);
        assert_eq!(store.inbox("q", "b").await.expect("read"), None);
    })
    .await;
}

#[tokio::test]
async fn critical_values_go_with_the_revision_that_was_used() {
    on_every_store(async |store| {
        store.put_plant(plant("p", "{}")).await.expect("put");
        let ticket = accepted(store, incoming("p", "b", 0, 1)).await;
        store.put_plant(plant("p", "{\"a\":1}")).await.expect("put");
        let test = |class_set: &str| SingleTest {
            critical_value: 3.2,
            method: "simulated".to_owned(),
            statistics: 7,
            class_set: class_set.to_owned(),
            group_distance: 4.75,
        };
        let with = |revision, class_set: &str| {
            Arc::new(Report {
                revision,
                single_test: Some(test(class_set)),
                ..report(&ticket, 0, 1.0, "t/h")
            })
        };
        let first = store.finish(ticket.clone(), with(1, "all"), None).await;
        first.expect("finished");
        let dropped = store.finish(ticket.clone(), with(1, "dropped"), None).await;
        assert_eq!(dropped.expect("done"), None);
        for (revision, class_set) in [(1, "without F-1"), (2, "all"), (9, "no such revision")] {
            let report = with(revision, class_set);
            let made = store.finish_again(ticket.clone(), report, again(1, "a reason"));
            assert!(made.await.expect("done").is_some());
        }
        let mut kept = store.critical_values("p", 1).await.expect("read");
        kept.sort_by(|a, b| a.class_set.cmp(&b.class_set));
        assert_eq!(kept, [test("all"), test("without F-1")]);
        let second = store.critical_values("p", 2).await.expect("read");
        assert_eq!(second, [test("all")]);
        assert_eq!(store.critical_values("p", 9).await.expect("read"), []);
    })
    .await;
}
