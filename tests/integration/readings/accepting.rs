//! What is accepted and not finished: bounded, in order, fair between plants.

use crate::harness::{Service, Setup, batch, number, problem};
use counterpoise::server::Limits;
use reqwest::StatusCode;

fn asking(service: &Service, plant: &str, kind: &str, body: String) -> reqwest::RequestBuilder {
    let request = service
        .client
        .post(service.url(&format!("/v1/plants/{plant}/batches")));
    let request = request.header("content-type", kind);
    request.header("prefer", "respond-async").body(body)
}

fn setup(limits: Limits) -> Setup {
    Setup {
        limits,
        ..Setup::default()
    }
}

/// Batches that nobody waits for have as much room as the limit says; what has
/// no room is refused before it is accepted, and done when it is sent again.
#[tokio::test]
async fn what_waits_is_bounded() {
    let limits = Limits {
        // One unit of room.
        waiting: 1,
        workers: 1,
        ..Limits::default()
    };
    let service = Service::with(setup(limits));
    service.put_plant().await;
    let post = |n: u32| {
        asking(
            &service,
            "mixer",
            "application/json",
            batch(&format!("b{n}"), n, 150.0),
        )
    };
    let answers = futures::future::join_all((0..40).map(|n| post(n).send())).await;
    let mut refused = Vec::new();
    for (n, answer) in (0..).zip(answers) {
        let answer = answer.expect("an answer");
        if answer.status() == StatusCode::ACCEPTED {
            continue;
        }
        assert_eq!(answer.headers()["retry-after"], "1");
        problem(answer, StatusCode::TOO_MANY_REQUESTS).await;
        let path = format!("/v1/plants/mixer/batches/b{n}");
        problem(service.get(&path).await, StatusCode::NOT_FOUND).await;
        refused.push(n);
    }
    assert!(!refused.is_empty() && refused.len() < 40, "{refused:?}");
    for n in refused {
        super::until("room", async || {
            let answer = post(n).send().await.expect("an answer");
            (answer.status() == StatusCode::ACCEPTED).then_some(())
        })
        .await;
    }
    for n in 0..40 {
        service.report(&format!("b{n}")).await;
    }
}

/// A stream goes at the pace of what is finished.
#[tokio::test]
async fn a_stream_that_nobody_waits_for_is_taken_whole() {
    let limits = Limits {
        waiting: 1,
        workers: 1,
        ..Limits::default()
    };
    let service = Service::with(setup(limits));
    service.put_plant().await;
    let lines: Vec<String> = (0..60).map(|n| batch(&format!("s{n}"), n, 150.0)).collect();
    let answer = asking(&service, "mixer", "application/x-ndjson", lines.join("\n"));
    let answer = answer.send().await.expect("an answer");
    assert_eq!(answer.status(), StatusCode::ACCEPTED);
    let text = answer.text().await.expect("text");
    let accepted = text
        .lines()
        .filter(|line| line.contains("\"accepted\""))
        .count();
    assert_eq!(accepted, 60, "{text}");
    for n in 0..60 {
        service.report(&format!("s{n}")).await;
    }
}

/// One plant's backlog is a batch or two ahead of another plant's at most, told by
/// what is unfinished when that is answered.
#[tokio::test]
async fn a_backlog_of_one_plant_does_not_keep_another_waiting() {
    let limits = Limits {
        workers: 1,
        ..Limits::default()
    };
    let service = Service::with(setup(limits));
    service.put_plant().await;
    let file = |name: &str| {
        let path = format!("{}/fixtures/demo/{name}", env!("CARGO_MANIFEST_DIR"));
        std::fs::read_to_string(path).expect("a file")
    };
    // Large enough that its batches take much longer than all else.
    service
        .put_plant_file("gannet-holm", &file("plant.toml"))
        .await;
    let batches = file("batches.ndjson");
    let mut lines = batches.lines();
    // What is worked out once for each plant is worked out before.
    let warm = lines.next().expect("a batch").to_owned();
    let warm = asking(&service, "gannet-holm", "application/json", warm);
    warm.send().await.expect("an answer");
    service.post_batch(batch("warm", 1, 150.0)).await;
    let lines: Vec<&str> = lines.take(12).collect();
    let answer = asking(
        &service,
        "gannet-holm",
        "application/x-ndjson",
        lines.join("\n"),
    );
    let answer = answer.send().await.expect("an answer");
    assert_eq!(answer.text().await.expect("text").lines().count(), 12);
    let unfinished = async || number(&service.database, "SELECT count(*) FROM pending").await;
    let before = unfinished().await;
    let answer = service.post_batch(batch("one", 0, 150.0)).await;
    assert_eq!(answer.status(), StatusCode::OK);
    let after = unfinished().await;
    assert!(before > 6, "there is a backlog: {before}");
    // One that was in work, and those that were done while it was counted.
    assert!(after + 4 >= before, "{before} before, {after} after");
}
