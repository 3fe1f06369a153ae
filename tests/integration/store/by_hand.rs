//! What people enter: decisions about tags, readings in the field.

use super::{accepted, incoming, on_every_store, plant, report};
use crate::harness::NOW;
use counterpoise::plant::{Action, ByHand};
use counterpoise::store::{
    ByHandRow, Ended, FieldReading, NewByHand, NewFieldReading, Store, StoreError,
};
use std::sync::Arc;
use time::{Duration, OffsetDateTime};

fn hour(hour: i64) -> OffsetDateTime {
    NOW + Duration::hours(hour)
}

fn decision(tag: &str, action: Action, from: i64, until: Option<i64>) -> NewByHand {
    NewByHand {
        tag: tag.to_owned(),
        action,
        from: hour(from),
        until: until.map(hour),
        reason: format!("a reason for {tag}"),
        by: "R. Engineer".to_owned(),
        entered: hour(100),
        deed: None,
    }
}

async fn added(store: &dyn Store, new: NewByHand) -> ByHandRow {
    let row = store.add_by_hand("p", new).await.expect("kept");
    row.expect("a plant")
}

async fn holding(store: &dyn Store, at: OffsetDateTime) -> Vec<String> {
    let rows = store.by_hand("p", Some(at)).await.expect("read");
    rows.into_iter().map(|row| row.decision.tag).collect()
}

#[tokio::test]
async fn decisions_hold_from_and_until() {
    on_every_store(async |store| {
        for name in ["p", "q"] {
            store.put_plant(plant(name, "{}")).await.expect("put");
        }
        let offset = Action::Offset(-(0.1 + 0.2));
        let first = added(store, decision("F-1", offset, 0, Some(2))).await;
        let expected = ByHandRow {
            decision: ByHand {
                id: first.decision.id,
                tag: "F-1".to_owned(),
                action: offset,
                from: hour(0),
                until: Some(hour(2)),
                reason: "a reason for F-1".to_owned(),
                by: "R. Engineer".to_owned(),
            },
            entered: hour(100),
            ended: None,
        };
        assert_eq!(first, expected);
        let second = added(store, decision("F-2", Action::OutOfService, 1, None)).await;
        assert_ne!(second.decision.id, first.decision.id);
        let all = store.by_hand("p", None).await.expect("read");
        assert_eq!(all, [first, second]);
        let a_moment = Duration::nanoseconds(1);
        for (at, tags) in [
            (hour(0) - a_moment, &[][..]),
            (hour(0), &["F-1"]),
            (hour(1), &["F-1", "F-2"]),
            (hour(2) - a_moment, &["F-1", "F-2"]),
            (hour(2), &["F-2"]),
            (hour(100_000), &["F-2"]),
        ] {
            assert_eq!(holding(store, at).await, tags, "{at}");
        }
        assert_eq!(store.by_hand("q", None).await.expect("read"), []);
        let nowhere = store.add_by_hand("r", decision("F-1", offset, 0, None));
        assert_eq!(nowhere.await.expect("done"), None);
        assert_eq!(store.by_hand("r", None).await.expect("read"), []);
    })
    .await;
}

#[tokio::test]
async fn an_end_is_kept_with_who_and_when() {
    on_every_store(async |store| {
        for name in ["p", "q"] {
            store.put_plant(plant(name, "{}")).await.expect("put");
        }
        let other = added(store, decision("F-1", Action::OutOfService, 0, Some(50))).await;
        let row = added(store, decision("F-2", Action::OutOfService, 0, None)).await;
        let id = row.decision.id;
        let mut before = row;
        for (until, by, at) in [(3, "first", 4), (6, "second", 5)] {
            let ended = Ended {
                by: by.to_owned(),
                at: hour(at),
                deed: None,
            };
            let now = store.end_by_hand("p", id, hour(until), ended.clone());
            let now = now.await.expect("kept").expect("a decision");
            assert_eq!(now.ended, Some(ended));
            assert_eq!(now.decision.until, Some(hour(until)));
            assert_eq!(now.entered, before.entered);
            let unended = ByHand {
                until: before.decision.until,
                ..now.decision.clone()
            };
            assert_eq!(unended, before.decision, "nothing else has changed");
            before = now;
        }
        let all = store.by_hand("p", None).await.expect("read");
        assert_eq!(all, [other, before], "the latest end holds");
        assert_eq!(holding(store, hour(5)).await, ["F-1", "F-2"]);
        assert_eq!(holding(store, hour(6)).await, ["F-1"]);
        let ended = Ended {
            by: "nobody".to_owned(),
            at: hour(9),
            deed: None,
        };
        for (plant, id) in [("q", id), ("r", id), ("p", id + 1)] {
            let none = store.end_by_hand(plant, id, hour(1), ended.clone()).await;
            assert_eq!(none.expect("done"), None, "{plant} {id}");
        }
        assert_eq!(store.by_hand("p", None).await.expect("read"), all);
    })
    .await;
}

#[tokio::test]
async fn an_offset_that_is_no_number_is_refused() {
    on_every_store(async |store| {
        store.put_plant(plant("p", "{}")).await.expect("put");
        for offset in [f64::NAN, f64::INFINITY] {
            let new = decision("F-1", Action::Offset(offset), 0, None);
            let refused = store.add_by_hand("p", new).await.expect_err("a refusal");
            assert!(matches!(refused, StoreError::Corrupt(_)), "{refused:?}");
        }
        assert_eq!(store.by_hand("p", None).await.expect("read"), []);
    })
    .await;
}

#[tokio::test]
async fn field_readings_stay_with_their_batch() {
    on_every_store(async |store| {
        store.put_plant(plant("p", "{}")).await.expect("put");
        let ticket = accepted(store, incoming("p", "b", 0, 1)).await;
        accepted(store, incoming("p", "c", 0, 1)).await;
        let result = Arc::new(report(&ticket, 0, 1.0, "t/h"));
        store.finish(ticket, result, None).await.expect("finished");
        let new = |json: &str, at| NewFieldReading {
            json: json.to_owned(),
            by: "R. Fitter".to_owned(),
            at: hour(at),
            deed: None,
        };
        let mut expected = Vec::new();
        for (json, at) in [("{\"value\":3.1}", 2), ("{\"value\":3.2}", 1)] {
            let id = store.add_field_reading("p", "b", new(json, at)).await;
            expected.push(FieldReading {
                id: id.expect("kept").expect("a batch"),
                json: json.to_owned(),
                by: "R. Fitter".to_owned(),
                at: hour(at),
            });
        }
        assert!(expected[0].id < expected[1].id);
        let read = store.field_readings("p", "b").await.expect("read");
        assert_eq!(read, expected, "in the order of entering");
        for (plant, batch) in [("p", "none"), ("q", "b")] {
            let none = store.add_field_reading(plant, batch, new("{}", 1)).await;
            assert_eq!(none.expect("done"), None);
        }
        assert_eq!(store.field_readings("p", "c").await.expect("read"), []);
    })
    .await;
}
