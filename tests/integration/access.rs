//! Tokens over HTTP: who may do what, of which plants, how often, and what is
//! noted of it.

mod audit;
mod open;
mod plants;
mod process;
mod tls;

use crate::harness::{NOW, Service, problem};
use counterpoise::access::{Actor, Deed, DeedKind, Rate, Scope, Token};
use counterpoise::store::{AccessStore, NewToken, SqliteStore};
use reqwest::{Client, Method, RequestBuilder, Response, StatusCode};
use serde_json::{Value, json};
use std::time::Duration;
use time::OffsetDateTime;

/// A deed of the command line, as it goes with a token.
fn deed(kind: DeedKind) -> Deed {
    Deed {
        actor: Actor::CommandLine,
        at: NOW,
        kind,
        plant: None,
        what: json!({"token": "of a test"}),
    }
}

/// What a token is made as.
#[derive(Default)]
struct Made<'a> {
    scopes: &'a [Scope],
    plants: Option<&'a [&'a str]>,
    expires: Option<OffsetDateTime>,
    rate: Option<f64>,
}

async fn make(store: &SqliteStore, name: &str, made: Made<'_>) -> Token {
    let token = Token::random().expect("random bits");
    let names = |names: &[&str]| names.iter().map(|&name| name.to_owned()).collect();
    let new = NewToken {
        name: name.to_owned(),
        digest: token.digest(),
        scopes: made.scopes.iter().copied().collect(),
        plants: made.plants.map(names),
        expires: made.expires,
        rate: made.rate.map(|rate| Rate::new(rate).expect("a rate")),
    };
    let kept = store.add_token(new, deed(DeedKind::TokenMade)).await;
    kept.expect("kept").expect("a new name");
    token
}

async fn revoke(store: &SqliteStore, name: &str) {
    let revoked = store.revoke_token(name, deed(DeedKind::TokenRevoked)).await;
    revoked.expect("kept").expect("a token of that name");
}

/// A client that sends a token with everything.
fn client(token: &Token) -> Client {
    let value = format!("Bearer {}", token.reveal());
    let value = reqwest::header::HeaderValue::from_str(&value).expect("a value");
    Client::builder()
        .default_headers(
            [(reqwest::header::AUTHORIZATION, value)]
                .into_iter()
                .collect(),
        )
        .build()
        .expect("a client")
}

async fn send(request: RequestBuilder) -> Response {
    request.send().await.expect("an answer")
}

/// Every operation of the document: method, template, the scope it names.
fn operations() -> Vec<(Method, String, Option<String>)> {
    let document = counterpoise::server::openapi().expect("JSON");
    let document: Value = serde_json::from_str(&document).expect("JSON");
    let mut operations = Vec::new();
    for (template, item) in document["paths"].as_object().expect("paths") {
        for (method, operation) in item.as_object().expect("methods") {
            let method = Method::from_bytes(method.to_uppercase().as_bytes());
            let scope = operation["security"][0]["token"][0].as_str();
            let scope = scope.map(str::to_owned);
            operations.push((method.expect("a method"), template.clone(), scope));
        }
    }
    assert!(operations.len() > 30);
    operations
}

/// An address of a template.
fn address(template: &str, plant: &str) -> String {
    let mut address = template.replace("{plant}", plant);
    while let Some((before, rest)) = address.split_once('{') {
        let (_, after) = rest.split_once('}').expect("closed");
        address = format!("{before}1{after}");
    }
    address
}

/// What a route should need, said once more and by other means than the table.
fn needed(method: &Method, template: &str) -> Option<&'static str> {
    let last = template.rsplit('/').next().unwrap_or_default();
    match (method, last) {
        (_, "livez" | "readyz") => None,
        (_, "audit") => Some("administer"),
        (&Method::GET, _) => Some("read"),
        (&Method::PUT, _) => Some("administer"),
        (&Method::POST, "batches" | "readings") => Some("send"),
        _ if template.contains("/backfills") => Some("send"),
        _ => Some("operate"),
    }
}

/// The challenge of a refusal, after its problem document has been looked at.
async fn refused(answer: Response, status: StatusCode) -> String {
    let challenge = answer.headers().get("www-authenticate").cloned();
    problem(answer, status).await;
    let challenge = challenge.expect("a challenge");
    challenge.to_str().expect("text").to_owned()
}

#[tokio::test]
async fn no_token_no_data() {
    let service = Service::with_plant().await;
    let all = &Scope::ALL[..];
    let scopes = |scopes| Made {
        scopes,
        ..Made::default()
    };
    let revoked = make(&service.store, "revoked", scopes(all)).await;
    revoke(&service.store, "revoked").await;
    let expired = Made {
        expires: Some(NOW),
        ..scopes(all)
    };
    let expired = make(&service.store, "expired", expired).await;
    let unknown = Token::random().expect("random bits");
    let garbage = [
        "Bearer",
        "Bearer cpt_",
        "Basic bWU6bWU=",
        "cpt_",
        "Bearer caf\u{e9}",
    ];
    for (method, template, scope) in operations() {
        let url = service.url(&address(&template, "mixer"));
        let ask = |method: &Method| service.client.request(method.clone(), &url);
        if scope.is_none() {
            assert_eq!(
                send(ask(&method)).await.status(),
                StatusCode::OK,
                "{template}"
            );
            continue;
        }
        let challenge = refused(send(ask(&method)).await, StatusCode::UNAUTHORIZED).await;
        assert_eq!(challenge, "Bearer", "{method} {template}");
        for token in [&revoked, &expired, &unknown] {
            let answer = send(ask(&method).bearer_auth(token.reveal())).await;
            let challenge = refused(answer, StatusCode::UNAUTHORIZED).await;
            assert_eq!(challenge, "Bearer error=\"invalid_token\"");
        }
        for text in garbage {
            let answer = send(ask(&method).header("authorization", text.as_bytes())).await;
            refused(answer, StatusCode::UNAUTHORIZED).await;
        }
        if method == Method::GET {
            let head = send(ask(&Method::HEAD)).await;
            assert_eq!(head.status(), StatusCode::UNAUTHORIZED, "{template}");
        }
    }
    let nowhere = send(service.client.get(service.url("/v1/nowhere"))).await;
    problem(nowhere, StatusCode::NOT_FOUND).await;
    for open in ["/openapi.json", "/docs/"] {
        assert_eq!(service.get(open).await.status(), StatusCode::OK, "{open}");
    }
}

#[tokio::test]
async fn a_scope_opens_its_routes_and_no_others() {
    let service = Service::with_plant().await;
    let mut clients = Vec::new();
    for scope in Scope::ALL {
        let made = Made {
            scopes: &[scope],
            ..Made::default()
        };
        let token = make(&service.store, scope.name(), made).await;
        clients.push((scope.name(), client(&token)));
    }
    for (method, template, scope) in operations() {
        assert_eq!(
            scope.as_deref(),
            needed(&method, &template),
            "{method} {template}"
        );
        let Some(scope) = scope else { continue };
        let url = service.url(&address(&template, "mixer"));
        for (held, client) in &clients {
            let answer = send(client.request(method.clone(), &url)).await;
            if *held == scope {
                let status = answer.status();
                let let_in = ![StatusCode::UNAUTHORIZED, StatusCode::FORBIDDEN].contains(&status);
                assert!(let_in, "{method} {template} with {held}: {status}");
                continue;
            }
            let challenge = refused(answer, StatusCode::FORBIDDEN).await;
            let said = format!("Bearer error=\"insufficient_scope\", scope=\"{scope}\"");
            assert_eq!(challenge, said, "{method} {template} with {held}");
        }
        let url = service.url(&address(&template, "mixer"));
        let other = send(clients[0].1.request(Method::PATCH, &url)).await;
        assert!(other.headers().contains_key("allow"), "{template}");
        problem(other, StatusCode::METHOD_NOT_ALLOWED).await;
    }
    let nowhere = send(clients[0].1.get(service.url("/v1/nowhere"))).await;
    problem(nowhere, StatusCode::NOT_FOUND).await;
}

#[tokio::test]
async fn a_token_ends_by_the_clock_or_by_hand_and_what_listens_with_it_ends_too() {
    let mut service = crate::alarms::service().await;
    let end = NOW + Duration::from_secs(3600);
    let made = || Made {
        scopes: &[Scope::Read],
        expires: Some(end),
        ..Made::default()
    };
    for name in ["ends", "ended"] {
        let token = make(&service.store, name, made()).await;
        service.client = client(&token);
        let mut listener = crate::alarms::Listener::new(&service, None).await;
        assert_eq!(service.get("/v1/plants").await.status(), StatusCode::OK);
        if name == "ends" {
            service.clock.set(end);
        } else {
            service.clock.set(NOW);
            revoke(&service.store, name).await;
        }
        let last = tokio::time::timeout(Duration::from_secs(30), listener.next()).await;
        assert_eq!(last.expect("an end in time"), None);
        refused(service.get("/v1/plants").await, StatusCode::UNAUTHORIZED).await;
        service.clock.set(NOW);
    }
}

#[tokio::test]
async fn a_token_at_its_rate_waits_and_the_others_do_not() {
    let service = Service::with_plant().await;
    let made = |rate| Made {
        scopes: &[Scope::Read],
        rate,
        ..Made::default()
    };
    let slow = client(&make(&service.store, "slow", made(Some(0.001))).await);
    let other = client(&make(&service.store, "other", made(None)).await);
    let url = service.url("/v1/plants");
    assert_eq!(send(slow.get(&url)).await.status(), StatusCode::OK);
    for _ in 0..3 {
        let early = send(slow.get(&url)).await;
        let wait = early.headers()["retry-after"].to_str().expect("text");
        let wait: u64 = wait.parse().expect("seconds");
        assert!((900..=1000).contains(&wait), "{wait}");
        let told = problem(early, StatusCode::TOO_MANY_REQUESTS).await;
        assert_eq!(told["type"], "urn:counterpoise:problem:too-often");
        assert_eq!(send(other.get(&url)).await.status(), StatusCode::OK);
    }
    // Whoever is not known is not told of rates, nor counted.
    refused(
        send(service.client.get(&url)).await,
        StatusCode::UNAUTHORIZED,
    )
    .await;
}

#[tokio::test]
async fn the_last_use_is_kept_to_the_minute_and_written_once_in_it() {
    let service = Service::with_plant().await;
    let made = Made {
        scopes: &[Scope::Administer],
        ..Made::default()
    };
    let token = make(&service.store, "used", made).await;
    let client = client(&token);
    let read = async |column: &str| -> i64 {
        // Behind what was noted: the store does one thing after another.
        service.store.token_used(-1, NOW).await.expect("kept");
        crate::harness::number(
            &service.database,
            &format!("SELECT {column} FROM token_uses"),
        )
        .await
    };
    let counted = "CREATE TABLE writes (n INTEGER); \
         CREATE TRIGGER a AFTER INSERT ON token_uses BEGIN INSERT INTO writes VALUES (1); END; \
         CREATE TRIGGER b AFTER UPDATE ON token_uses BEGIN INSERT INTO writes VALUES (1); END;";
    crate::store_faults::beside(&service.database, counted).await;
    for (seconds, minute, writes) in [(5, 0, 1), (59, 0, 1), (60, 60, 2), (3700, 3660, 3)] {
        service.clock.set(NOW + Duration::from_secs(seconds));
        for _ in 0..3 {
            let answer = send(client.get(service.url("/v1/audit"))).await;
            assert_eq!(answer.status(), StatusCode::OK);
        }
        let expected = (NOW.unix_timestamp() + minute) * 1_000_000_000;
        assert_eq!(read("used_ns").await, expected, "{seconds}");
        assert_eq!(
            read("(SELECT COUNT(*) FROM writes)").await,
            writes,
            "{seconds}"
        );
    }
}
