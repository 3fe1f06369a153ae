//! Tokens that are bound to plants: others do not exist for them.

use super::{Made, address, client, make, operations, send};
use crate::harness::{PLANT, Service, problem};
use counterpoise::access::Scope;
use reqwest::StatusCode;
use serde_json::Value;

fn named(name: &str) -> String {
    PLANT.replace("plant = \"mixer\"", &format!("plant = \"{name}\""))
}

async fn three_plants() -> Service {
    let service = Service::start();
    for name in ["alder", "birch", "cedar"] {
        service.put_plant_file(name, &named(name)).await;
    }
    service
}

#[tokio::test]
async fn another_plant_is_as_if_there_were_none() {
    let service = three_plants().await;
    let made = Made {
        scopes: &Scope::ALL,
        plants: Some(&["alder", "not-yet"]),
        ..Made::default()
    };
    let bound = client(&make(&service.store, "bound", made).await);
    let said = async |plant: &str, method: &reqwest::Method, template: &str| -> Value {
        let url = service.url(&address(template, plant));
        let answer = send(bound.request(method.clone(), url)).await;
        let headers = format!("{:?}", answer.headers().keys().collect::<Vec<_>>());
        let mut told = problem(answer, StatusCode::NOT_FOUND).await;
        told["instance"] = Value::Null;
        let text = format!("{told} {headers}").replace(plant, "PLANT");
        Value::from(text)
    };
    let mut looked_at = 0;
    for (method, template, _) in operations() {
        if !template.contains("{plant}") {
            continue;
        }
        looked_at += 1;
        let there = said("birch", &method, &template).await;
        let nowhere = said("beech", &method, &template).await;
        assert_eq!(there, nowhere, "{method} {template}");
    }
    assert!(looked_at > 25);
    // The names in a path are compared as they are meant.
    let encoded = service.url("/v1/plants/%61lder");
    assert_eq!(send(bound.get(encoded)).await.status(), StatusCode::OK);
    let dotted = service.url("/v1/plants/alder%2F..%2Fbirch");
    problem(send(bound.get(dotted)).await, StatusCode::NOT_FOUND).await;
    let broken = service.url("/v1/plants/%ff");
    problem(send(bound.get(broken)).await, StatusCode::BAD_REQUEST).await;
    for (plant, status) in [
        ("alder", StatusCode::OK),
        ("not-yet", StatusCode::CREATED),
        ("birch", StatusCode::NOT_FOUND),
        ("new", StatusCode::NOT_FOUND),
    ] {
        let put = bound.put(service.url(&format!("/v1/plants/{plant}")));
        let put = put
            .header("content-type", "application/toml")
            .body(named(plant));
        assert_eq!(send(put).await.status(), status, "{plant}");
    }
}

#[tokio::test]
async fn lists_leave_other_plants_out() {
    let service = three_plants().await;
    let made = |plants| Made {
        scopes: &[Scope::Read, Scope::Administer],
        plants,
        ..Made::default()
    };
    let all = client(&make(&service.store, "all", made(None)).await);
    let bound = made(Some(&["alder", "cedar"]));
    let bound = client(&make(&service.store, "bound", bound).await);
    let none = client(&make(&service.store, "none", made(Some(&[]))).await);
    for (client, expected) in [
        (&all, &["alder", "birch", "cedar"][..]),
        (&bound, &["alder", "cedar"]),
        (&none, &[]),
    ] {
        for limit in [1, 2, 100] {
            let mut names = Vec::new();
            let mut next = Some(format!("/v1/plants?limit={limit}"));
            while let Some(address) = next {
                let answer = send(client.get(service.url(&address))).await;
                assert_eq!(answer.status(), StatusCode::OK);
                let link = answer
                    .headers()
                    .get("link")
                    .map(|link| link.to_str().expect("text"));
                let target = |link: &str| link[1..].split('>').next().expect("a target").to_owned();
                next = link.map(target);
                let list: Value = answer.json().await.expect("JSON");
                let plants = list["plants"].as_array().expect("a list").iter();
                names.extend(plants.map(|p| p["plant"].as_str().expect("a name").to_owned()));
            }
            assert_eq!(names, expected, "{limit} at a time");
        }
        let audit = send(client.get(service.url("/v1/audit"))).await;
        let audit: Value = audit.json().await.expect("JSON");
        let entries = audit["entries"].as_array().expect("a list").iter();
        let mut plants: Vec<&str> = entries.filter_map(|e| e["plant"].as_str()).collect();
        plants.sort_unstable();
        assert_eq!(plants, expected, "of the audit log");
    }
    let other = send(bound.get(service.url("/v1/audit?plant=birch"))).await;
    problem(other, StatusCode::NOT_FOUND).await;
}
