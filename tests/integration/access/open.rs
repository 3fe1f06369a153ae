//! As long as there are no tokens: this machine alone, and only until there is
//! one.

use super::{Made, client, make, refused, revoke, send};
use crate::alarms::{self, Listener};
use crate::harness::{Service, problem};
use counterpoise::access::Scope;
use reqwest::StatusCode;
use std::time::Duration;

#[tokio::test]
async fn a_name_or_a_page_from_elsewhere_is_refused() {
    let service = Service::with_plant().await;
    let port = service.address.port();
    let here = format!("http://localhost:{port}");
    let url = service.url("/v1/plants");
    for (header, value, status) in [
        ("host", "localhost", StatusCode::OK),
        ("host", "[::1]:80", StatusCode::OK),
        ("origin", here.as_str(), StatusCode::OK),
        ("host", "rebound.example", StatusCode::FORBIDDEN),
        ("host", "192.168.1.1", StatusCode::FORBIDDEN),
        ("origin", "https://elsewhere.example", StatusCode::FORBIDDEN),
        ("origin", "null", StatusCode::FORBIDDEN),
        ("x-forwarded-for", "192.168.1.1", StatusCode::FORBIDDEN),
    ] {
        let answer = send(service.client.get(&url).header(header, value)).await;
        if status == StatusCode::OK {
            assert_eq!(answer.status(), status, "{header}: {value}");
        } else {
            problem(answer, status).await;
        }
    }
    let live = service.client.get(service.url("/livez"));
    let live = send(live.header("host", "rebound.example")).await;
    assert_eq!(live.status(), StatusCode::OK, "tells nothing of any plant");
}

#[tokio::test]
async fn the_first_token_closes_it_and_the_last_does_not_open_it() {
    let mut service = alarms::service().await;
    let mut listener = Listener::new(&service, None).await;
    let made = Made {
        scopes: &[Scope::Read],
        ..Made::default()
    };
    let token = make(&service.store, "first", made).await;
    let closed = service.get("/v1/plants").await;
    assert_eq!(refused(closed, StatusCode::UNAUTHORIZED).await, "Bearer");
    let last = tokio::time::timeout(Duration::from_secs(30), listener.next()).await;
    assert_eq!(
        last.expect("an end in time"),
        None,
        "what listened without is ended"
    );
    service.client = client(&token);
    let foreign = service.client.get(service.url("/v1/plants"));
    let foreign = send(foreign.header("host", "counterpoise.example")).await;
    assert_eq!(
        foreign.status(),
        StatusCode::OK,
        "with a token any name will do"
    );
    revoke(&service.store, "first").await;
    refused(service.get("/v1/plants").await, StatusCode::UNAUTHORIZED).await;
    service.client = reqwest::Client::new();
    refused(service.get("/v1/plants").await, StatusCode::UNAUTHORIZED).await;
}
