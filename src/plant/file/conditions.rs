//! Conditions of service: `in-service-when` of streams, equipment and
//! assumptions, and `running-when` of the plant.
//!
//! A condition names a tag and what it has to read: a status one of some numbers
//! (`is`), a measurement more (`above`) or less (`below`) than a cut-off with a
//! unit that fits. They are read after the tags, which they name.

use super::amount::amount;
use super::heading::member;
use super::network::Network;
use super::reader::{At, Context, Fields, Shape, quoted};
use super::structure::some;
use super::tags::{STATUS, TagDraft, dimension_of};
use super::tree::Place;
use crate::plant::{Condition, Kind, Plant, Service, Signal, Test};

/// The key of a part.
const KEY: &str = "in-service-when";

/// The key of the plant.
const RUNNING: &str = "running-when";

const CONDITION: Shape = Shape {
    owner: "a condition",
    keys: &["tag", "is", "above", "below"],
};

/// How a condition looks, for messages.
const EXAMPLE: &str = "{ tag = \"ZS-601\", is = 1 } or { tag = \"FT-601\", above = \"5 t/h\" }";

/// The conditions of a file.
pub(super) struct Conditions<'n> {
    /// By stream.
    pub streams: Vec<Option<Condition>>,
    /// By equipment.
    pub equipment: Vec<Option<Condition>>,
    /// By name of the assumption.
    pub assumptions: Vec<(&'n str, Condition)>,
    /// Of the plant.
    pub running: Option<Condition>,
    /// Where those of equipment and streams stand.
    places: Vec<(Part, Place)>,
}

#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Part {
    Stream(usize),
    Equipment(usize),
}

impl<'n> Conditions<'n> {
    /// Reads every condition of a file.
    pub fn read(
        root: &Fields<'n>,
        network: &Network<'n>,
        tags: &[TagDraft<'_>],
        cx: &mut Context<'_>,
    ) -> Self {
        let mut conditions = Conditions {
            streams: vec![None; network.streams.len()],
            equipment: vec![None; network.equipment.len()],
            assumptions: Vec::new(),
            running: root.get(RUNNING).and_then(|at| condition(&at, tags, cx)),
            places: Vec::new(),
        };
        for (name, at) in carriers(root, "streams", cx) {
            let known = network.stream_id(name);
            if let (Some(found), Some(id)) = (condition(&at, tags, cx), known) {
                conditions.streams[id.0] = Some(found);
                conditions.places.push((Part::Stream(id.0), at.key));
            }
        }
        for (name, at) in carriers(root, "equipment", cx) {
            let known = network.equipment_id(name);
            if let (Some(found), Some(id)) = (condition(&at, tags, cx), known) {
                conditions.equipment[id.0] = Some(found);
                conditions.places.push((Part::Equipment(id.0), at.key));
            }
        }
        for (name, at) in carriers(root, "assumptions", cx) {
            if let Some(found) = condition(&at, tags, cx) {
                conditions.assumptions.push((name, found));
            }
        }
        conditions
    }

    /// The condition of an assumption.
    pub fn of_assumption(&self, name: &str) -> Option<Condition> {
        let mut all = self.assumptions.iter();
        let found = all.find(|(assumption, _)| *assumption == name)?;
        Some(found.1.clone())
    }

    /// Warns of equipment that goes with what is out of service, without a
    /// condition that says so.
    pub fn warn(&self, plant: &Plant, cx: &mut Context<'_>) {
        for (part, place) in &self.places {
            let mut service = Service::full(plant);
            let name = match *part {
                Part::Stream(s) => {
                    service.streams[s] = false;
                    &plant.streams[s].name
                }
                Part::Equipment(e) => {
                    service.equipment[e] = false;
                    &plant.equipment[e].name
                }
            };
            let service = service.closed(plant);
            let gone = plant.equipment.iter().enumerate().filter(|(e, item)| {
                let is_told = item.in_service_when.is_some() || *part == Part::Equipment(*e);
                !(service.equipment[*e] || is_told || follows(&item.kind))
            });
            let gone: Vec<&str> = gone.map(|(_, item)| item.name.as_str()).collect();
            if gone.is_empty() {
                continue;
            }
            let what = format!(
                "whenever `{name}` is out of service, so is what cannot be without it: {}",
                some(&gone)
            );
            let mend = format!(
                "where that is meant, give them an `{KEY}` too; else lead the flow past `{name}` \
                 from a splitter to a mixer or header"
            );
            cx.findings.warning(place, what, mend);
        }
    }
}

/// Equipment that has no streams stands still with its machines.
fn follows(kind: &Kind) -> bool {
    matches!(
        kind,
        Kind::Generator { .. } | Kind::Shaft { .. } | Kind::Motor { .. }
    )
}

/// The members of a table that have a condition, with it.
fn carriers<'n>(root: &Fields<'n>, table: &str, cx: &mut Context<'_>) -> Vec<(&'n str, At<'n>)> {
    // What is no table was told of where it was read.
    let members = root.get(table).filter(At::is_table);
    let members = members.and_then(|at| at.entries(cx, "a table"));
    let with = members.unwrap_or_default().into_iter();
    with.filter(|(_, at)| at.is_table())
        .filter_map(|(name, at)| {
            let members = at.entries(cx, "a table")?;
            let (_, found) = members.into_iter().find(|(key, _)| *key == KEY)?;
            Some((name, found))
        })
        .collect()
}

fn condition(at: &At<'_>, tags: &[TagDraft<'_>], cx: &mut Context<'_>) -> Option<Condition> {
    let fields = at.fields(cx, &CONDITION, EXAMPLE)?;
    let mend = "write tag = \"...\" with the name of a status or another tag";
    let signal = fields.require("tag", cx, mend);
    let signal = signal.and_then(|at| named(&at, tags, cx));
    let tests: Vec<(&str, At<'_>)> = ["is", "above", "below"]
        .into_iter()
        .filter_map(|key| Some((key, fields.get(key)?)))
        .collect();
    let [(key, test)] = &tests[..] else {
        let what = match &tests[..] {
            [] => "the condition says nothing of what the tag reads".to_owned(),
            _ => {
                let keys: Vec<&str> = tests.iter().map(|(key, _)| *key).collect();
                format!("the condition has {} at once", quoted(&keys))
            }
        };
        let place = tests.get(1).map_or(&at.key, |(_, second)| &second.key);
        cx.error(place, what, format!("write one test, as in {EXAMPLE}"));
        return None;
    };
    let test = match (*key, signal) {
        ("is", Some((draft, _))) if !draft.is_status => {
            let what = format!("`{}` measures, and no two values are the same", draft.name);
            let mend = "write `above` or `below` with a cut-off and its unit";
            cx.error(&test.key, what, mend);
            None
        }
        ("is", _) => one_of(test, cx),
        (_, Some((draft, _))) if draft.is_status => {
            let what = format!(
                "`{}` is a status: it has no unit to be cut off in",
                draft.name
            );
            cx.error(
                &test.key,
                what,
                "write is = 1, or a list of what it may read",
            );
            None
        }
        (key, signal) => cut_off(key, test, signal.map(|(draft, _)| draft), cx),
    };
    Some(Condition {
        signal: signal?.1,
        test: test?,
    })
}

/// The tag that a condition names.
fn named<'t, 'n>(
    at: &At<'_>,
    tags: &'t [TagDraft<'n>],
    cx: &mut Context<'_>,
) -> Option<(&'t TagDraft<'n>, Signal)> {
    let name = at.string(cx, "the name of a tag")?;
    let Some(place) = tags.iter().position(|tag| tag.name == name) else {
        let mend = cx.did_you_mean(name, tags.iter().map(|t| t.name.as_str()), || {
            format!(
                "add to [tags] {name} = {{ measures = \"{STATUS}\" }}, or name one that is there"
            )
        });
        cx.error(&at.place, format!("there is no tag `{name}`"), mend);
        return None;
    };
    let draft = &tags[place];
    let before = tags[..place].iter();
    let place = before.filter(|t| t.is_status == draft.is_status).count();
    let signal = match draft.is_status {
        true => Signal::Status(place),
        false => Signal::Tag(place),
    };
    Some((draft, signal))
}

fn one_of(at: &At<'_>, cx: &mut Context<'_>) -> Option<Test> {
    const WRITE: &str = "1, or a list such as [1, 2]";
    if !at.is_array() {
        return Some(Test::OneOf(vec![at.number(cx, WRITE)?]));
    }
    let members = at.array(cx, WRITE)?;
    if members.is_empty() {
        cx.error(&at.place, "the list is empty", format!("write {WRITE}"));
        return None;
    }
    // Each is looked at, faulty or not.
    let values: Vec<Option<f64>> = members.iter().map(|m| m.number(cx, "1")).collect();
    Some(Test::OneOf(values.into_iter().collect::<Option<_>>()?))
}

fn cut_off(
    key: &str,
    at: &At<'_>,
    tag: Option<&TagDraft<'_>>,
    cx: &mut Context<'_>,
) -> Option<Test> {
    let dimension = dimension_of(member(&tag?.at, "measures")?)?;
    let cut_off = amount(at, dimension, cx)?.internal();
    let value = tag?.tag.as_ref()?.unit.from_internal(cut_off);
    Some(match key {
        "above" => Test::Above(value),
        _ => Test::Below(value),
    })
}
