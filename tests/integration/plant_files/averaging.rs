//! The table `[averaging]`, and `averaging` of a tag.

use counterpoise::plant::{
    AveragingMethod, AveragingSettings, Format, Plant, TagAveraging, canonical_json, read,
};
use std::collections::BTreeMap;
use time::Duration;

use super::GOOD;
use super::cases::check;

const TAG: &str = r#"FT-201 = { measures = "mass-flow", of = "live-steam", unit = "t/h", "#;

fn plant(text: &str) -> Plant {
    let plant = read(text, Format::Toml).unwrap().plant;
    // The same by way of JSON, whose keys come in another order.
    let json = canonical_json(text, Format::Toml).unwrap().to_string();
    assert_eq!(
        named(&read(&json, Format::Json).unwrap().plant),
        named(&plant)
    );
    plant
}

/// What is said of averaging, with tags by name.
fn named(plant: &Plant) -> (AveragingSettings, Vec<&str>, BTreeMap<&str, &TagAveraging>) {
    let keys = &plant.averaging.key_tags;
    let settings = AveragingSettings {
        key_tags: Vec::new(),
        ..plant.averaging.clone()
    };
    let own = plant
        .tags
        .iter()
        .filter_map(|tag| Some((tag.name.as_str(), tag.averaging.as_ref()?)));
    (
        settings,
        keys.iter()
            .map(|&place| plant.tags[place].name.as_str())
            .collect(),
        own.collect(),
    )
}

fn settings(table: &str) -> AveragingSettings {
    plant(&format!("{GOOD}{table}")).averaging
}

#[test]
fn every_key_may_be_left_out() {
    let usual = AveragingSettings {
        period: Duration::minutes(5),
        wait: Duration::minutes(2),
        horizon: Duration::hours(24),
        key_tags: Vec::new(),
        unsteady_allowed: 0.1,
        usual: TagAveraging {
            method: AveragingMethod::Stepped,
            stale_after: Duration::minutes(15),
            stuck_after: None,
            spikes: Some((5, 5.0)),
            least_coverage: 0.5,
            steady_significance: 0.001,
            steady_within: 0.25,
        },
    };
    assert_eq!(settings(""), usual);
    assert_eq!(settings("[averaging]\n"), usual);
    let changed = settings("[averaging]\nwait = \"90 s\"\nspikes = { deviations = 4 }\n");
    assert_eq!(changed.wait, Duration::seconds(90));
    assert_eq!(changed.usual.spikes, Some((5, 4.0)));
    // Whoever waits for longer than the usual horizon has one as long.
    assert_eq!(
        settings("[averaging]\nwait = \"2 d\"\n").horizon,
        Duration::days(2)
    );
}

#[test]
fn every_key_is_read() {
    let table = "[averaging]\nperiod = \"0.25 h\"\nwait = \"0 s\"\nhorizon = \"7 d\"\n\
                 key-tags = [\"PT-201\", \"FT-201\"]\nunsteady-allowed = \"25 %\"\nmethod = \"linear\"\n\
                 stale-after = \"1 h\"\nstuck-after = \"2 d\"\nspikes = false\nleast-coverage = 0.75\n\
                 steady-significance = \"1 %\"\nsteady-within = 0\n";
    let plant = plant(&format!("{GOOD}{table}"));
    let place = |name: &str| plant.tags.iter().position(|tag| tag.name == name).unwrap();
    let expected = AveragingSettings {
        period: Duration::minutes(15),
        wait: Duration::ZERO,
        horizon: Duration::days(7),
        key_tags: vec![place("PT-201"), place("FT-201")],
        unsteady_allowed: 0.25,
        usual: TagAveraging {
            method: AveragingMethod::Linear,
            stale_after: Duration::hours(1),
            stuck_after: Some(Duration::days(2)),
            spikes: None,
            least_coverage: 0.75,
            steady_significance: 0.01,
            steady_within: 0.0,
        },
    };
    assert_eq!(plant.averaging, expected);
    assert!(plant.tags.iter().all(|tag| tag.averaging.is_none()));
}

#[test]
fn a_tag_says_what_is_different_about_it() {
    let own = r#"averaging = { method = "sum", stuck-after = false }, "#;
    let file = GOOD.replace(TAG, &format!("{TAG}{own}"));
    assert_ne!(file, GOOD);
    let table = "[averaging]\nstale-after = \"1 h\"\nstuck-after = \"1 h\"\n";
    let plant = plant(&format!("{file}{table}"));
    let tag = plant.tags.iter().find(|tag| tag.name == "FT-201").unwrap();
    let expected = TagAveraging {
        method: AveragingMethod::Sum,
        stale_after: Duration::hours(1),
        stuck_after: None,
        ..TagAveraging::default()
    };
    assert_eq!(tag.averaging, Some(expected));
}

#[test]
fn faults() {
    let with = |table: &str| {
        let holdup = r#"holdup = { value-of = "holdup-change", of = "deaerator", value = "0 kg/s", uncertainty = { absolute = "1 t/h" } }"#;
        format!("- {holdup}\n+ {holdup}\n+ [averaging]\n{table}")
    };
    for table in [
        "+ period = \"7 min\"\n! /averaging/period | \"7 min\" | no whole number of periods of 7 min | \"400 s\" or \"432 s\"",
        "+ period = \"2 d\"\n! /averaging/period | \"2 d\" | 2 d is out of bounds | 1 s to 1 d",
        "+ period = 5\n! /averaging/period | 5 | a number without a unit | \"5 min\"",
        "+ period = \"5 minutes\"\n! /averaging/period | \"5 minutes\" | `minutes` is no unit of time | \"5 min\"",
        "+ period = \"5 bar\"\n! /averaging/period | \"5 bar\" | `bar` is no unit of time | s, min, h or d",
        "+ period = \"1.5 s\"\n! /averaging/period | \"1.5 s\" | no whole number of seconds | \"2 s\"",
        "+ wait = \"-1 s\"\n! /averaging/wait | \"-1 s\" | out of bounds | 0 s to 31 d",
        "+ wait = \"2 h\"\n+ horizon = \"1 h\"\n! /averaging/horizon | \"1 h\" | waited for longer (2 h) | no shorter than `wait`",
        "+ horizon = \"1 a\"\n! /averaging/horizon | \"1 a\" | `a` is no unit of time | s, min, h or d",
        "+ key-tags = [\"FT-20l\"]\n! /averaging/key-tags/0 | \"FT-20l\" | there is no tag `FT-20l` | did you mean `FT-201`?",
        "+ key-tags = [\"FT-201\", \"FT-201\"]\n! /averaging/key-tags/1 | \"FT-201\"] | stands twice | remove one",
        "+ key-tags = \"FT-201\"\n! /averaging/key-tags | \"FT-201\" | an array is needed | [\"FT-201\"",
        "+ unsteady-allowed = \"110 %\"\n! /averaging/unsteady-allowed | \"110 %\" | a part of a whole | 0 % to 100 %",
        "+ method = \"steped\"\n! /averaging/method | \"steped\" | no method `steped` | did you mean `stepped`?",
        "+ stale-after = \"0 s\"\n! /averaging/stale-after | \"0 s\" | out of bounds | 1 s to 31 d",
        "+ stuck-after = true\n! /averaging/stuck-after | true | a string is needed | \"1 min\"",
        "+ spikes = { neighbours = 2.5 }\n! /averaging/spikes/neighbours | 2.5 | no number of samples | whole number",
        "+ spikes = { neighbours = 1 }\n! /averaging/spikes/neighbours | 1 | out of bounds | 2 to 100",
        "+ spikes = { deviation = 3 }\n! /averaging/spikes/deviation | deviation | no key of the spike filter | `deviations`?",
        "+ least-coverage = -0.1\n! /averaging/least-coverage | -0.1 | a part of a whole | \"50 %\"",
        "+ steady-significance = 0\n! /averaging/steady-significance | 0 | as rarely or often | \"0.1 %\"",
        "+ steady-within = \"11\"\n! /averaging/steady-within | \"11\" | has no unit | write the unit",
        "+ perod = \"5 min\"\n! /averaging/perod | perod | no key of the averaging | did you mean `period`?",
        // Every fault at once.
        "+ period = \"0 s\"\n+ method = 1\n+ spikes = 3\n\
         ! /averaging/period | \"0 s\" | out of bounds | 1 s\n\
         ! /averaging/method | 1 | a string is needed | \"stepped\"\n\
         ! /averaging/spikes | 3 | a table is needed | neighbours",
    ] {
        check(&with(table));
    }
}

#[test]
fn faults_of_a_tag() {
    for (own, fault) in [
        (
            "{ method = \"mean\" }",
            "! /tags/FT-201/averaging/method | \"mean\" | no method `mean` | one of",
        ),
        (
            "{ period = \"5 min\" }",
            "! /tags/FT-201/averaging/period | period | no key of a tag's averaging | the keys are",
        ),
        (
            "3",
            "! /tags/FT-201/averaging | 3 | a table is needed | method",
        ),
    ] {
        check(&format!("- {TAG}\n+ {TAG}averaging = {own}, \n{fault}"));
    }
}
