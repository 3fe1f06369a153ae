//! Replays: another revision beside what stands, never in its place.

use crate::harness::{PLANT, Service, Setup, batch, contents, problem};
use crate::readings::{on, until};
use counterpoise::store::{ReplaysStore, Store};
use reqwest::StatusCode;
use serde_json::{Value, json};

const REPLAYS: &str = "/v1/plants/mixer/replays";

fn asked(with: (&str, Value)) -> Value {
    let mut body = json!({
        "from": "2031-04-02T10:00:00Z",
        "to": "2031-04-02T11:00:00Z",
        "by": "R. Moss",
        "reason": "a trial",
    });
    body[with.0] = with.1;
    body
}

async fn started(service: &Service, with: (&str, Value)) -> i64 {
    let answer = service.post_json(REPLAYS, &asked(with)).await;
    assert_eq!(
        answer.status(),
        StatusCode::ACCEPTED,
        "{:?}",
        answer.text().await
    );
    let location = answer.headers()["location"]
        .to_str()
        .expect("text")
        .to_owned();
    let replay: Value = answer.json().await.expect("JSON");
    let id = replay["id"].as_i64().expect("a number");
    assert_eq!(location, format!("{REPLAYS}/{id}"));
    id
}

async fn done(service: &Service, id: i64) -> Value {
    until("a replay", async || {
        let replay = service.get_json(&format!("{REPLAYS}/{id}")).await;
        (replay["state"] != "running").then_some(replay)
    })
    .await
}

/// So many batches, every third of them off balance.
async fn day(service: &Service, batches: u32) {
    let lines: Vec<String> = (0..batches)
        .map(|n| {
            batch(
                &format!("b{n:02}"),
                n,
                if n % 3 == 0 { 156.0 } else { 150.2 },
            )
        })
        .collect();
    let answer = service.post("application/x-ndjson", lines.join("\n")).await;
    let answers = answer.text().await.expect("text");
    assert_eq!(
        answers
            .lines()
            .filter(|line| line.contains("\"verdict\""))
            .count(),
        lines.len()
    );
}

/// Twice as uncertain flows.
fn wider() -> String {
    PLANT.replace("of-reading = \"1 %\"", "of-reading = \"3 %\"")
}

/// What replays may not touch.
async fn standing(service: &Service) -> Vec<String> {
    let mut rows = contents(&service.database).await;
    rows.retain(|row| !row.starts_with("replay") && !row.starts_with("deeds"));
    rows
}

/// With the revision that made them, with decisions by hand and field readings
/// as they were then, reports come out bit for bit; whatever was decided since.
// The store that the test reads gives its connection back on another thread.
#[tokio::test(flavor = "multi_thread", worker_threads = 1)]
async fn under_its_own_revision_a_report_comes_out_bit_for_bit() {
    let service = Service::with_plant().await;
    let decision = json!({"tag": "F-1", "action": "offset", "offset": 0.4, "from": "2031-04-02T10:10:00Z", "reason": "calibrated", "by": "R. Moss"});
    let decided = service.done("/v1/plants/mixer/by-hand", &decision).await;
    day(&service, 24).await;
    let field = json!({"by": "R. Moss", "at": "2031-04-02T10:03:10Z", "readings": [
        {"measures": "temperature", "of": "both", "value": 40.1, "unit": "Cel", "uncertainty": {"absolute": "0.5 K"}}
    ]});
    service
        .done("/v1/plants/mixer/batches/b03/field-readings", &field)
        .await;
    let end = format!("/v1/plants/mixer/by-hand/{}/end", decided["id"]);
    service
        .done(
            &end,
            &json!({"by": "R. Moss", "until": "2031-04-02T10:15:00Z"}),
        )
        .await;
    let before = standing(&service).await;
    let id = started(&service, ("revision", json!(1))).await;
    let replay = done(&service, id).await;
    assert_eq!(replay["state"], "done");
    assert_eq!(
        (&replay["batches"], &replay["made"]),
        (&json!(24), &json!(24))
    );
    let page = service.store.replayed(id, None, 100).await.expect("a page");
    assert_eq!(page.items.len(), 24);
    for replayed in &page.items {
        assert_eq!(replayed.before, replayed.after, "{}", replayed.line.batch);
    }
    assert!(
        page.items
            .iter()
            .any(|replayed| !replayed.after.by_hand.is_empty())
    );
    assert!(page.items[3].after.tags.contains_key("field-1"));
    let compared = service
        .get_json(&format!("{REPLAYS}/{id}/comparison"))
        .await;
    let compared = &compared["comparison"];
    assert_eq!(compared["batches"], 24);
    assert_eq!(
        (&compared["moved"], &compared["largest"]),
        (&json!([]), &json!([]))
    );
    for change in compared["verdicts"].as_array().expect("a table") {
        assert_eq!(change["before"], change["after"]);
    }
    assert_eq!(
        standing(&service).await,
        before,
        "nothing that stands has changed"
    );
}

// The store that the test reads gives its connection back on another thread.
#[tokio::test(flavor = "multi_thread", worker_threads = 1)]
async fn a_candidate_is_compared_and_changes_nothing() {
    let service = Service::with_plant().await;
    day(&service, 30).await;
    let before = standing(&service).await;
    let critical = service
        .store
        .critical_values("mixer", 1)
        .await
        .expect("tests");
    let as_toml = started(&service, ("plant_file", json!(wider()))).await;
    let replay = done(&service, as_toml).await;
    assert_eq!(replay["revision"], Value::Null);
    assert_eq!(replay["made"], 30);
    let compared = service
        .get_json(&format!("{REPLAYS}/{as_toml}/comparison"))
        .await;
    let compared = &compared["comparison"];
    let verdicts = json!([
        {"before": "inconsistent", "after": "consistent", "batches": 10},
        {"before": "consistent", "after": "consistent", "batches": 20},
    ]);
    assert_eq!(compared["verdicts"], verdicts);
    let statistic = &compared["statistic"];
    assert!(
        statistic["after"].as_f64() < statistic["before"].as_f64(),
        "{statistic}"
    );
    let lost = compared["suspects"].as_array().expect("suspects");
    assert!(
        lost.iter()
            .any(|who| who["lost"] == 10 || who["lost"].as_u64() > Some(0)),
        "{lost:?}"
    );
    assert!(compared["largest"].as_array().expect("batches").len() <= 20);
    let list = service
        .get_json(&format!("{REPLAYS}/{as_toml}/batches?limit=10"))
        .await;
    assert_eq!(list["batches"][0]["batch"], "b00");
    assert_eq!(list["batches"][0]["standing"]["verdict"], "inconsistent");
    assert_eq!(list["batches"][0]["replayed"]["verdict"], "consistent");
    assert_eq!(list["batches"][0]["replayed"]["revision"], Value::Null);
    assert_eq!(
        standing(&service).await,
        before,
        "nothing that stands has changed"
    );
    let after = service
        .store
        .critical_values("mixer", 1)
        .await
        .expect("tests");
    assert_eq!(after, critical);

    // Accepted, it says the same of new batches, and the object form is the same.
    service.put_plant_file("mixer", &wider()).await;
    let again = json!({"by": "R. Moss", "reason": "accepted", "from": "2031-04-02T10:00:00Z", "to": "2031-04-02T11:00:00Z", "revision": 2});
    let accepted = service.done(REPLAYS, &again).await["id"]
        .as_i64()
        .expect("a number");
    done(&service, accepted).await;
    let file: Value = service.get_json("/v1/plants/mixer").await;
    let as_object = started(&service, ("plant_file", file)).await;
    done(&service, as_object).await;
    let reports = async |id| {
        let page = service.store.replayed(id, None, 100).await.expect("a page");
        let numbers = page.items.into_iter().map(|replayed| {
            let mut report = (*replayed.after).clone();
            report.revision = 0;
            report
        });
        numbers.collect::<Vec<_>>()
    };
    assert_eq!(reports(accepted).await, reports(as_toml).await);
    assert_eq!(reports(as_object).await.len(), 30);
}

#[tokio::test]
async fn every_fault_of_a_candidate_is_told() {
    let service = Service::with_plant().await;
    let faulty = PLANT.replace("\"t/h\"", "\"furlong\"");
    let mut body = asked(("plant_file", json!(faulty)));
    body["to"] = json!("2031-04-02T09:00:00Z");
    let answer = service.post_json(REPLAYS, &body).await;
    let told = problem(answer, StatusCode::UNPROCESSABLE_ENTITY).await;
    let places: Vec<&str> = (told["faults"].as_array().expect("faults").iter())
        .map(|fault| fault["path"].as_str().expect("a place"))
        .collect();
    for place in [
        "/to",
        "/plant_file/tags/F-1/unit",
        "/plant_file/tags/F-2/unit",
        "/plant_file/tags/F-3/unit",
    ] {
        assert!(places.contains(&place), "{place} is not among {places:?}");
    }
    let renamed = PLANT.replace("plant = \"mixer\"", "plant = \"other\"");
    for (body, place) in [
        (asked(("plant_file", json!(renamed))), "/plant_file/plant"),
        (asked(("reason", json!("neither"))), "/revision"),
        (asked(("plant_file", json!(7))), "/plant_file"),
    ] {
        let answer = service.post_json(REPLAYS, &body).await;
        let told = problem(answer, StatusCode::UNPROCESSABLE_ENTITY).await;
        let first = told["faults"][0]["path"].as_str().expect("a place");
        assert!(first.starts_with(place), "{told}");
    }
    let none = service
        .post_json(REPLAYS, &asked(("revision", json!(9))))
        .await;
    problem(none, StatusCode::NOT_FOUND).await;
    for path in ["1", "x", "1/comparison", "1/batches"] {
        problem(
            service.get(&format!("{REPLAYS}/{path}")).await,
            StatusCode::NOT_FOUND,
        )
        .await;
    }
    assert_eq!(service.get_json(REPLAYS).await["replays"], json!([]));
}

/// It goes on after a restart, each batch once, and comes to the same.
// The store that the test reads gives its connection back on another thread.
#[tokio::test(flavor = "multi_thread", worker_threads = 1)]
async fn a_replay_goes_on_after_a_restart() {
    let directory = tempfile::tempdir().expect("a directory");
    let database = directory.path().join("test.sqlite");
    let mut service = Service::with(on(&database));
    service.put_plant().await;
    day(&service, 60).await;
    let id = started(&service, ("plant_file", json!(wider()))).await;
    until("some", async || {
        let replay = service.get_json(&format!("{REPLAYS}/{id}")).await;
        (replay["made"].as_u64() > Some(2)).then_some(())
    })
    .await;
    service.stop().expect("an orderly end");
    let service = Service::with(on(&database));
    assert_eq!(done(&service, id).await["made"], 60);
    let other = started(&service, ("plant_file", json!(wider()))).await;
    assert_eq!(done(&service, other).await["made"], 60);
    let compared = async |id| {
        service
            .get_json(&format!("{REPLAYS}/{id}/comparison"))
            .await["comparison"]
            .clone()
    };
    assert_eq!(compared(id).await["batches"], 60);
    assert_eq!(compared(id).await, compared(other).await);
    let reports = async |id| {
        let page = service.store.replayed(id, None, 100).await.expect("a page");
        page.items
            .into_iter()
            .map(|replayed| replayed.after)
            .collect::<Vec<_>>()
    };
    assert_eq!(reports(id).await, reports(other).await, "bit for bit");
}

#[tokio::test]
async fn a_cancelled_replay_keeps_what_was_made() {
    let service = Service::with(Setup::default());
    service.put_plant().await;
    day(&service, 60).await;
    let id = started(&service, ("revision", json!(1))).await;
    let path = format!("{REPLAYS}/{id}");
    until("some", async || {
        (service.get_json(&path).await["made"].as_u64() > Some(0)).then_some(())
    })
    .await;
    let cancel = async || {
        let answer = service.client.delete(service.url(&path)).send().await;
        let answer = answer.expect("an answer");
        assert_eq!(answer.status(), StatusCode::OK);
        answer.json::<Value>().await.expect("JSON")
    };
    let cancelled = cancel().await;
    assert_eq!(cancelled["state"], "cancelled");
    assert_eq!(cancelled["ended"], "2031-04-02T12:00:00Z");
    // One may have been in work.
    let next = started(&service, ("revision", json!(1))).await;
    done(&service, next).await;
    let now = service.get_json(&path).await;
    let made = |replay: &Value| replay["made"].as_u64().expect("a number");
    assert!(
        made(&now) <= made(&cancelled) + 1 && made(&now) < 60,
        "{now}"
    );
    assert_eq!(cancel().await["state"], "cancelled");
    let compared = service.get_json(&format!("{path}/comparison")).await;
    assert_eq!(compared["comparison"]["batches"], now["made"]);
    let list = service.get_json(REPLAYS).await;
    let ids: Vec<i64> = (list["replays"].as_array().expect("a list").iter())
        .map(|replay| replay["id"].as_i64().expect("a number"))
        .collect();
    assert_eq!(ids, [next, id], "the newest first");
}
