//! Streams and equipment: names, ends, and which stream is on which port.

use std::collections::HashMap;

use super::equipment::{EQUIPMENT_EXAMPLE, EquipmentDraft, no_port};
use super::kinds::Direction;
use super::reader::{At, Context, Fields, Shape, check_name};
use super::tree::Place;
use crate::plant::{EquipmentId, StreamId};

/// One end of a stream.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum End {
    /// The plant's edge.
    Edge,
    /// A port: index in the kind's table, and its number.
    Joined(EquipmentId, usize, u32),
    /// A fault was reported.
    Unclear,
}

/// A stream as read.
pub(super) struct StreamDraft<'n> {
    pub name: &'n str,
    pub place: Place,
    pub from: End,
    pub to: End,
    pub non_negative: bool,
    pub normally_closed: bool,
}

/// Streams and equipment of a file, faulty or not.
pub(super) struct Network<'n> {
    pub streams: Vec<StreamDraft<'n>>,
    pub equipment: Vec<EquipmentDraft<'n>>,
    stream_ids: HashMap<&'n str, StreamId>,
    equipment_ids: HashMap<&'n str, EquipmentId>,
}

/// Most streams, or pieces of equipment, or tags, or assumptions of a plant.
pub(super) const MAX_MEMBERS: usize = 20_000;

const STREAM: Shape = Shape {
    owner: "a stream",
    keys: &[
        "fluid",
        "from",
        "to",
        "non-negative",
        "normally-closed",
        "in-service-when",
        "description",
    ],
};

const STREAM_EXAMPLE: &str = "{ fluid = \"water\", from = \"boiler.water\", to = \"turbine\" }";

impl<'n> Network<'n> {
    /// Reads the tables `streams` and `equipment`.
    pub fn read(root: &Fields<'n>, cx: &mut Context<'_>) -> Network<'n> {
        let equipment = section(root, "equipment", EQUIPMENT_EXAMPLE, cx);
        let streams = section(root, "streams", STREAM_EXAMPLE, cx);
        let mut network = Network {
            stream_ids: ids(&streams, StreamId),
            equipment_ids: ids(&equipment, EquipmentId),
            streams: Vec::new(),
            equipment: Vec::new(),
        };
        for (name, at) in &equipment {
            network.equipment.push(EquipmentDraft::read(name, at, cx));
        }
        for (name, at) in &streams {
            let stream = network.stream(name, at, cx);
            network.streams.push(stream);
        }
        for (name, at) in root.get("streams").iter().flat_map(At::repeated) {
            network.repeated_stream(name, &at, cx);
        }
        network.join();
        network
    }

    /// The stream of a name.
    pub fn stream_id(&self, name: &str) -> Option<StreamId> {
        self.stream_ids.get(name).copied()
    }

    /// The equipment of a name.
    pub fn equipment_id(&self, name: &str) -> Option<EquipmentId> {
        self.equipment_ids.get(name).copied()
    }

    pub fn stream_names(&self) -> impl Iterator<Item = &'n str> {
        self.streams.iter().map(|s| s.name)
    }

    pub fn equipment_names(&self) -> impl Iterator<Item = &'n str> {
        self.equipment.iter().map(|e| e.name)
    }

    pub fn draft(&self, id: EquipmentId) -> &EquipmentDraft<'n> {
        &self.equipment[id.0]
    }

    pub fn stream_name(&self, id: StreamId) -> &'n str {
        self.streams[id.0].name
    }

    fn stream(&mut self, name: &'n str, at: &At<'n>, cx: &mut Context<'_>) -> StreamDraft<'n> {
        check_name(name, &['.', '/'], &at.key, cx);
        if name == "barometer" {
            let what = "`barometer` is the name of the atmospheric pressure";
            cx.error(&at.key, what, "give the stream another name");
        }
        let mut stream = StreamDraft {
            name,
            place: at.key.clone(),
            from: End::Unclear,
            to: End::Unclear,
            non_negative: false,
            normally_closed: false,
        };
        let Some(fields) = at.fields(cx, &STREAM, STREAM_EXAMPLE) else {
            return stream;
        };
        fluid(&fields, cx);
        description(&fields, cx);
        if let Some(flag) = fields.get("non-negative") {
            stream.non_negative = flag.boolean(cx).unwrap_or(false);
        }
        if let Some(flag) = fields.get("normally-closed") {
            stream.normally_closed = flag.boolean(cx).unwrap_or(false);
        }
        let from = fields.get("from");
        let to = fields.get("to");
        if from.is_none() && to.is_none() {
            let what = format!("the stream `{name}` joins nothing");
            let mend = "write `from` or `to`, or both: one of them may be left out, where the \
                        stream crosses the plant's edge";
            cx.error(&at.key, what, mend);
            return stream;
        }
        stream.from = from.map_or(End::Edge, |at| self.end(&at, Direction::Out, cx));
        stream.to = to
            .as_ref()
            .map_or(End::Edge, |at| self.end(at, Direction::In, cx));
        if let Some(to) = to {
            self.check_loop(&mut stream, &to, cx);
        }
        stream
    }

    /// A stream under a name that is taken: it may be what an equipment misses.
    fn repeated_stream(&mut self, name: &'n str, at: &At<'n>, cx: &mut Context<'_>) {
        if !at.is_table() {
            // Its ends are lost, and could be anywhere.
            for draft in &mut self.equipment {
                draft.unclear = [true; 2];
            }
            return;
        }
        let stream = self.stream(name, at, cx);
        for (end, direction) in [(stream.from, Direction::Out), (stream.to, Direction::In)] {
            if let End::Joined(id, ..) = end {
                self.equipment[id.0].may_have(direction);
            }
        }
    }

    /// Reads `equipment` or `equipment.port`.
    fn end(&mut self, at: &At<'n>, direction: Direction, cx: &mut Context<'_>) -> End {
        let Some(text) = at.string(cx, "a name, such as \"heater-6.steam\"") else {
            return End::Unclear;
        };
        let (name, port) = match text.split_once('.') {
            Some((name, port)) => (name, Some(port)),
            None => (text, None),
        };
        let Some(id) = self.equipment_id(name) else {
            return self.unknown_end(name, at, direction, cx);
        };
        let draft = &mut self.equipment[id.0];
        let Some(row) = draft.row else {
            return End::Unclear;
        };
        let found = match port {
            Some(port) => row.port(port, direction),
            None => row.unnamed_port(direction),
        };
        match found {
            Some((index, number)) => End::Joined(id, index, number),
            None => {
                draft.may_have(direction);
                no_port(draft.name, row, port, direction, at, cx);
                End::Unclear
            }
        }
    }

    fn unknown_end(
        &mut self,
        name: &str,
        at: &At<'n>,
        direction: Direction,
        cx: &mut Context<'_>,
    ) -> End {
        let meant = cx.suggester.close(name, self.equipment_names());
        for name in &meant {
            if let Some(id) = self.equipment_id(name) {
                self.equipment[id.0].may_have(direction);
            }
        }
        let what = format!("there is no equipment `{name}`");
        let mend = match meant.first() {
            Some(meant) => format!("did you mean `{meant}`?"),
            None if self.stream_id(name).is_some() => {
                format!("`{name}` is a stream: name the equipment that this one joins")
            }
            None => {
                format!("add `{name}` to [equipment], or leave the key out at the plant's edge")
            }
        };
        cx.error(&at.place, what, mend);
        End::Unclear
    }

    /// A stream from a side of a piece of equipment back to that side goes
    /// nowhere. From one side of a boiler or exchanger to another it may go.
    fn check_loop(&mut self, stream: &mut StreamDraft<'n>, to: &At<'n>, cx: &mut Context<'_>) {
        let (End::Joined(a, out, m), End::Joined(b, into, n)) = (stream.from, stream.to) else {
            return;
        };
        let Some(row) = self.draft(a).row.filter(|_| a == b) else {
            return;
        };
        let sides_differ = (row.ports[out].name, m) != (row.ports[into].name, n);
        if sides_differ && matches!(row.name, "boiler" | "exchanger") {
            return;
        }
        let name = self.draft(a).name;
        cx.error(
            &to.place,
            format!(
                "the stream `{}` goes in a circle, from `{name}` to `{name}`",
                stream.name
            ),
            "lead it from or to other equipment, or remove it",
        );
        stream.from = End::Unclear;
        stream.to = End::Unclear;
        self.equipment[a.0].may_have(Direction::In);
        self.equipment[a.0].may_have(Direction::Out);
    }

    fn join(&mut self) {
        for (i, stream) in self.streams.iter().enumerate() {
            for end in [stream.to, stream.from] {
                match end {
                    End::Joined(id, port, number) => {
                        self.equipment[id.0]
                            .joints
                            .push((port, number, StreamId(i)));
                    }
                    End::Edge | End::Unclear => {}
                }
            }
        }
    }
}

/// The members of a table of the file's top level.
pub(super) fn section<'n>(
    root: &Fields<'n>,
    key: &str,
    example: &str,
    cx: &mut Context<'_>,
) -> Vec<(&'n str, At<'n>)> {
    let Some(at) = root.get(key) else {
        let what = format!("there is no [{key}]");
        cx.error(
            &root.place,
            what,
            format!("add a table [{key}] with members such as name = {example}"),
        );
        return Vec::new();
    };
    let members = at
        .entries(cx, &format!("a table [{key}]"))
        .unwrap_or_default();
    if members.is_empty() && at.is_table() {
        let what = format!("[{key}] is empty");
        cx.error(
            &at.key,
            what,
            format!("add members such as name = {example}"),
        );
    }
    if members.len() > MAX_MEMBERS {
        let what = format!("[{key}] has {} members", members.len());
        cx.error(
            &at.key,
            what,
            format!("at most {MAX_MEMBERS} are possible: divide the plant"),
        );
        return Vec::new();
    }
    members
}

/// Reads the optional text for people.
pub(super) fn description(fields: &Fields<'_>, cx: &mut Context<'_>) {
    if let Some(at) = fields.get("description") {
        at.string(cx, "a text in quotes");
    }
}

fn ids<'n, I>(members: &[(&'n str, At<'n>)], id: fn(usize) -> I) -> HashMap<&'n str, I> {
    let names = members.iter().enumerate();
    names.map(|(i, (name, _))| (*name, id(i))).collect()
}

fn fluid(fields: &Fields<'_>, cx: &mut Context<'_>) {
    let Some(at) = fields.require("fluid", cx, "write fluid = \"water\"") else {
        return;
    };
    let Some(fluid) = at.string(cx, "\"water\"") else {
        return;
    };
    if fluid != "water" {
        let what = format!("the fluid `{fluid}` is not available yet");
        cx.error(&at.place, what, "only \"water\" is (water and steam)");
    }
}
