//! How far the events of all plants have been handed on.

use super::watch::watched;
use super::{on_every_store, plant};

#[tokio::test]
async fn the_mark_stays_and_never_goes_back() {
    on_every_store(async |store| {
        assert_eq!(store.delivered().await.expect("read"), None);
        assert_eq!(store.newest_event().await.expect("read"), 0);
        for name in ["p", "q"] {
            store.put_plant(plant(name, "{}")).await.expect("put");
        }
        for (name, text) in [("p", "one"), ("q", "two"), ("p", "three")] {
            let ids = store.change_watch(name, watched("{}", &[text])).await;
            assert_eq!(ids.expect("changed").map(|ids| ids.len()), Some(1));
        }
        assert_eq!(store.newest_event().await.expect("read"), 3);
        let all = store.events_of_all(1, 10).await.expect("events");
        let all: Vec<_> = all.iter().map(|e| (e.id, e.json.as_str())).collect();
        assert_eq!(all, [(2, "two"), (3, "three")]);
        assert_eq!(store.events_of_all(0, 2).await.expect("events").len(), 2);
        for (set, kept) in [(2, 2), (3, 3), (1, 3)] {
            store.set_delivered(set).await.expect("kept");
            assert_eq!(store.delivered().await.expect("read"), Some(kept));
        }
    })
    .await;
}
