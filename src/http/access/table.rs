//! Which scope each route needs: one table, and what is not in it is refused.
//!
//! A route with `{plant}` in its template is bound to that plant: a token that
//! does not reach the plant is told what it would be told if there were no such
//! plant. The routes that are open tell nothing of any plant.

use crate::access::Scope;
use axum::http::Method;

/// What a route needs.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(in crate::http) enum Need {
    /// Nothing.
    Open,
    /// A token with this scope.
    Scope(Scope),
}

use Need::Open;

const SEND: Need = Need::Scope(Scope::Send);
const READ: Need = Need::Scope(Scope::Read);
const OPERATE: Need = Need::Scope(Scope::Operate);
const ADMINISTER: Need = Need::Scope(Scope::Administer);

/// Method, template as in the OpenAPI document, and what it needs.
#[rustfmt::skip]
pub(in crate::http) const ROUTES: &[(&str, &str, Need)] = &[
    ("GET", "/livez", Open),
    ("GET", "/readyz", Open),
    ("GET", "/metrics", READ),
    ("GET", "/v1/audit", ADMINISTER),
    ("GET", "/v1/plants", READ),
    ("GET", "/v1/plants/{plant}", READ),
    ("PUT", "/v1/plants/{plant}", ADMINISTER),
    ("GET", "/v1/plants/{plant}/accusations", READ),
    ("POST", "/v1/plants/{plant}/accusations/{id}/closing", OPERATE),
    ("GET", "/v1/plants/{plant}/accusations/record", READ),
    ("POST", "/v1/plants/{plant}/again", OPERATE),
    ("GET", "/v1/plants/{plant}/alarms", READ),
    ("GET", "/v1/plants/{plant}/alarms/events", READ),
    ("POST", "/v1/plants/{plant}/alarms/{id}/acknowledge", OPERATE),
    ("POST", "/v1/plants/{plant}/alarms/{id}/remove-from-service", OPERATE),
    ("POST", "/v1/plants/{plant}/alarms/{id}/return-to-service", OPERATE),
    ("POST", "/v1/plants/{plant}/alarms/{id}/shelve", OPERATE),
    ("POST", "/v1/plants/{plant}/alarms/{id}/unshelve", OPERATE),
    ("GET", "/v1/plants/{plant}/assessment", READ),
    ("GET", "/v1/plants/{plant}/backfills", READ),
    ("GET", "/v1/plants/{plant}/backfills/{backfill}", READ),
    ("POST", "/v1/plants/{plant}/backfills/{backfill}", SEND),
    ("GET", "/v1/plants/{plant}/batches", READ),
    ("POST", "/v1/plants/{plant}/batches", SEND),
    ("GET", "/v1/plants/{plant}/batches/{batch}", READ),
    ("POST", "/v1/plants/{plant}/batches/{batch}/again", OPERATE),
    ("GET", "/v1/plants/{plant}/batches/{batch}/field-readings", READ),
    ("POST", "/v1/plants/{plant}/batches/{batch}/field-readings", OPERATE),
    ("GET", "/v1/plants/{plant}/batches/{batch}/influences", READ),
    ("GET", "/v1/plants/{plant}/batches/{batch}/versions", READ),
    ("GET", "/v1/plants/{plant}/batches/{batch}/versions/{version}", READ),
    ("GET", "/v1/plants/{plant}/by-hand", READ),
    ("POST", "/v1/plants/{plant}/by-hand", OPERATE),
    ("POST", "/v1/plants/{plant}/by-hand/{id}/end", OPERATE),
    ("GET", "/v1/plants/{plant}/means", READ),
    ("POST", "/v1/plants/{plant}/readings", SEND),
    ("GET", "/v1/plants/{plant}/replays", READ),
    ("POST", "/v1/plants/{plant}/replays", OPERATE),
    ("GET", "/v1/plants/{plant}/replays/{replay}", READ),
    ("DELETE", "/v1/plants/{plant}/replays/{replay}", OPERATE),
    ("GET", "/v1/plants/{plant}/replays/{replay}/batches", READ),
    ("GET", "/v1/plants/{plant}/replays/{replay}/comparison", READ),
    ("GET", "/v1/plants/{plant}/series", READ),
];

/// What the table says of a request.
#[derive(Debug, PartialEq, Eq)]
pub(in crate::http) enum Ruling {
    /// This is what it needs.
    Needs(Need),
    /// The route does not take this method; it takes these.
    OtherMethod(String),
    /// The route is not in the table.
    Unlisted,
}

/// Looks a route up. What is answered to `GET` is answered to `HEAD` as well.
pub(in crate::http) fn ruling(method: &Method, template: &str) -> Ruling {
    let method = match *method {
        Method::HEAD => "GET",
        _ => method.as_str(),
    };
    let rows = ROUTES.iter().filter(|row| row.1 == template);
    let mut methods: Vec<&str> = Vec::new();
    for (listed, _, need) in rows {
        if *listed == method {
            return Ruling::Needs(*need);
        }
        methods.push(listed);
        if *listed == "GET" {
            methods.push("HEAD");
        }
    }
    if methods.is_empty() {
        Ruling::Unlisted
    } else {
        Ruling::OtherMethod(methods.join(","))
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use std::collections::BTreeSet;

    /// A route that is added without a line here is refused, and this fails.
    #[test]
    fn the_table_is_that_of_the_document() {
        let document = serde_json::to_value(crate::http::document()).expect("JSON");
        let paths = document["paths"].as_object().expect("paths").iter();
        let described = paths.flat_map(|(template, item)| {
            let methods = item.as_object().expect("methods").keys();
            methods.map(move |method| format!("{} {template}", method.to_uppercase()))
        });
        let described: BTreeSet<String> = described.collect();
        let listed = ROUTES.iter().map(|(m, t, _)| format!("{m} {t}"));
        let listed: BTreeSet<String> = listed.collect();
        assert_eq!(listed.len(), ROUTES.len(), "a route stands twice");
        assert_eq!(listed, described);
    }

    #[test]
    fn routes_of_a_plant_name_it_as_the_guard_looks_for_it() {
        for (_, template, need) in ROUTES {
            let of_a_plant = template.starts_with("/v1/plants/");
            assert_eq!(template.contains("/{plant}"), of_a_plant, "{template}");
            assert!(!template.starts_with("/v1") || *need != Open, "{template}");
        }
    }

    #[test]
    fn methods_are_told_apart() {
        let plant = "/v1/plants/{plant}";
        for (method, need) in [
            (Method::GET, READ),
            (Method::HEAD, READ),
            (Method::PUT, ADMINISTER),
        ] {
            assert_eq!(ruling(&method, plant), Ruling::Needs(need));
        }
        let others = Ruling::OtherMethod("GET,HEAD,PUT".to_owned());
        assert_eq!(ruling(&Method::DELETE, plant), others);
        assert_eq!(ruling(&Method::GET, "/v1/secrets"), Ruling::Unlisted);
    }
}
