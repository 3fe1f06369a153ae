//! Readings that come after their batch was made.

use super::{finished, lines, minute, on, period, report, rfc3339, taken, until, values, versions};
use crate::harness::{NOW, Service};
use serde_json::Value;

async fn version(service: &Service, name: &str, number: u32) -> Value {
    let path = format!("/v1/plants/mixer/batches/{name}/versions/{number}");
    service.get_json(&path).await
}

#[tokio::test]
async fn late_readings_make_a_new_version_and_the_old_one_stays() {
    let service = Service::with_plant().await;
    let mut all = lines(0..5, 0.0);
    // The last two of F-3 come later.
    let late: Vec<String> = all
        .iter()
        .filter(|line| line.starts_with("F-3"))
        .cloned()
        .collect();
    let late = late[3..].to_vec();
    all.retain(|line| !late.contains(line));
    taken(&service, &all).await;
    let first = report(&service, &period(0)).await;
    service.clock.set(NOW + time::Duration::hours(3));
    let changed = late.iter().map(|line| format!("{line}9"));
    let changed: Vec<String> = changed.collect();
    assert_eq!(taken(&service, &changed).await["taken"], 2);
    let versions = versions(&service, &period(0), 2).await;
    assert_eq!(versions.len(), 2);
    assert_eq!(versions[1]["by"], "late readings");
    assert_eq!(versions[1]["at"], "2031-04-02T15:00:00Z");
    let reason = versions[1]["reason"].as_str().expect("a reason");
    assert_eq!(reason, "late readings of F-3 (2 more)");
    assert_eq!(version(&service, &period(0), 1).await, first, "as it was");
    let second = report(&service, &period(0)).await;
    assert_ne!(
        second["tags"]["F-3"]["measured"],
        first["tags"]["F-3"]["measured"]
    );
    assert_eq!(first["tags"]["F-3"]["averaged"]["samples"], 3);
    assert_eq!(second["tags"]["F-3"]["averaged"]["samples"], 5);
    assert_eq!(
        second["tags"]["F-1"],
        version(&service, &period(0), 2).await["tags"]["F-1"]
    );
    // The same once more is no third.
    assert_eq!(taken(&service, &changed).await["known"], 2);
    taken(&service, &lines(10..15, 0.0)).await;
    report(&service, &period(10)).await;
    let again = super::versions(&service, &period(0), 2).await;
    assert_eq!(again.len(), 2);
}

/// What is made again is what would have been made of all readings at once.
#[tokio::test]
async fn late_or_not_the_report_is_the_same() {
    let all = lines(0..15, 0.4);
    let punctual = Service::with_plant().await;
    taken(&punctual, &all).await;
    let expected = values(&report(&punctual, &period(5)).await);
    let late = Service::with_plant().await;
    let (odd, even): (Vec<(usize, String)>, _) =
        all.into_iter().enumerate().partition(|(at, _)| at % 2 == 1);
    let texts = |part: Vec<(usize, String)>| -> Vec<String> {
        part.into_iter().map(|(_, line)| line).collect()
    };
    taken(&late, &texts(odd)).await;
    report(&late, &period(5)).await;
    taken(&late, &texts(even)).await;
    let path = format!("/v1/plants/mixer/batches/{}", period(5));
    until("the same", async || {
        (values(&late.get_json(&path).await) == expected).then_some(())
    })
    .await;
}

/// Alarms are what was seen as it happened.
#[tokio::test]
async fn a_new_version_moves_no_alarm() {
    let service = Service::with_plant().await;
    taken(&service, &lines(0..30, 0.0)).await;
    report(&service, &period(25)).await;
    let before = service.get_json("/v1/plants/mixer/alarms").await;
    for start in [0, 5, 10, 15, 20, 25] {
        let line = format!(
            "F-3,{},190",
            rfc3339(minute(start) + time::Duration::seconds(30))
        );
        taken(&service, &[line]).await;
    }
    for start in [0, 5, 10, 15, 20, 25] {
        let versions = versions(&service, &period(start), 2).await;
        assert_eq!(versions.last().expect("a version")["by"], "late readings");
    }
    assert_eq!(service.get_json("/v1/plants/mixer/alarms").await, before);
}

#[tokio::test]
async fn late_readings_before_a_restart_are_reconciled_after_it() {
    let directory = tempfile::tempdir().expect("a directory");
    let database = directory.path().join("test.sqlite");
    let mut service = Service::with(on(&database));
    service.put_plant().await;
    taken(&service, &lines(0..50, 0.0)).await;
    until("ten", async || {
        (finished(&service).await.len() == 10).then_some(())
    })
    .await;
    let late: Vec<String> = (0..10)
        .map(|at| {
            format!(
                "F-3,{},151",
                rfc3339(minute(at * 5) + time::Duration::seconds(90))
            )
        })
        .collect();
    taken(&service, &late).await;
    service.stop().expect("an orderly end");
    let service = Service::with(on(&database));
    for at in 0..10 {
        let versions = versions(&service, &period(at * 5), 2).await;
        assert_eq!(versions[1]["reason"], "late readings of F-3 (1 more)");
    }
}
