//! One piece of equipment: its kind and keys, and the streams on its ports.

use super::kinds::{Direction, KINDS, LATER, Port, Row};
use super::network::description;
use super::reader::{At, Context, Fields, Shape, check_name, quoted};
use super::tree::Place;
use crate::plant::StreamId;

/// A piece of equipment as read.
pub(super) struct EquipmentDraft<'n> {
    pub name: &'n str,
    pub place: Place,
    /// `None` where the kind is unknown, which was reported.
    pub row: Option<&'static Row>,
    /// Its keys, where it is a table.
    pub fields: Option<Fields<'n>>,
    /// Streams on its ports: (port, number, stream), in file order.
    pub joints: Vec<(usize, u32, StreamId)>,
    /// A faulty stream may belong to an inlet, to an outlet.
    pub unclear: [bool; 2],
}

const EQUIPMENT: Shape = Shape {
    owner: "a piece of equipment",
    keys: &[
        "kind",
        "description",
        "in-service-when",
        "drain-outlet",
        "outlet",
        "condensate",
        "well-mixed",
        "driven-by",
        "drivers",
        "driven",
        "drives",
    ],
};

/// Keys that every kind has, the first of the shape.
const OWN_KEYS: usize = 3;

/// How a member of the table looks, for messages.
pub(super) const EQUIPMENT_EXAMPLE: &str = "{ kind = \"turbine\" }";

impl<'n> EquipmentDraft<'n> {
    /// Reads the name, the kind and the keys of one; its streams come later.
    pub fn read(name: &'n str, at: &At<'n>, cx: &mut Context<'_>) -> Self {
        check_name(name, &['.', '/'], &at.key, cx);
        let fields = at.fields(cx, &EQUIPMENT, EQUIPMENT_EXAMPLE);
        let row = fields.as_ref().and_then(|f| kind(f, cx));
        EquipmentDraft {
            name,
            place: at.key.clone(),
            row,
            fields,
            joints: Vec::new(),
            unclear: [false; 2],
        }
    }

    /// Streams on a port of a name and direction, in file order.
    pub fn on(&self, name: &str, direction: Direction) -> Vec<StreamId> {
        let Some((port, number)) = self.row.and_then(|row| row.port(name, direction)) else {
            return Vec::new();
        };
        let joints = self.joints.iter();
        joints
            .filter(|(p, n, _)| (*p, *n) == (port, number))
            .map(|(_, _, stream)| *stream)
            .collect()
    }

    /// The port that a stream is on, in one direction.
    pub fn port_of(&self, stream: StreamId, direction: Direction) -> Option<&'static Port> {
        let row = self.row?;
        let joints = self.joints.iter();
        let mut ports = joints
            .filter(|(_, _, s)| *s == stream)
            .map(|(p, _, _)| &row.ports[*p]);
        ports.find(|p| p.direction == direction)
    }

    /// Whether a faulty stream may be the one that is missed here.
    pub fn is_unclear(&self, direction: Direction) -> bool {
        self.unclear[direction as usize]
    }

    /// Notes that a faulty stream may belong here.
    pub fn may_have(&mut self, direction: Direction) {
        self.unclear[direction as usize] = true;
    }
}

fn kind(fields: &Fields<'_>, cx: &mut Context<'_>) -> Option<&'static Row> {
    description(fields, cx);
    let names = KINDS.each_ref().map(|row| row.name);
    let all = || format!("the kinds are {}", quoted(&names));
    let at = fields.require("kind", cx, &format!("write kind = \"...\"; {}", all()))?;
    let name = at.string(cx, "\"turbine\"")?;
    let row = Row::named(name);
    if row.is_none() {
        if LATER.contains(&name) {
            let what = format!("the kind `{name}` is not available yet");
            cx.error(&at.place, what, all());
        } else {
            let mend = cx.did_you_mean(name, names, all);
            cx.error(&at.place, format!("there is no kind `{name}`"), mend);
        }
    }
    let row = row?;
    for key in &EQUIPMENT.keys[OWN_KEYS..] {
        if let Some(at) = fields.get(key).filter(|_| !row.keys.contains(key)) {
            let owners: Vec<&str> = KINDS
                .iter()
                .filter(|r| r.keys.contains(key))
                .map(|r| r.name)
                .collect();
            let what = format!("`{key}` is no key of kind `{name}`");
            cx.error(
                &at.key,
                what,
                format!("remove it; it belongs to {}", quoted(&owners)),
            );
        }
    }
    Some(row)
}

/// Reports an end that names no port of a known piece of equipment.
pub(super) fn no_port(
    name: &str,
    row: &Row,
    port: Option<&str>,
    direction: Direction,
    at: &At<'_>,
    cx: &mut Context<'_>,
) {
    let key = direction.key();
    if row.ports.is_empty() {
        let keys: Vec<String> = row.keys.iter().map(|k| format!("`{k}`")).collect();
        let what = format!("no stream can join the {} `{name}`", row.name);
        cx.error(
            &at.place,
            what,
            format!("say what it is coupled to with {}", keys.join(" and ")),
        );
        return;
    }
    let names = row.port_names(direction);
    let written: Vec<String> = names.iter().map(|p| format!("\"{name}.{p}\"")).collect();
    let choices = format!("write {key} = {}", written.join(" or "));
    let Some(port) = port else {
        let what = format!("`{name}` has several ports that this stream could join");
        cx.error(&at.place, what, choices);
        return;
    };
    let other = direction.other();
    if row.port(port, other).is_some() {
        let verb = match direction {
            Direction::In => "nothing enters by it",
            Direction::Out => "nothing leaves by it",
        };
        let what = format!(
            "`{port}` of the {} `{name}` is an {}let: {verb}",
            row.name,
            other.name()
        );
        cx.error(
            &at.place,
            what,
            format!("{choices}, or write the end as `{}`", other.key()),
        );
        return;
    }
    let what = format!("the {} `{name}` has no port `{port}`", row.name);
    let mend = cx.did_you_mean(port, names, || choices);
    cx.error(&at.place, what, mend);
}
