//! The watch over a plant: kept with the result that changed it or not at all,
//! and in the order of the calls.

use super::{accepted, incoming, on_every_store, plant, report};
use counterpoise::store::{AccusationRow, NewEvent, Store, Stored, StoredEvent, Watched};
use std::sync::Arc;

pub(super) fn watched(watch: &str, events: &[&str]) -> Watched {
    Watched {
        watch: watch.to_owned(),
        events: (1..)
            .zip(events)
            .map(|(alarm, json)| NewEvent {
                alarm,
                json: (*json).to_owned(),
            })
            .collect(),
        accusations: vec![],
        deed: None,
    }
}

pub(super) fn accusation(id: u64, open: bool, json: &str) -> AccusationRow {
    AccusationRow {
        id,
        open,
        json: json.to_owned(),
    }
}

async fn events(store: &dyn Store, plant: &str) -> Vec<StoredEvent> {
    store.events(plant, 0, 1000).await.expect("events")
}

fn texts(events: &[StoredEvent]) -> Vec<&str> {
    events.iter().map(|event| event.json.as_str()).collect()
}

#[tokio::test]
async fn a_result_and_its_look_stand_or_fall_together() {
    on_every_store(async |store| {
        store.put_plant(plant("p", "{}")).await.expect("put");
        assert_eq!(store.watch("p").await.expect("read"), None);
        let ticket = accepted(store, incoming("p", "b", 0, 1)).await;
        let first = Arc::new(report(&ticket, 0, 1.0, "t/h"));
        let look = Watched {
            accusations: vec![accusation(1, true, "{\"of\":\"F-1\"}")],
            ..watched("{\"first\":\"\u{b0}\"}", &["one", "two"])
        };
        let ids = store
            .finish(ticket.clone(), Arc::clone(&first), Some(look))
            .await
            .expect("finished")
            .expect("the first result");
        assert_eq!(ids.len(), 2);
        let kept = async || {
            (
                store.watch("p").await.expect("read"),
                events(store, "p").await,
                store.accusation("p", 1).await.expect("read"),
            )
        };
        let before = kept().await;
        assert_eq!(before.0.as_deref(), Some("{\"first\":\"\u{b0}\"}"));
        assert_eq!(texts(&before.1), ["one", "two"]);
        assert_eq!(before.1.iter().map(|e| e.id).collect::<Vec<_>>(), ids);
        assert_eq!(before.2, Some(accusation(1, true, "{\"of\":\"F-1\"}")));

        let look = Watched {
            accusations: vec![accusation(1, false, "{}"), accusation(2, true, "{}")],
            ..watched("{\"second\":1}", &["three"])
        };
        let other = Arc::new(report(&ticket, 0, 7.0, "t/h"));
        let second = store.finish(ticket, other, Some(look)).await;
        assert_eq!(second.expect("done"), None);
        assert_eq!(kept().await, before, "all of the second is dropped");
        assert_eq!(store.accusation("p", 2).await.expect("read"), None);
        let read = store.batch("p", "b").await.expect("read");
        assert_eq!(read, Some(Stored::Done(Box::new((*first).clone()))));
    })
    .await;
}

#[tokio::test]
async fn events_have_one_sequence_over_all_plants() {
    on_every_store(async |store| {
        for name in ["p", "q"] {
            store.put_plant(plant(name, "{}")).await.expect("put");
        }
        let mut ids = Vec::new();
        for (name, told) in [
            ("p", &["p1", "p2"][..]),
            ("q", &["q1"]),
            ("p", &[]),
            ("p", &["p3"]),
        ] {
            let given = store.change_watch(name, watched("{}", told)).await;
            ids.extend(given.expect("kept").expect("a plant"));
        }
        assert_eq!(ids.len(), 4);
        assert!(ids[0] > 0 && ids.is_sorted_by(|a, b| a < b), "{ids:?}");
        let of_p = events(store, "p").await;
        assert_eq!(texts(&of_p), ["p1", "p2", "p3"]);
        assert_eq!(texts(&events(store, "q").await), ["q1"]);
        let page = store.events("p", of_p[0].id, 1).await.expect("read");
        assert_eq!(page, of_p[1..2]);
        let after_q = store.events("p", ids[2], 10).await.expect("read");
        assert_eq!(texts(&after_q), ["p3"], "a number of another plant's event");

        let nowhere = store.change_watch("r", watched("{}", &["x"])).await;
        assert_eq!(nowhere.expect("done"), None);
        assert_eq!(events(store, "r").await, []);
        assert_eq!(store.watch("r").await.expect("read"), None);
    })
    .await;
}

#[tokio::test]
async fn accusations_are_listed_open_or_closed() {
    on_every_store(async |store| {
        for name in ["p", "q"] {
            store.put_plant(plant(name, "{}")).await.expect("put");
        }
        let keep = async |name: &str, accusations: Vec<AccusationRow>| {
            let look = Watched {
                accusations,
                ..watched("{}", &[])
            };
            let kept = store.change_watch(name, look).await.expect("kept");
            assert_eq!(kept, Some(vec![]));
        };
        let rows = (1..=4).map(|id| accusation(id, true, "a")).collect();
        keep("p", rows).await;
        keep("q", vec![accusation(1, true, "q")]).await;
        keep(
            "p",
            vec![accusation(2, false, "b"), accusation(3, true, "c")],
        )
        .await;
        let list = async |open, after, limit| {
            let rows = store.accusations("p", open, after, limit).await;
            let rows = rows.expect("read").into_iter();
            rows.map(|row| (row.id, row.open, row.json))
                .collect::<Vec<_>>()
        };
        let row = |id: u64, open: bool, json: &str| (id, open, json.to_owned());
        let all = [
            row(1, true, "a"),
            row(2, false, "b"),
            row(3, true, "c"),
            row(4, true, "a"),
        ];
        assert_eq!(list(None, 0, 10).await, all);
        assert_eq!(list(None, 1, 2).await, all[1..3]);
        assert_eq!(list(Some(false), 0, 10).await, all[1..2]);
        assert_eq!(list(Some(true), 1, 1).await, all[2..3]);
        assert_eq!(list(None, u64::MAX, 10).await, []);
        let one = store.accusation("q", 1).await.expect("read");
        assert_eq!(one, Some(accusation(1, true, "q")));
        assert_eq!(store.accusation("q", 2).await.expect("read"), None);
        assert_eq!(store.accusation("q", u64::MAX).await.expect("read"), None);
    })
    .await;
}

/// A report that takes long to be made ready beside changes that need no time,
/// all called before anything is awaited, and awaited backwards.
#[tokio::test]
async fn the_order_is_that_of_the_calls() {
    on_every_store(async |store| {
        store.put_plant(plant("p", "{}")).await.expect("put");
        let ticket = accepted(store, incoming("p", "long", 0, 1)).await;
        let mut long = report(&ticket, 0, 1.0, "t/h");
        let tag = long.tags["F-1"].clone();
        for number in 0..5_000 {
            long.tags.insert(format!("F-{number}"), tag.clone());
        }
        let long = Arc::new(long);
        let mut called = vec![
            store.change_watch("p", watched("0", &["event 0"])),
            store.finish(ticket, long, Some(watched("1", &["event 1"]))),
        ];
        for number in 2..30 {
            let event = format!("event {number}");
            called.push(store.change_watch("p", watched(&number.to_string(), &[&event])));
        }
        let mut ids = Vec::new();
        while let Some(last) = called.pop() {
            ids.extend(last.await.expect("kept").expect("done"));
        }
        ids.reverse();
        assert_eq!(ids.len(), 30);
        assert!(ids.is_sorted_by(|a, b| a < b), "{ids:?}");
        let told = events(store, "p").await;
        let expected: Vec<String> = (0..30).map(|number| format!("event {number}")).collect();
        assert_eq!(texts(&told), expected);
        let watch = store.watch("p").await.expect("read");
        assert_eq!(watch.as_deref(), Some("29"), "the last call's");
    })
    .await;
}

#[tokio::test]
async fn what_was_called_is_done_though_nobody_waits() {
    on_every_store(async |store| {
        store.put_plant(plant("p", "{}")).await.expect("put");
        let ticket = accepted(store, incoming("p", "b", 0, 1)).await;
        let result = Arc::new(report(&ticket, 0, 1.0, "t/h"));
        drop(store.finish(ticket, result, Some(watched("left", &["left"]))));
        // It stands behind the call before.
        let next = store.change_watch("p", watched("next", &["next"])).await;
        assert!(next.expect("kept").is_some());
        assert_eq!(texts(&events(store, "p").await), ["left", "next"]);
        let read = store.batch("p", "b").await.expect("read");
        assert!(matches!(read, Some(Stored::Done(_))), "{read:?}");
    })
    .await;
}
