//! The OpenAPI document: complete, and what the service does.

use crate::harness::Service;
use serde_json::Value;
use std::collections::BTreeSet;

fn document() -> Value {
    let text = counterpoise::server::openapi().expect("JSON");
    serde_json::from_str(&text).expect("JSON")
}

/// The interface without its words: those may be mended without a new look.
fn wordless(mut value: Value) -> Value {
    match &mut value {
        Value::Object(members) => {
            members.retain(|key, member| !(member.is_string() && WORDS.contains(&key.as_str())));
            for member in members.values_mut() {
                *member = wordless(member.take());
            }
        }
        Value::Array(items) => {
            for item in items {
                *item = wordless(item.take());
            }
        }
        _ => {}
    }
    value
}

const WORDS: [&str; 2] = ["description", "summary"];

#[test]
fn it_is_the_interface_that_was_looked_at() {
    insta::with_settings!({ prepend_module_to_snapshot => false, sort_maps => true }, {
        insta::assert_json_snapshot!("openapi", wordless(document()));
    });
}

#[test]
fn every_route_is_described() {
    let document = document();
    assert_eq!(document["openapi"], "3.1.0");
    let mut operations = BTreeSet::new();
    let mut ids = BTreeSet::new();
    for (path, methods) in document["paths"].as_object().expect("paths") {
        for (method, operation) in methods.as_object().expect("methods") {
            operations.insert(format!("{method} {path}"));
            assert!(operation["summary"].is_string(), "{method} {path}");
            let id = operation["operationId"].as_str().expect("an id");
            assert!(ids.insert(id.to_owned()), "{id} stands twice");
            let default = &operation["responses"]["default"]["content"];
            let has_problem = default["application/problem+json"]["schema"].is_object();
            assert!(has_problem || path.ends_with('z'), "{method} {path}");
        }
    }
    let expected = [
        "delete /v1/plants/{plant}/replays/{replay}",
        "get /livez",
        "get /metrics",
        "get /readyz",
        "get /v1/audit",
        "get /v1/plants",
        "get /v1/plants/{plant}",
        "get /v1/plants/{plant}/accusations",
        "get /v1/plants/{plant}/accusations/record",
        "get /v1/plants/{plant}/alarms",
        "get /v1/plants/{plant}/alarms/events",
        "get /v1/plants/{plant}/assessment",
        "get /v1/plants/{plant}/backfills",
        "get /v1/plants/{plant}/backfills/{backfill}",
        "get /v1/plants/{plant}/batches",
        "get /v1/plants/{plant}/batches/{batch}",
        "get /v1/plants/{plant}/batches/{batch}/field-readings",
        "get /v1/plants/{plant}/batches/{batch}/influences",
        "get /v1/plants/{plant}/batches/{batch}/versions",
        "get /v1/plants/{plant}/batches/{batch}/versions/{version}",
        "get /v1/plants/{plant}/by-hand",
        "get /v1/plants/{plant}/means",
        "get /v1/plants/{plant}/replays",
        "get /v1/plants/{plant}/replays/{replay}",
        "get /v1/plants/{plant}/replays/{replay}/batches",
        "get /v1/plants/{plant}/replays/{replay}/comparison",
        "get /v1/plants/{plant}/series",
        "post /v1/plants/{plant}/accusations/{id}/closing",
        "post /v1/plants/{plant}/again",
        "post /v1/plants/{plant}/alarms/{id}/acknowledge",
        "post /v1/plants/{plant}/alarms/{id}/remove-from-service",
        "post /v1/plants/{plant}/alarms/{id}/return-to-service",
        "post /v1/plants/{plant}/alarms/{id}/shelve",
        "post /v1/plants/{plant}/alarms/{id}/unshelve",
        "post /v1/plants/{plant}/backfills/{backfill}",
        "post /v1/plants/{plant}/batches",
        "post /v1/plants/{plant}/batches/{batch}/again",
        "post /v1/plants/{plant}/batches/{batch}/field-readings",
        "post /v1/plants/{plant}/by-hand",
        "post /v1/plants/{plant}/by-hand/{id}/end",
        "post /v1/plants/{plant}/readings",
        "post /v1/plants/{plant}/replays",
        "put /v1/plants/{plant}",
    ];
    assert_eq!(
        operations,
        expected.into_iter().map(str::to_owned).collect()
    );
}

#[test]
fn every_reference_leads_somewhere() {
    let document = document();
    let mut references = Vec::new();
    collect(&document, &mut references);
    assert!(references.len() > 20);
    for reference in references {
        let pointer = reference.strip_prefix('#').expect("a local reference");
        assert!(document.pointer(pointer).is_some(), "{reference}");
    }
}

fn collect(value: &Value, references: &mut Vec<String>) {
    match value {
        Value::Object(members) => {
            if let Some(Value::String(reference)) = members.get("$ref") {
                references.push(reference.clone());
            }
            members
                .values()
                .for_each(|value| collect(value, references));
        }
        Value::Array(items) => items.iter().for_each(|item| collect(item, references)),
        _ => {}
    }
}

/// The document has one space of names: of two types with one name it keeps one.
#[test]
fn every_type_has_a_name_of_its_own() {
    let mut seen = std::collections::BTreeMap::new();
    for (path, text) in crate::house::sources() {
        let derived = text.split("#[derive(").skip(1);
        for item in derived.filter(|item| {
            let derives = item.split(")]").next().unwrap_or_default();
            derives.contains("ToSchema")
        }) {
            let head = item.split('{').next().unwrap_or_default();
            let renamed = head.split_once("schema(as = ").map(|(_, rest)| rest);
            let rust = ["struct ", "enum "]
                .iter()
                .find_map(|kind| item.split_once(kind));
            let name = renamed.or(rust.map(|(_, rest)| rest)).expect("a name");
            let word: String = name.chars().take_while(|c| c.is_alphanumeric()).collect();
            let other = seen.insert(word.clone(), path.clone());
            assert_eq!(other, None, "{word} is also in {}", path.display());
        }
    }
    assert!(seen.len() > 50, "{}", seen.len());
}

#[test]
fn bad_status_codes_are_not_excluded() {
    let document = document();
    let code = &document["components"]["schemas"]["StatusCode"];
    assert_eq!(code["type"], "integer");
    assert_eq!(code["minimum"], 0);
    assert_eq!(code["maximum"], u32::MAX);
    assert_ne!(code["format"], "int32");
}

#[tokio::test]
async fn the_service_serves_it() {
    let service = Service::start();
    assert_eq!(service.get_json("/openapi.json").await, document());
}
