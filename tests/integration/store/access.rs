//! Tokens and the audit log.

use super::{on_every_store, plant};
use crate::harness::NOW;
use counterpoise::access::{Actor, Deed, DeedKind, Rate, Scope};
use counterpoise::store::{
    AccessStore, NewPlant, NewToken, SqliteOptions, SqliteStore, Store, StoreError,
};
use serde_json::json;
use time::Duration;

fn new(name: &str, digest: u8) -> NewToken {
    NewToken {
        name: name.to_owned(),
        digest: [digest; 32],
        scopes: [Scope::Send, Scope::Operate].into_iter().collect(),
        plants: Some(vec!["p".to_owned(), "a \"name\", and another".to_owned()]),
        expires: Some(NOW + Duration::hours(1)),
        rate: Some(Rate::new(0.5).expect("a rate")),
    }
}

fn deed(kind: DeedKind, plant: Option<&str>) -> Deed {
    Deed {
        actor: Actor::Token {
            id: 7,
            name: "desk".to_owned(),
        },
        at: NOW,
        kind,
        plant: plant.map(str::to_owned),
        what: json!({"why": "a reason", "half": 0.5}),
    }
}

fn made() -> Deed {
    deed(DeedKind::TokenMade, None)
}

#[tokio::test]
async fn tokens_are_kept_as_they_were_made() {
    on_every_store(async |store| {
        let version = async || store.tokens_version().await.expect("read");
        assert_eq!(store.tokens().await.expect("read"), []);
        let before = version().await;
        let row = store.add_token(new("one", 1), made()).await.expect("kept");
        let row = row.expect("a new name");
        assert_eq!(row.token, new("one", 1));
        assert_eq!((row.made, row.revoked, row.last_used), (NOW, None, None));
        let after = version().await;
        assert!(after > before);
        let plain = NewToken {
            plants: None,
            expires: None,
            rate: None,
            ..new("two", 2)
        };
        let two = store.add_token(plain.clone(), made()).await.expect("kept");
        let two = two.expect("a new name");
        assert_eq!(two.token, plain);
        // The name is taken, or the token is known.
        for taken in [new("one", 3), new("three", 1)] {
            let none = store.add_token(taken, made()).await.expect("done");
            assert_eq!(none, None);
        }
        assert_eq!(store.tokens().await.expect("read"), [row, two]);
        assert_eq!(store.deeds(None, None, 9).await.expect("read").len(), 2);
    })
    .await;
}

#[tokio::test]
async fn a_revoked_token_stays_and_frees_its_name() {
    on_every_store(async |store| {
        let first = store.add_token(new("one", 1), made()).await.expect("kept");
        let first = first.expect("a new name");
        let version = store.tokens_version().await.expect("read");
        let revoke = || store.revoke_token("one", deed(DeedKind::TokenRevoked, None));
        let revoked = revoke().await.expect("kept").expect("a token");
        assert_eq!(revoked.revoked, Some(NOW));
        assert_eq!(revoked.token, first.token);
        assert!(store.tokens_version().await.expect("read") > version);
        assert_eq!(revoke().await.expect("done"), None, "once");
        let again = store.add_token(new("one", 2), made()).await.expect("kept");
        let again = again.expect("the name is free");
        assert_ne!(again.id, first.id);
        assert_eq!(store.tokens().await.expect("read"), [revoked, again]);
        let kinds = store.deeds(None, None, 9).await.expect("read");
        let kinds: Vec<_> = kinds
            .iter()
            .map(|row| (row.deed.kind, row.deed.what["id"].clone()))
            .collect();
        let expected = [
            (DeedKind::TokenMade, json!(2)),
            (DeedKind::TokenRevoked, json!(1)),
            (DeedKind::TokenMade, json!(1)),
        ];
        assert_eq!(kinds, expected);
    })
    .await;
}

#[tokio::test]
async fn a_use_is_no_change_and_never_goes_back() {
    on_every_store(async |store| {
        let row = store.add_token(new("one", 1), made()).await.expect("kept");
        let id = row.expect("a new name").id;
        let version = store.tokens_version().await.expect("read");
        for (minutes, kept) in [(1, 1), (3, 3), (2, 3)] {
            let at = NOW + Duration::minutes(minutes);
            store.token_used(id, at).await.expect("kept");
            let row = &store.tokens().await.expect("read")[0];
            assert_eq!(row.last_used, Some(NOW + Duration::minutes(kept)));
        }
        store.token_used(id + 1, NOW).await.expect("of none");
        assert_eq!(store.tokens_version().await.expect("read"), version);
        assert_eq!(store.tokens().await.expect("read").len(), 1);
    })
    .await;
}

#[tokio::test]
async fn deeds_come_back_the_newest_first() {
    on_every_store(async |store| {
        for name in ["p", "q", "p", "r", "p"] {
            let content = format!(
                "{{\"n\":{}}}",
                store.deeds(None, None, 99).await.expect("read").len()
            );
            let put = NewPlant {
                deed: Some(deed(DeedKind::PlantPut, Some(name))),
                ..plant(name, &content)
            };
            store.put_plant(put).await.expect("put");
        }
        store.add_token(new("one", 1), made()).await.expect("kept");
        let all = store.deeds(None, None, 99).await.expect("read");
        let ids: Vec<i64> = all.iter().map(|row| row.id).collect();
        assert!(ids.is_sorted_by(|a, b| a > b), "{ids:?}");
        assert_eq!(all.len(), 6);
        let what = &all[1].deed.what;
        assert_eq!(
            (&what["revision"], &what["why"], &what["half"]),
            (&json!(3), &json!("a reason"), &json!(0.5))
        );
        let expected = deed(DeedKind::PlantPut, Some("p"));
        assert_eq!((&all[1].deed.actor, all[1].deed.at), (&expected.actor, NOW));
        let of = async |names: &[&str], before, limit| -> Vec<i64> {
            let names: Vec<String> = names.iter().map(|&name| name.to_owned()).collect();
            let rows = store
                .deeds(Some(&names), before, limit)
                .await
                .expect("read");
            rows.iter().map(|row| row.id).collect()
        };
        assert_eq!(of(&["p"], None, 2).await, [ids[1], ids[3]]);
        assert_eq!(of(&["p"], Some(ids[3]), 2).await, [ids[5]]);
        assert_eq!(of(&["q", "r"], None, 9).await, [ids[2], ids[4]]);
        assert_eq!(of(&[], None, 9).await, Vec::<i64>::new());
        assert_eq!(of(&["s"], None, 9).await, Vec::<i64>::new());
    })
    .await;
}

/// The service has the file open while the command line works on it.
#[tokio::test]
async fn another_program_works_beside_it() {
    let directory = tempfile::tempdir().expect("a directory");
    let options = SqliteOptions::new(directory.path().join("test.sqlite"));
    let nothing = SqliteStore::open_beside(options.clone(), false).await;
    assert!(matches!(nothing.err(), Some(StoreError::Unavailable(_))));
    let made_beside = SqliteStore::open_beside(options.clone(), true)
        .await
        .expect("made");
    made_beside.close().await.expect("closed");
    let store = SqliteStore::open(options.clone()).await.expect("a store");
    let other = SqliteStore::open_beside(options, false)
        .await
        .expect("opened");
    let version = store.tokens_version().await.expect("read");
    other.add_token(new("one", 1), made()).await.expect("kept");
    assert!(store.tokens_version().await.expect("read") > version);
    assert_eq!(store.tokens().await.expect("read").len(), 1);
    store.put_plant(plant("p", "{}")).await.expect("put");
    other.close().await.expect("closed");
    store.put_plant(plant("q", "{}")).await.expect("put");
    store.close().await.expect("closed");
}
