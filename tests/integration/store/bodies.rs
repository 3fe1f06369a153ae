//! Periods that become batches, and what late samples make of them.

use super::readings::{added, closed, open, open_minutes, sample, samples, tag};
use super::{accepted, incoming, on_every_store, plant, report};
use crate::harness::NOW;
use counterpoise::store::{Acceptance, Again, Closed, OpenPeriod, Store, Stored, Ticket};
use std::sync::Arc;
use time::Duration;

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
