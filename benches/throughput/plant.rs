//! A plant with 300 tags, and its batches: the demo plant three times over, and
//! twelve second transmitters.

use counterpoise::demo;
use counterpoise::plant::{self, Format};
use serde_json::{Map, Value, json};
use time::format_description::well_known::Rfc3339;
use time::macros::datetime;

/// Copies of the demo plant.
const COPIES: usize = 3;

/// Tags that get a second transmitter.
const SECOND: usize = 12;

/// Two streams and a mixer, none of whose tags the batches have.
pub const SMALL: &str = r#"
plant = "string"
title = "Two streams and a mixer"
[streams]
first  = { fluid = "water", to = "mix" }
second = { fluid = "water", to = "mix" }
both   = { fluid = "water", from = "mix" }
[equipment]
mix = { kind = "mixer" }
[tags]
F-1 = { measures = "mass-flow", of = "first",  unit = "t/h", uncertainty = { of-reading = "1 %" } }
F-2 = { measures = "mass-flow", of = "second", unit = "t/h", uncertainty = { of-reading = "1 %" } }
F-3 = { measures = "mass-flow", of = "both",   unit = "t/h", uncertainty = { of-reading = "1 %" } }
"#;

/// Batches of the day that are strung together: the morning, when nothing is wrong.
const MORNING: usize = 60;

/// Bodies of batches, as many as are wanted.
pub struct Batches {
    /// The plant file, as JSON.
    pub plant: String,
    readings: Vec<String>,
    tags: usize,
}

impl Batches {
    pub fn new() -> Batches {
        let demo = plant::canonical_json(demo::plant_file(), Format::Toml).expect("the demo plant");
        let plant = strung(&demo);
        let tags = plant["tags"].as_object().expect("tags").len();
        let day = include_str!("../../fixtures/demo/batches.ndjson").lines();
        let day: Vec<Value> = day
            .take(MORNING)
            .map(|line| serde_json::from_str(line).expect("JSON"))
            .collect();
        let readings = (0..MORNING).map(|n| readings(&day, n)).collect();
        Batches {
            plant: plant.to_string(),
            readings,
            tags,
        }
    }

    pub fn tags(&self) -> usize {
        self.tags
    }

    /// A batch of its own name and minute.
    pub fn body(&self, number: usize) -> String {
        let start = datetime!(2001-01-01 0:00 UTC) + time::Duration::minutes(number as i64);
        let end = start + time::Duration::minutes(1);
        let text = |time: time::OffsetDateTime| time.format(&Rfc3339).expect("a time");
        format!(
            r#"{{"batch":"b{number}","start":"{}","end":"{}","readings":{}}}"#,
            text(start),
            text(end),
            self.readings[number % self.readings.len()],
        )
    }
}

/// Every eighth tag of the first copy, in the order of names.
fn has_second(position: usize) -> bool {
    position.is_multiple_of(8) && position / 8 < SECOND
}

fn strung(demo: &Value) -> Value {
    let mut whole = demo.clone();
    whole["plant"] = "string".into();
    for table in ["streams", "equipment", "tags", "assumptions"] {
        let members = demo[table].as_object().expect("a table");
        let mut strung = Map::new();
        for copy in 0..COPIES {
            for (position, (name, member)) in members.iter().enumerate() {
                let member = renamed(member, copy);
                if table == "tags" && copy == 0 && has_second(position) {
                    strung.insert(format!("{name}-B"), member.clone());
                }
                strung.insert(format!("u{copy}-{name}"), member);
            }
        }
        whole[table] = Value::Object(strung);
    }
    whole
}

/// Names that others are called by.
const REFERENCES: [&str; 8] = [
    "from",
    "to",
    "of",
    "driven-by",
    "drives",
    "drivers",
    "driven",
    "between",
];

fn renamed(member: &Value, copy: usize) -> Value {
    let mut member = member.clone();
    for key in REFERENCES {
        match member.get_mut(key) {
            Some(Value::String(name)) => *name = format!("u{copy}-{name}"),
            Some(Value::Array(names)) => {
                for name in names {
                    *name = format!("u{copy}-{}", name.as_str().expect("a name")).into();
                }
            }
            _ => {}
        }
    }
    member
}

/// Readings of one batch: each copy takes another batch of the day.
fn readings(day: &[Value], n: usize) -> String {
    let mut readings = Vec::new();
    for copy in 0..COPIES {
        let batch = &day[(n + 17 * copy) % day.len()];
        for reading in batch["readings"].as_array().expect("readings") {
            let named = |name: String| json!({"tag": name, "value": reading["value"]});
            let tag = reading["tag"].as_str().expect("a tag");
            readings.push(named(format!("u{copy}-{tag}")));
        }
    }
    // A second transmitter reads what the first reads.
    let tags = day[n]["readings"].as_array().expect("readings");
    let mut names: Vec<&Value> = tags.iter().collect();
    names.sort_by_key(|reading| reading["tag"].as_str().expect("a tag").to_owned());
    for (position, reading) in names.into_iter().enumerate() {
        if has_second(position) {
            let tag = reading["tag"].as_str().expect("a tag");
            readings.push(json!({"tag": format!("{tag}-B"), "value": reading["value"]}));
        }
    }
    Value::Array(readings).to_string()
}
