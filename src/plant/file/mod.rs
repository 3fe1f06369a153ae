//! Reading plant files: TOML or JSON, every fault at once.
//!
//! Both formats become one neutral tree with places ([`tree`]). From it streams
//! and equipment are read as a network ([`network`], [`joints`]), then tags and
//! assumptions against the network, then the whole is looked at
//! ([`structure`], [`warnings`]). Nothing stops at a fault; what a faulty entry
//! was probably meant to be is remembered, so that one fault does not cause
//! others elsewhere. A [`Plant`] is made only from a file without errors.

mod alarms;
mod amount;
mod assumptions;
mod averaging;
mod conditions;
mod durations;
mod equipment;
mod fault;
mod heading;
mod joints;
mod json;
mod kinds;
mod network;
mod parts;
mod portable;
mod pressures;
mod reader;
mod retention;
mod sides;
mod structure;
mod suggest;
mod tags;
mod targets;
mod terms;
mod toml;
mod tree;
mod warnings;

pub use fault::{Fault, Faults, Severity, render};

use self::conditions::Conditions;
use self::heading::Heading;
use self::network::{End, Network};
use self::reader::{At, Context};
use self::tree::Node;
use super::{Assumption, Equipment, EquipmentId, Kind, Plant, Stream};

/// How a plant file is written.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Format {
    /// TOML 1.1.
    Toml,
    /// JSON (RFC 8259).
    Json,
}

/// An accepted plant file.
#[derive(Clone, Debug, PartialEq)]
pub struct PlantFile {
    /// The plant.
    pub plant: Plant,
    /// What works and will disappoint, in the order of the file.
    pub warnings: Vec<Fault>,
}

/// Largest plant file that is read, in bytes.
pub const MAX_BYTES: usize = 32 << 20;

/// Reads a plant file.
///
/// # Errors
///
/// Every fault of a file that cannot work, its warnings among them, in the
/// order of the file.
pub fn read(text: &str, format: Format) -> Result<PlantFile, Faults> {
    let mut cx = Context::new(text);
    let plant = parse(text, format, &mut cx).and_then(|root| plant(&root, &mut cx));
    match plant {
        Some(plant) if cx.findings.errors() == 0 => Ok(PlantFile {
            plant,
            warnings: cx.findings.into_faults(),
        }),
        _ => Err(Faults(cx.findings.into_faults())),
    }
}

/// The structure of a plant file as JSON with sorted keys.
///
/// Two files have equal structures if they differ only in format, white space,
/// comments, order of keys and members, or in the spelling of numbers.
///
/// # Errors
///
/// The faults of a text that is not TOML or JSON; what the file says is not
/// looked at.
pub fn canonical_json(text: &str, format: Format) -> Result<serde_json::Value, Faults> {
    let mut cx = Context::new(text);
    match parse(text, format, &mut cx) {
        Some(root) if cx.findings.errors() == 0 => Ok(root.to_json()),
        _ => Err(Faults(cx.findings.into_faults())),
    }
}

fn parse(text: &str, format: Format, cx: &mut Context<'_>) -> Option<Node> {
    if text.len() > MAX_BYTES {
        let what = format!("the file has {} bytes", text.len());
        cx.error(
            &tree::Place::file(),
            what,
            format!("at most {MAX_BYTES} are read"),
        );
        return None;
    }
    match format {
        Format::Toml => toml::read(text, &mut cx.findings),
        Format::Json => json::read(text, &mut cx.findings),
    }
}

fn plant(root: &Node, cx: &mut Context<'_>) -> Option<Plant> {
    let root = At::root(root).fields(cx, &heading::PLANT, "a table")?;
    let heading = Heading::read(&root, cx);
    let network = Network::read(&root, cx);
    let kinds = joints::kinds(&network, cx);
    let mut tags = tags::read(&root, &network, cx);
    let averaging = averaging::read(&root, &mut tags, cx);
    let assumptions = assumptions::read(&root, &network, &tags, cx);
    let conditions = Conditions::read(&root, &network, &tags, cx);
    let alarms = alarms::read(&root, cx);
    let portable = portable::read(&root, cx);
    let retention = retention::read(&root, averaging.as_ref(), cx);
    heading.check_references(&tags, &assumptions, cx);
    structure::check(&network, &kinds, &tags, &assumptions, cx);
    warnings::losses(&network, &assumptions, cx);
    if cx.findings.errors() > 0 {
        return None;
    }
    let (statuses, measuring): (Vec<_>, Vec<_>) = tags.iter().partition(|t| t.is_status);
    let plant = Plant {
        name: heading.name?,
        title: heading.title?,
        barometer: heading.barometer.model(),
        uncertain_factor: heading.uncertain_factor?,
        confidence: heading.confidence?,
        robust_start: heading.robust_start?,
        streams: streams(&network, &conditions),
        equipment: equipment(&network, kinds, &conditions)?,
        tags: measuring
            .iter()
            .map(|t| t.tag.clone())
            .collect::<Option<_>>()?,
        assumptions: assumptions
            .iter()
            .map(|a| conditional(a.assumption.clone(), &conditions))
            .chain(heading.barometer.assumption().map(Some))
            .collect::<Option<_>>()?,
        alarms: alarms?,
        portable: portable?,
        statuses: statuses
            .iter()
            .map(|t| t.status.clone())
            .collect::<Option<_>>()?,
        running_when: conditions.running.clone(),
        averaging: averaging?,
        retention: retention?,
    };
    let places = warnings::Places {
        streams: network.streams.iter().map(|s| &s.place).collect(),
        tags: measuring.iter().map(|t| &t.at.key).collect(),
    };
    warnings::structural(&plant, &places, cx);
    conditions.warn(&plant, cx);
    Some(plant)
}

fn conditional(assumption: Option<Assumption>, conditions: &Conditions<'_>) -> Option<Assumption> {
    let mut assumption = assumption?;
    assumption.in_service_when = conditions.of_assumption(&assumption.name);
    Some(assumption)
}

fn streams(network: &Network<'_>, conditions: &Conditions<'_>) -> Vec<Stream> {
    let joined = |end| match end {
        End::Joined(EquipmentId(id), _, _) => Some(EquipmentId(id)),
        End::Edge | End::Unclear => None,
    };
    let pairs = network.streams.iter().zip(&conditions.streams);
    let streams = pairs.map(|(s, condition)| Stream {
        name: s.name.to_owned(),
        from: joined(s.from),
        to: joined(s.to),
        non_negative: s.non_negative,
        normally_closed: s.normally_closed,
        in_service_when: condition.clone(),
    });
    streams.collect()
}

fn equipment(
    network: &Network<'_>,
    kinds: Vec<Option<Kind>>,
    conditions: &Conditions<'_>,
) -> Option<Vec<Equipment>> {
    let pairs = network.equipment.iter().zip(kinds);
    pairs
        .zip(&conditions.equipment)
        .map(|((draft, kind), condition)| {
            Some(Equipment {
                name: draft.name.to_owned(),
                kind: kind?,
                in_service_when: condition.clone(),
            })
        })
        .collect()
}
