//! Replays: what past batches would be.

use super::{accepted, incoming, on_every_store, plant, report};
use crate::harness::NOW;
use counterpoise::access::{Actor, Deed, DeedKind};
use counterpoise::report::{Report, Verdict};
use counterpoise::store::{NewReplay, ReplayRow, ReplayState, ReplayWith, Store};
use std::sync::Arc;
use time::{Duration, OffsetDateTime};

fn minute(minute: i64) -> OffsetDateTime {
    NOW + Duration::minutes(minute)
}

fn replay(from: i64, to: i64, with: ReplayWith) -> NewReplay {
    NewReplay {
        plant: "p".to_owned(),
        from: minute(from),
        to: minute(to),
        with,
        by: "R. Engineer".to_owned(),
        reason: "a new heater".to_owned(),
        at: minute(100),
        deed: None,
    }
}

fn candidate() -> ReplayWith {
    ReplayWith::Candidate {
        media_type: "application/toml".to_owned(),
        source: "plant = \"p\"".to_owned(),
    }
}

async fn kept(store: &dyn Store, new: NewReplay) -> ReplayRow {
    let row = store.add_replay(new).await.expect("kept");
    row.expect("a plant")
}

/// A batch at a minute with its result.
async fn finished(store: &dyn Store, plant: &str, at: i64) -> Report {
    let ticket = accepted(store, incoming(plant, &format!("b{at}"), at, 1)).await;
    let result = report(&ticket, at, 1.0 + at as f64, "t/h");
    let done = store.finish(ticket, Arc::new(result.clone()), None).await;
    done.expect("finished");
    result
}

async fn unreplayed(store: &dyn Store, id: i64, limit: usize) -> Vec<String> {
    store.unreplayed(id, limit).await.expect("read")
}

/// Plants with batches at minutes 0 to 4, of which that at 3 has no result.
async fn plants(store: &dyn Store) -> Vec<Report> {
    let mut reports = Vec::new();
    for name in ["p", "q"] {
        store.put_plant(plant(name, "{}")).await.expect("put");
        for at in [2, 0, 1, 4] {
            reports.push(finished(store, name, at).await);
        }
        accepted(store, incoming(name, "b3", 3, 1)).await;
    }
    reports
}

#[tokio::test]
async fn a_replay_is_kept_as_it_was_asked_for() {
    on_every_store(async |store| {
        plants(store).await;
        let first = kept(store, replay(1, 4, ReplayWith::Revision(1))).await;
        let expected = ReplayRow {
            id: first.id,
            new: replay(1, 4, ReplayWith::Revision(1)),
            state: ReplayState::Running,
            batches: 2,
            made: 0,
            ended: None,
        };
        assert_eq!(first, expected);
        let second = kept(store, replay(0, 5, candidate())).await;
        assert_eq!((second.new.with.clone(), second.batches), (candidate(), 4));
        let other = kept(
            store,
            NewReplay {
                plant: "q".to_owned(),
                ..replay(0, 1, candidate())
            },
        )
        .await;
        let of_p = store.replays("p", None, 10).await.expect("read");
        assert_eq!(of_p, [second.clone(), first.clone()], "the newest first");
        assert_eq!(store.replays("p", None, 1).await.expect("read"), of_p[..1]);
        let before = store.replays("p", Some(second.id), 10).await.expect("read");
        assert_eq!(before, of_p[1..]);
        assert_eq!(
            store.replay("p", first.id).await.expect("read"),
            Some(first.clone())
        );
        assert_eq!(store.replay("q", first.id).await.expect("read"), None);
        assert_eq!(store.replay("p", 999).await.expect("read"), None);
        let running = store.running_replays().await.expect("read");
        assert_eq!(running, [first, second, other], "of every plant");
        for nothing in [
            NewReplay {
                plant: "r".to_owned(),
                ..replay(0, 1, candidate())
            },
            replay(0, 1, ReplayWith::Revision(2)),
        ] {
            assert_eq!(store.add_replay(nothing).await.expect("done"), None);
        }
    })
    .await;
}

#[tokio::test]
async fn batches_are_made_once_each_in_order_of_time() {
    on_every_store(async |store| {
        let reports = plants(store).await;
        let (id, beside) = (
            kept(store, replay(0, 5, candidate())).await.id,
            kept(store, replay(0, 5, candidate())).await.id,
        );
        assert_eq!(unreplayed(store, id, 10).await, ["b0", "b1", "b2", "b4"]);
        assert_eq!(unreplayed(store, id, 2).await, ["b0", "b1"]);
        let after = |value: f64, at| {
            let ticket = counterpoise::store::Ticket {
                id: 0,
                plant: "p".to_owned(),
                batch: format!("b{at}"),
                revision: 1,
                body: 1,
            };
            Arc::new(report(&ticket, at, value, "kg/s"))
        };
        let add = async |at: i64, value| {
            let added = store.add_replayed(id, &format!("b{at}"), after(value, at));
            added.await.expect("kept");
        };
        add(2, -2.0).await;
        add(0, 7.0).await;
        add(0, 8.0).await;
        for (id, batch) in [(id, "none"), (id, "b9"), (999, "b0")] {
            let nothing = store.add_replayed(id, batch, after(0.0, 0));
            nothing.await.expect("done");
        }
        assert_eq!(unreplayed(store, id, 10).await, ["b1", "b4"]);
        assert_eq!(unreplayed(store, beside, 10).await.len(), 4, "its own");
        let row = store
            .replay("p", id)
            .await
            .expect("read")
            .expect("a replay");
        assert_eq!((row.batches, row.made), (4, 2));

        let page = store.replayed(id, None, 10).await.expect("read");
        assert_eq!(page.next, None);
        let before = |at| {
            let mut of_p = reports.iter().filter(|report| report.plant == "p");
            of_p.find(|report| report.batch == format!("b{at}"))
        };
        assert_eq!(page.items.len(), 2);
        for (item, (at, value)) in page.items.iter().zip([(0, 7.0), (2, -2.0)]) {
            assert_eq!(Some(&*item.before), before(at));
            assert_eq!(
                item.after,
                after(value, at),
                "the first that was made stands"
            );
            assert_eq!(item.line.batch, format!("b{at}"));
            assert_eq!(
                (item.line.start, item.line.end),
                (minute(at), minute(at + 1))
            );
            assert_eq!(item.line.verdict, Some(Verdict::Consistent), "as it stands");
            assert_eq!(item.line.statistic, Some(1.0 + at as f64));
        }
        let first = store.replayed(id, None, 1).await.expect("read");
        assert_eq!(first.items, page.items[..1]);
        let rest = store.replayed(id, first.next, 1).await.expect("read");
        assert_eq!((&rest.items[..], rest.next), (&page.items[1..], None));
        assert_eq!(
            store.replayed(beside, None, 9).await.expect("read").items,
            []
        );
        let stored = store.version("p", "b2", 1).await.expect("read");
        assert_eq!(stored.as_ref(), before(2), "the result is as it was");
    })
    .await;
}

/// A batch that comes by its result while the replay goes on is made too, and
/// never makes the progress more than all.
#[tokio::test]
async fn a_result_that_comes_meanwhile_is_counted() {
    on_every_store(async |store| {
        plants(store).await;
        let id = kept(store, replay(0, 2, candidate())).await.id;
        let late = accepted(store, incoming("p", "late", 1, 1)).await;
        let result = Arc::new(report(&late, 1, 1.0, "t/h"));
        store
            .finish(late, Arc::clone(&result), None)
            .await
            .expect("finished");
        let names = unreplayed(store, id, 10).await;
        assert_eq!(names, ["b0", "b1", "late"]);
        for name in names {
            let made = store.add_replayed(id, &name, Arc::clone(&result));
            made.await.expect("kept");
        }
        let row = store
            .replay("p", id)
            .await
            .expect("read")
            .expect("a replay");
        assert_eq!((row.batches, row.made), (3, 3));
    })
    .await;
}

#[tokio::test]
async fn what_has_ended_stays_as_it_is() {
    on_every_store(async |store| {
        let reports = plants(store).await;
        let id = kept(store, replay(0, 5, candidate())).await.id;
        let result = Arc::new(reports[0].clone());
        let add = async |name| {
            let added = store.add_replayed(id, name, Arc::clone(&result));
            added.await.expect("done");
        };
        add("b0").await;
        let end = async |state, at| {
            let ended = store.end_replay(id, state, minute(at), None).await;
            ended.expect("done").expect("a replay")
        };
        let running = end(ReplayState::Running, 100).await;
        assert_eq!((running.state, running.ended), (ReplayState::Running, None));
        let cancelled = end(ReplayState::Cancelled, 101).await;
        assert_eq!(cancelled.state, ReplayState::Cancelled);
        assert_eq!(cancelled.ended, Some(minute(101)));
        add("b1").await;
        assert_eq!(end(ReplayState::Done, 102).await, cancelled);
        assert_eq!(store.replay("p", id).await.expect("read"), Some(cancelled));
        assert_eq!(unreplayed(store, id, 10).await, [""; 0]);
        let made = store.replayed(id, None, 10).await.expect("read");
        assert_eq!(made.items.len(), 1, "what was made stays");
        assert_eq!(store.running_replays().await.expect("read"), []);
        let none = store.end_replay(999, ReplayState::Done, minute(1), None);
        assert_eq!(none.await.expect("done"), None);
    })
    .await;
}

#[tokio::test]
async fn beginning_and_cancelling_are_in_the_audit_log() {
    on_every_store(async |store| {
        store.put_plant(plant("p", "{}")).await.expect("put");
        let deed = |kind, at| Deed {
            actor: Actor::Local,
            at: minute(at),
            kind,
            plant: Some("p".to_owned()),
            what: serde_json::json!({}),
        };
        let new = NewReplay {
            deed: Some(deed(DeedKind::ReplayStarted, 1)),
            ..replay(0, 5, candidate())
        };
        let id = kept(store, new).await.id;
        for at in [2, 3] {
            let deed = deed(DeedKind::ReplayCancelled, at);
            let ended = store.end_replay(id, ReplayState::Cancelled, minute(at), Some(deed));
            ended.await.expect("done");
            let deed = self::begun(minute(at));
            let begun = store.begin_backfill("p", "a year", minute(at), Some(deed));
            begun.await.expect("done");
        }
        let deeds = store.deeds(None, None, 10).await.expect("read");
        let noted: Vec<_> = deeds
            .iter()
            .map(|row| (row.deed.kind, row.deed.at))
            .collect();
        let expected = [
            (DeedKind::BackfillStarted, minute(2)),
            (DeedKind::ReplayCancelled, minute(2)),
            (DeedKind::ReplayStarted, minute(1)),
        ];
        assert_eq!(noted, expected, "each once");
        assert_eq!(deeds[2].deed.what["id"], id);
    })
    .await;
}

fn begun(at: OffsetDateTime) -> Deed {
    Deed {
        actor: Actor::Service,
        at,
        kind: DeedKind::BackfillStarted,
        plant: Some("p".to_owned()),
        what: serde_json::json!({"name": "a year"}),
    }
}
