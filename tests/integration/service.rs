//! Plants, and the service as a whole.

use crate::harness::{PLANT, Service, Setup, batch, problem};
use reqwest::{Method, StatusCode};
use std::time::Duration;
use tokio::io::{AsyncReadExt, AsyncWriteExt};
use tokio::net::TcpStream;

async fn put(service: &Service, headers: &[(&str, &str)], body: &str) -> reqwest::Response {
    let mut request = service.client.put(service.url("/v1/plants/mixer"));
    for (name, value) in headers {
        request = request.header(*name, *value);
    }
    request
        .body(body.to_owned())
        .send()
        .await
        .expect("an answer")
}

const TOML: (&str, &str) = ("content-type", "application/toml");
const JSON: (&str, &str) = ("content-type", "application/json");

fn tag(response: &reqwest::Response) -> String {
    response.headers()["etag"]
        .to_str()
        .expect("text")
        .to_owned()
}

#[tokio::test]
async fn it_lives_and_is_ready() {
    let service = Service::start();
    assert_eq!(service.get_json("/livez").await["status"], "live");
    assert_eq!(service.get_json("/readyz").await["status"], "ready");
}

#[tokio::test]
async fn a_plant_has_revisions() {
    let service = Service::start();
    let first = put(&service, &[TOML], PLANT).await;
    assert_eq!(first.status(), StatusCode::CREATED);
    let first_tag = tag(&first);
    assert!(first_tag.starts_with('"'), "strong: {first_tag}");

    let comment = format!("# the same\n{PLANT}");
    let same = put(&service, &[TOML], &comment).await;
    assert_eq!(same.status(), StatusCode::OK);
    assert_eq!(tag(&same), first_tag);
    assert_eq!(
        same.json::<serde_json::Value>().await.expect("JSON")["revision"],
        1
    );

    let changed = PLANT.replace("Two streams", "Two cold streams");
    let second = put(&service, &[TOML], &changed).await;
    assert_eq!(second.status(), StatusCode::CREATED);
    assert_ne!(tag(&second), first_tag);
    assert_eq!(
        second.json::<serde_json::Value>().await.expect("JSON")["revision"],
        2
    );

    let current = service.get_json("/v1/plants/mixer").await;
    assert_eq!(current["title"], "Two cold streams and a mixer");
    let old = service.get_json("/v1/plants/mixer?revision=1").await;
    assert_eq!(old["title"], "Two streams and a mixer");
    let none = service.get("/v1/plants/mixer?revision=3").await;
    problem(none, StatusCode::NOT_FOUND).await;

    let list = service.get_json("/v1/plants").await;
    assert_eq!(list["plants"][0]["plant"], "mixer");
    assert_eq!(list["plants"][0]["revision"], 2);
    assert_eq!(list["plants"][0]["created"], "2031-04-02T12:00:00Z");
}

#[tokio::test]
async fn preconditions_guard_a_plant() {
    let service = Service::start();
    let absent = ("if-none-match", "*");
    let present = ("if-match", "*");
    problem(
        put(&service, &[TOML, present], PLANT).await,
        StatusCode::PRECONDITION_FAILED,
    )
    .await;
    let first = put(&service, &[TOML, absent], PLANT).await;
    assert_eq!(first.status(), StatusCode::CREATED);
    let first_tag = tag(&first);
    problem(
        put(&service, &[TOML, absent], PLANT).await,
        StatusCode::PRECONDITION_FAILED,
    )
    .await;

    let changed = PLANT.replace("Two streams", "Cold streams");
    let guarded = put(&service, &[TOML, ("if-match", &first_tag)], &changed).await;
    assert_eq!(guarded.status(), StatusCode::CREATED);
    let late = put(&service, &[TOML, ("if-match", &first_tag)], PLANT).await;
    problem(late, StatusCode::PRECONDITION_FAILED).await;
    assert_eq!(
        service.get_json("/v1/plants/mixer").await["title"],
        "Cold streams and a mixer"
    );
}

#[tokio::test]
async fn a_plant_comes_back_as_json_and_as_sent() {
    let service = Service::with_plant().await;
    let address = service.url("/v1/plants/mixer");
    let accept = |form: &str| service.client.get(&address).header("accept", form).send();
    let toml = accept("application/toml").await.expect("an answer");
    assert_eq!(toml.headers()["content-type"], "application/toml");
    let toml_tag = tag(&toml);
    assert_eq!(toml.text().await.expect("text"), PLANT);

    let json = accept("application/json, */*;q=0.1")
        .await
        .expect("an answer");
    assert_eq!(json.headers()["content-type"], "application/json");
    let json_tag = tag(&json);
    assert_ne!(json_tag, toml_tag, "one strong tag for two forms");
    let json = json.text().await.expect("text");

    let unchanged = service
        .client
        .get(&address)
        .header("if-none-match", &json_tag);
    let unchanged = unchanged.send().await.expect("an answer");
    assert_eq!(unchanged.status(), StatusCode::NOT_MODIFIED);

    let same = put(&service, &[JSON], &json).await;
    assert_eq!(
        same.status(),
        StatusCode::OK,
        "the JSON form is the same plant"
    );
    problem(
        accept("image/png").await.expect("an answer"),
        StatusCode::NOT_ACCEPTABLE,
    )
    .await;
}

#[tokio::test]
async fn every_fault_of_a_plant_file_is_told() {
    let service = Service::start();
    let faulty = PLANT
        .replace("\"t/h\"", "\"furlong\"")
        .replace("kind = \"mixer\"", "kind = \"blender\"");
    let answer = problem(
        put(&service, &[TOML], &faulty).await,
        StatusCode::UNPROCESSABLE_ENTITY,
    )
    .await;
    let faults = answer["faults"].as_array().expect("faults");
    let paths: Vec<&str> = faults
        .iter()
        .filter_map(|fault| fault["path"].as_str())
        .collect();
    for path in [
        "/tags/F-1/unit",
        "/tags/F-2/unit",
        "/tags/F-3/unit",
        "/equipment/mix/kind",
    ] {
        assert!(paths.contains(&path), "{path} is not among {paths:?}");
    }
    let placed = faults
        .iter()
        .find(|fault| fault["path"] == "/tags/F-1/unit")
        .expect("a fault");
    assert_eq!(placed["line"], 14);
    assert!(!placed["what"].as_str().expect("text").is_empty());
    assert!(!placed["mend"].as_str().expect("text").is_empty());
    problem(service.get("/v1/plants/mixer").await, StatusCode::NOT_FOUND).await;
}

#[tokio::test]
async fn a_plant_has_the_name_of_its_address() {
    let service = Service::start();
    let renamed = PLANT.replace("plant = \"mixer\"", "plant = \"other\"");
    let answer = problem(
        put(&service, &[TOML], &renamed).await,
        StatusCode::UNPROCESSABLE_ENTITY,
    )
    .await;
    assert_eq!(answer["faults"][0]["path"], "/plant");
}

#[tokio::test]
async fn an_assessment_needs_no_batch() {
    let service = Service::with_plant().await;
    let assessment = service.get_json("/v1/plants/mixer/assessment").await;
    assert_eq!(assessment["plant"], "mixer");
    assert_eq!(assessment["revision"], 1);
    assert_eq!(assessment["tags"].as_object().expect("tags").len(), 9);
    problem(
        service.get("/v1/plants/nowhere/assessment").await,
        StatusCode::NOT_FOUND,
    )
    .await;
}

#[tokio::test]
async fn a_list_of_plants_goes_on_by_its_link() {
    let service = Service::start();
    for name in ["c", "a", "b"] {
        let plant = PLANT.replace("plant = \"mixer\"", &format!("plant = \"{name}\""));
        let request = service
            .client
            .put(service.url(&format!("/v1/plants/{name}")));
        let answer = request
            .header(TOML.0, TOML.1)
            .body(plant)
            .send()
            .await
            .expect("an answer");
        assert_eq!(answer.status(), StatusCode::CREATED);
    }
    let mut next = Some("/v1/plants?limit=1".to_owned());
    let mut names = Vec::new();
    while let Some(path) = next {
        let answer = service.get(&path).await;
        next = next_link(&answer);
        let list: serde_json::Value = answer.json().await.expect("JSON");
        names.push(
            list["plants"][0]["plant"]
                .as_str()
                .expect("a name")
                .to_owned(),
        );
    }
    assert_eq!(names, ["a", "b", "c"]);
}

pub fn next_link(response: &reqwest::Response) -> Option<String> {
    let link = response.headers().get("link")?.to_str().ok()?;
    let (target, relation) = link.split_once('>')?;
    assert_eq!(relation, "; rel=\"next\"");
    Some(target.trim_start_matches('<').to_owned())
}

#[tokio::test]
async fn requests_have_ids() {
    let service = Service::start();
    let made = service.get("/livez").await.headers()["x-request-id"]
        .to_str()
        .expect("text")
        .to_owned();
    let id: uuid::Uuid = made.parse().expect("a UUID");
    assert_eq!(id.get_version_num(), 7);
    let given = service
        .client
        .get(service.url("/livez"))
        .header("x-request-id", "shift-7.42");
    let given = given.send().await.expect("an answer");
    assert_eq!(given.headers()["x-request-id"], "shift-7.42");
    let unusable = service
        .client
        .get(service.url("/nowhere"))
        .header("x-request-id", "a b\"");
    let unusable = unusable.send().await.expect("an answer");
    assert_ne!(unusable.headers()["x-request-id"], "a b\"");
    problem(unusable, StatusCode::NOT_FOUND).await;
}

#[tokio::test]
async fn what_is_not_there_and_what_is_not_done_are_problems() {
    let service = Service::with_plant().await;
    for path in [
        "/",
        "/v1",
        "/v1/plants/mixer/nothing",
        "/v1/plants/nowhere",
        "/v1/plants/mixer/batches/x",
    ] {
        problem(service.get(path).await, StatusCode::NOT_FOUND).await;
    }
    let request = service
        .client
        .request(Method::DELETE, service.url("/v1/plants/mixer"));
    let answer = request.send().await.expect("an answer");
    let allow = answer.headers()["allow"].to_str().expect("text").to_owned();
    assert!(allow.contains("PUT") && allow.contains("GET"), "{allow}");
    problem(answer, StatusCode::METHOD_NOT_ALLOWED).await;
}

#[tokio::test]
async fn the_page_of_routes_needs_no_other_host() {
    let service = Service::start();
    let page = service.get("/docs/").await;
    assert_eq!(page.status(), StatusCode::OK);
    let page = page.text().await.expect("text");
    assert!(!page.contains("//"), "an asset from elsewhere: {page}");
    let script = service.get("/docs/swagger-ui-bundle.js").await;
    assert_eq!(script.status(), StatusCode::OK);
    let document = service.get_json("/openapi.json").await;
    assert_eq!(document["openapi"], "3.1.0");
    let configuration = service.get("/docs/swagger-initializer.js").await;
    assert_eq!(configuration.status(), StatusCode::OK);
    let configuration = configuration.text().await.expect("text");
    assert!(configuration.contains("/openapi.json"), "{configuration}");
    // Unset, the page would load a badge from a validator elsewhere.
    let no_badge = configuration
        .replace(' ', "")
        .contains("\"validatorUrl\":\"none\"");
    assert!(no_badge, "{configuration}");
    for scheme in ["http://", "https://"] {
        assert!(!configuration.contains(scheme), "{configuration}");
    }
}

#[tokio::test]
async fn an_address_that_is_no_text_is_a_bad_parameter() {
    let service = Service::with_plant().await;
    for path in [
        "/v1/plants/%ff",
        "/v1/plants/%ff/assessment",
        "/v1/plants/%ff/series?tag=F-3",
        "/v1/plants/mixer/batches/%ff",
    ] {
        let answer = problem(service.get(path).await, StatusCode::BAD_REQUEST).await;
        assert_eq!(answer["type"], "urn:counterpoise:problem:bad-parameter");
    }
}

#[tokio::test]
async fn an_orderly_end_finishes_what_has_begun() {
    let mut service = Service::with_plant().await;
    let body = batch("last", 0, 150.0);
    let head = format!(
        "POST /v1/plants/mixer/batches HTTP/1.1\r\nhost: localhost\r\ncontent-type: application/json\r\n\
         expect: 100-continue\r\ncontent-length: {}\r\n\r\n",
        body.len()
    );
    let mut stream = TcpStream::connect(service.address)
        .await
        .expect("a connection");
    stream.write_all(head.as_bytes()).await.expect("written");
    let mut asked = [0; 25];
    stream
        .read_exact(&mut asked)
        .await
        .expect("asked to continue");
    let address = service.address;
    let ending = tokio::task::spawn_blocking(move || service.stop());
    let refusing = async { while TcpStream::connect(address).await.is_ok() {} };
    tokio::time::timeout(Duration::from_secs(10), refusing)
        .await
        .expect("nobody else is let in");
    stream.write_all(body.as_bytes()).await.expect("written");
    let mut answer = String::new();
    stream.read_to_string(&mut answer).await.expect("an answer");
    assert!(answer.starts_with("HTTP/1.1 200 "), "{answer}");
    assert!(answer.contains("\"batch\":\"last\""), "{answer}");
    ending.await.expect("no panic").expect("an orderly end");
}

/// The critical value of a class set is worked out at its first batch. A later
/// batch solved after a restart, when that batch is long past, is held against
/// the same, and so is every number of its report the same.
#[tokio::test]
async fn a_report_is_the_same_bit_for_bit_after_a_restart() {
    let directory = tempfile::tempdir().expect("a directory");
    let setup = |name: &str| Setup {
        database: Some(directory.path().join(name)),
        ..Setup::default()
    };
    let second = |report: &serde_json::Value| {
        let mut report = report.clone();
        report["batch"] = serde_json::Value::Null;
        report
    };
    let mut service = Service::with(setup("one.sqlite"));
    service.put_plant().await;
    service.post_batch(batch("first", 0, 150.3)).await;
    service.get("/v1/plants/mixer/assessment").await;
    service.post_batch(batch("before", 1, 149.0)).await;
    let before = service.report("before").await;
    service.stop().expect("ended in order");

    let service = Service::with(setup("one.sqlite"));
    service.post_batch(batch("after", 1, 149.0)).await;
    let after = service.report("after").await;
    assert_eq!(second(&before), second(&after));

    // Without the first batch the critical value is that of the second.
    let other = Service::with(setup("two.sqlite"));
    other.put_plant().await;
    other.post_batch(batch("alone", 1, 149.0)).await;
    let alone = other.report("alone").await;
    assert_eq!(
        alone["tags"]["F-3"]["reconciled"],
        before["tags"]["F-3"]["reconciled"]
    );
    assert_ne!(
        alone["single_test"]["critical_value"], before["single_test"]["critical_value"],
        "the simulation is at the first batch, so this test would show a lost value"
    );
}
