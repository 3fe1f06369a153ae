//! What holds for every store.

mod access;
mod again;
mod bodies;
mod by_hand;
mod delivered;
mod file;
mod history;
mod old;
mod readings;
mod readings_file;
mod readings_model;
mod replays;
mod watch;

use crate::harness::NOW;
use counterpoise::report::{
    Class, GlobalTest, Observability, QuantityReport, Report, SingleTest, StreamReport, TagReport,
    Verdict,
};
use counterpoise::store::{
    Acceptance, BatchQuery, Field, Incoming, NewPlant, Precondition, PutOutcome, Selector,
    SeriesQuery, SqliteOptions, SqliteStore, Store, Stored, Ticket,
};
use std::sync::Arc;

async fn sqlite() -> (tempfile::TempDir, SqliteStore) {
    let directory = tempfile::tempdir().expect("a directory");
    let options = SqliteOptions::new(directory.path().join("test.sqlite"));
    (
        directory,
        SqliteStore::open(options).await.expect("a store"),
    )
}

/// Runs a check on every kind of store there is.
async fn on_every_store(check: impl AsyncFn(&dyn Store)) {
    let (_directory, store) = sqlite().await;
    check(&store).await;
    store.close().await.expect("closed");
}

fn plant(name: &str, content: &str) -> NewPlant {
    NewPlant {
        name: name.to_owned(),
        title: format!("Title of {name}"),
        media_type: "application/json".to_owned(),
        source: content.to_owned(),
        canonical: content.to_owned(),
        received: NOW,
        precondition: Precondition::Any,
        deed: None,
    }
}

pub fn incoming(plant: &str, batch: &str, minute: i64, digest: u8) -> Incoming {
    Incoming {
        plant: plant.to_owned(),
        batch: batch.to_owned(),
        digest: [digest; 32],
        start: NOW + time::Duration::minutes(minute),
        end: NOW + time::Duration::minutes(minute + 1),
        received: NOW,
        body: format!("body of {batch}").into_bytes(),
    }
}

fn quantity(value: f64, unit: &str) -> QuantityReport {
    QuantityReport {
        value: Some(value),
        uncertainty: Some(value / 100.0),
        unit: unit.to_owned(),
        class: Observability::Observable,
    }
}

fn report(ticket: &Ticket, minute: i64, value: f64, unit: &str) -> Report {
    let tag = TagReport {
        measured: Some(value),
        reconciled: Some(value + 0.1),
        adjustment: Some(0.1),
        unit: unit.to_owned(),
        uncertainty_measured: Some(1.0),
        uncertainty_reconciled: None,
        redundancy: Some(0.25),
        standardised_adjustment: Some(1.0 / 3.0),
        detectable: Some(5e-324),
        class: Class::Redundant,
        reason: None,
        averaged: None,
    };
    let stream = StreamReport {
        mass_flow: quantity(value, "kg/s"),
        pressure: quantity(5.0, "bar"),
        temperature: QuantityReport {
            value: None,
            ..quantity(20.0, "Cel")
        },
        enthalpy: quantity(84.0, "kJ/kg"),
        phase: None,
    };
    Report {
        plant: ticket.plant.clone(),
        revision: ticket.revision,
        batch: ticket.batch.clone(),
        start: NOW + time::Duration::minutes(minute),
        end: NOW + time::Duration::minutes(minute + 1),
        verdict: if value > 0.0 {
            Verdict::Consistent
        } else {
            Verdict::Inconsistent
        },
        reason: None,
        global_test: Some(GlobalTest {
            statistic: value,
            degrees_of_freedom: 2,
            critical_value: Some(5.991),
            p_value: Some(0.1),
            confidence: 0.95,
        }),
        single_test: None,
        tags: [("F-1".to_owned(), tag)].into_iter().collect(),
        assumptions: Default::default(),
        streams: [("first".to_owned(), stream)].into_iter().collect(),
        equipment: Default::default(),
        suspects: vec![],
        suspects_remarks: vec![],
        after_suspects: None,
        limits: vec![],
        by_hand: vec![],
        ignored_tags: vec![],
        remarks: vec![],
        line_up: None,
        findings: Vec::new(),
        steadiness: None,
    }
}

pub async fn accepted(store: &dyn Store, incoming: Incoming) -> Ticket {
    match store.accept(incoming).await.expect("accepted") {
        Acceptance::New(ticket) => ticket,
        other => panic!("{other:?}"),
    }
}

#[tokio::test]
async fn the_first_critical_value_of_a_class_set_stands() {
    on_every_store(async |store| {
        store.put_plant(plant("p", "{}")).await.expect("put");
        let test = |class_set: &str, critical_value| SingleTest {
            critical_value,
            method: "simulated".to_owned(),
            statistics: 7,
            class_set: class_set.to_owned(),
            group_distance: 2.5,
        };
        let told = [test("one", 3.1), test("one", 3.2), test("two", 3.3)];
        for (minute, told) in (0..).zip(told) {
            let name = format!("batch {minute}");
            let ticket = accepted(store, incoming("p", &name, minute, 1)).await;
            let report = Report {
                single_test: Some(told),
                ..report(&ticket, minute, 1.0, "kg/s")
            };
            store
                .finish(ticket, Arc::new(report), None)
                .await
                .expect("finished");
        }
        let mut kept = store.critical_values("p", 1).await.expect("read");
        kept.sort_by(|a, b| a.class_set.cmp(&b.class_set));
        assert_eq!(kept, [test("one", 3.1), test("two", 3.3)]);
        assert_eq!(store.critical_values("p", 2).await.expect("read"), []);
    })
    .await;
}

#[tokio::test]
async fn revisions_are_counted_and_kept() {
    on_every_store(async |store| {
        let PutOutcome::Created(first) = store.put_plant(plant("p", "{}")).await.expect("put")
        else {
            panic!("not created");
        };
        assert_eq!(first.revision, 1);
        let again = store.put_plant(plant("p", "{}")).await.expect("put");
        assert_eq!(again, PutOutcome::Unchanged(first.clone()));
        let second = store.put_plant(plant("p", "{\"a\":1}")).await.expect("put");
        assert!(
            matches!(&second, PutOutcome::Created(p) if p.revision == 2),
            "{second:?}"
        );
        let back = store.put_plant(plant("p", "{}")).await.expect("put");
        assert!(
            matches!(&back, PutOutcome::Created(p) if p.revision == 3),
            "{back:?}"
        );
        assert_eq!(store.plant("p", Some(1)).await.expect("read"), Some(first));
        assert_eq!(
            store
                .plant("p", None)
                .await
                .expect("read")
                .map(|p| p.revision),
            Some(3)
        );
        assert_eq!(store.plant("p", Some(4)).await.expect("read"), None);
        assert_eq!(store.plant("q", None).await.expect("read"), None);
        let guarded = |precondition| {
            store.put_plant(NewPlant {
                precondition,
                ..plant("p", "{\"b\":1}")
            })
        };
        for precondition in [
            Precondition::Absent,
            Precondition::OneOf(vec![(2, String::new()), (3, "zz".to_owned())]),
            Precondition::NoneOf(vec![(3, String::new())]),
        ] {
            let outcome = guarded(precondition).await.expect("put");
            assert_eq!(outcome, PutOutcome::PreconditionFailed);
        }
        store.put_plant(plant("a", "{}")).await.expect("put");
        let lines = store.plants(None, 10).await.expect("a list");
        assert_eq!(
            lines.iter().map(|l| l.name.as_str()).collect::<Vec<_>>(),
            ["a", "p"]
        );
        assert_eq!(lines[1].revision, 3);
        let after = store.plants(Some("a"), 10).await.expect("a list");
        assert_eq!(after.len(), 1);
    })
    .await;
}

#[tokio::test]
async fn a_name_is_one_batch() {
    on_every_store(async |store| {
        assert_eq!(
            store.accept(incoming("p", "b", 0, 1)).await.expect("ok"),
            Acceptance::NoPlant
        );
        for name in ["p", "q"] {
            store.put_plant(plant(name, "{}")).await.expect("put");
        }
        let ticket = accepted(store, incoming("p", "b", 0, 1)).await;
        store.put_plant(plant("p", "{\"a\":1}")).await.expect("put");
        let known = store.accept(incoming("p", "b", 0, 1)).await.expect("ok");
        assert_eq!(
            known,
            Acceptance::Known(ticket.clone()),
            "with the revision of its time"
        );
        assert_eq!(
            store.accept(incoming("p", "b", 0, 2)).await.expect("ok"),
            Acceptance::Conflict
        );
        accepted(store, incoming("q", "b", 0, 2)).await;
        let pending = store.batch("p", "b").await.expect("read");
        assert_eq!(pending, Some(Stored::Pending(ticket)));
    })
    .await;
}

#[tokio::test]
async fn many_at_once_are_one() {
    on_every_store(async |store| {
        store.put_plant(plant("p", "{}")).await.expect("put");
        let all = (0..64).map(|_| store.accept(incoming("p", "b", 0, 1)));
        let outcomes = futures::future::join_all(all).await;
        let new = outcomes
            .iter()
            .filter(|o| matches!(o, Ok(Acceptance::New(_))))
            .count();
        let known = outcomes
            .iter()
            .filter(|o| matches!(o, Ok(Acceptance::Known(_))))
            .count();
        assert_eq!((new, known), (1, 63));
    })
    .await;
}

#[tokio::test]
async fn results_come_back_bit_for_bit() {
    on_every_store(async |store| {
        store.put_plant(plant("p", "{}")).await.expect("put");
        let ticket = accepted(store, incoming("p", "b", 0, 1)).await;
        let unfinished = store.unfinished(0, 10).await.expect("read");
        assert_eq!(unfinished.len(), 1);
        assert_eq!(unfinished[0].ticket, ticket);
        assert_eq!(unfinished[0].body, b"body of b");
        assert_eq!(unfinished[0].received, NOW);
        let first = Arc::new(report(&ticket, 0, 0.1 + 0.2, "t/h"));
        store
            .finish(ticket.clone(), Arc::clone(&first), None)
            .await
            .expect("finished");
        let other = Arc::new(report(&ticket, 0, 7.0, "t/h"));
        let second = store.finish(ticket, other, None).await.expect("finished");
        assert_eq!(second, None);
        let read = store.batch("p", "b").await.expect("read");
        assert_eq!(
            read,
            Some(Stored::Done(Box::new((*first).clone()))),
            "the first result stays"
        );
        assert_eq!(store.unfinished(0, 10).await.expect("read"), vec![]);
    })
    .await;
}

#[tokio::test]
async fn lists_and_series_go_by_time() {
    on_every_store(async |store| {
        store.put_plant(plant("p", "{}")).await.expect("put");
        for (minute, value, unit) in [
            (3, 3.0, "t/h"),
            (1, -1.0, "t/h"),
            (2, 2.0, "kg/s"),
            (4, 4.0, "t/h"),
        ] {
            let ticket = accepted(store, incoming("p", &format!("b{minute}"), minute, 1)).await;
            if minute != 4 {
                let report = Arc::new(report(&ticket, minute, value, unit));
                store.finish(ticket, report, None).await.expect("finished");
            }
        }
        let query = |verdict, limit, after| BatchQuery {
            plant: "p".to_owned(),
            from: None,
            to: None,
            verdict,
            after,
            limit,
        };
        let first = store.batches(query(None, 3, None)).await.expect("a page");
        let names = |items: &[counterpoise::store::BatchLine]| {
            items
                .iter()
                .map(|line| line.batch.clone())
                .collect::<Vec<_>>()
        };
        assert_eq!(names(&first.items), ["b4", "b3", "b2"]);
        assert_eq!(first.items[0].verdict, None);
        assert_eq!(first.items[1].statistic, Some(3.0));
        assert_eq!(first.items[1].degrees_of_freedom, Some(2));
        let second = store
            .batches(query(None, 3, first.next))
            .await
            .expect("a page");
        assert_eq!(names(&second.items), ["b1"]);
        assert_eq!(second.next, None);
        let bad = store
            .batches(query(Some(Verdict::Inconsistent), 3, None))
            .await
            .expect("a page");
        assert_eq!(names(&bad.items), ["b1"]);

        let series = |limit, after| SeriesQuery {
            plant: "p".to_owned(),
            selectors: vec![
                Selector::Tag("F-1".to_owned()),
                Selector::Quantity("first.temperature".to_owned()),
                Selector::Tag("F-2".to_owned()),
            ],
            field: Field::Reconciled,
            from: Some(NOW),
            to: None,
            after,
            limit,
        };
        let page = store.series(series(2, None)).await.expect("a page");
        assert_eq!(
            page.rows
                .iter()
                .map(|r| r.batch.as_str())
                .collect::<Vec<_>>(),
            ["b1", "b2"]
        );
        let columns: Vec<_> = page
            .columns
            .iter()
            .map(|c| (c.unit.as_deref(), c.values.clone()))
            .collect();
        assert_eq!(
            columns,
            [
                (Some("t/h"), vec![Some(-0.9), None]),
                (Some("kg/s"), vec![None, Some(2.1)]),
                (Some("Cel"), vec![None, None]),
                (None, vec![None, None]),
            ]
        );
        let rest = store.series(series(2, page.next)).await.expect("a page");
        assert_eq!(
            rest.rows.len(),
            1,
            "a batch without a result has no numbers"
        );
        assert_eq!(rest.columns[0].values, [Some(3.1)]);
        assert_eq!(rest.next, None);
    })
    .await;
}
