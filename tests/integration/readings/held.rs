//! What came before a period and holds in it.

use super::{lines, minute, period, report, rfc3339, taken};
use crate::harness::{PLANT, Service};
use time::Duration;

/// Historians that send changes only: a signal that does not move sends nothing.
#[tokio::test]
async fn a_value_from_before_the_period_holds_in_it() {
    let service = Service::with_plant().await;
    let mut sent = lines(5..10, 0.0);
    sent.retain(|line| !line.starts_with("F-1"));
    sent.push(format!("F-1,{},99.5", rfc3339(minute(3))));
    // Late in the period, and held before that by what came before it.
    sent.retain(|line| !line.starts_with("F-2"));
    for (at, value) in [(4, 50.0), (9, 51.0)] {
        sent.push(format!("F-2,{},{value}", rfc3339(minute(at))));
    }
    taken(&service, &sent).await;
    let made = report(&service, &period(5)).await;
    let first = &made["tags"]["F-1"];
    assert_eq!(first["measured"], 99.5);
    assert_eq!(first["averaged"]["samples"], 0);
    assert_eq!(first["averaged"]["covered"], 1.0);
    assert_eq!(first["class"], "redundant");
    let second = made["tags"]["F-2"]["measured"].as_f64().expect("a mean");
    assert!((second - 50.2).abs() < 1e-9, "{second}");
}

#[tokio::test]
async fn a_status_of_long_ago_tells_that_the_plant_is_down() {
    let service = Service::start();
    let running = "running-when = { tag = \"ZS-1\", is = 1 }\n[streams]";
    let file = PLANT.replacen("[streams]", running, 1) + "ZS-1 = { measures = \"status\" }\n";
    service.put_plant_file("mixer", &file).await;
    let mut sent = lines(0..5, 0.0);
    sent.push(format!(
        "ZS-1,{},0",
        rfc3339(minute(0) - Duration::hours(20))
    ));
    taken(&service, &sent).await;
    let made = report(&service, &period(0)).await;
    assert_eq!(made["verdict"], "not-running");
}

/// A mean between samples outside the period is drawn to both of them.
#[tokio::test]
async fn a_line_reaches_over_both_ends_of_the_period() {
    let service = Service::start();
    let file = PLANT.to_owned() + "\n[averaging]\nmethod = \"linear\"\n";
    service.put_plant_file("mixer", &file).await;
    let mut sent = lines(4..11, 0.0);
    sent.retain(|line| !line.starts_with("F-1"));
    for (at, value) in [(4, 99.0), (11, 106.0)] {
        sent.push(format!("F-1,{},{value}", rfc3339(minute(at))));
    }
    taken(&service, &sent).await;
    let made = report(&service, &period(5)).await;
    let mean = made["tags"]["F-1"]["measured"].as_f64().expect("a mean");
    assert!((mean - 102.5).abs() < 1e-9, "{mean}");
}
