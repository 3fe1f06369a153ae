//! The kinds of equipment with their ports and keys, as one table.

/// Which way a stream passes a port.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash)]
pub(super) enum Direction {
    /// Into the equipment.
    In,
    /// Out of the equipment.
    Out,
}

/// How many streams a port takes.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Count {
    /// Exactly one.
    One,
    /// One or none.
    Optional,
    /// At least one.
    Many,
    /// Any number, none included.
    Any,
    /// One if the port of the same name in the other direction has one, or else
    /// none.
    Paired,
}

/// One port of a kind.
#[derive(Clone, Copy, Debug)]
pub(super) struct Port {
    /// Its name; `reheat-` stands for `reheat-1`, `reheat-2` and so on.
    pub name: &'static str,
    pub direction: Direction,
    pub count: Count,
}

/// Prefix of the numbered ports of a boiler.
pub(super) const REHEAT: &str = "reheat-";

/// One kind of equipment.
#[derive(Debug)]
pub(super) struct Row {
    pub name: &'static str,
    pub ports: &'static [Port],
    /// Keys beside `kind` and `description`.
    pub keys: &'static [&'static str],
    /// `heat-loss` may be assumed of it.
    pub has_heat_loss: bool,
    /// `holdup-change` may be assumed of it.
    pub has_holdup: bool,
}

const fn port(name: &'static str, direction: Direction, count: Count) -> Port {
    Port {
        name,
        direction,
        count,
    }
}

const fn row(name: &'static str, ports: &'static [Port], keys: &'static [&'static str]) -> Row {
    Row {
        name,
        ports,
        keys,
        has_heat_loss: false,
        has_holdup: false,
    }
}

const fn with_loss(mut row: Row) -> Row {
    row.has_heat_loss = true;
    row
}

const fn with_holdup(mut row: Row) -> Row {
    row.has_holdup = true;
    row
}

use Count::{Any, Many, One, Optional, Paired};
use Direction::{In, Out};

/// Every kind.
pub(super) static KINDS: [Row; 14] = [
    with_loss(row(
        "mixer",
        &[port("in", In, Many), port("out", Out, One)],
        &[],
    )),
    row(
        "splitter",
        &[port("in", In, One), port("out", Out, Many)],
        &[],
    ),
    with_loss(row(
        "header",
        &[port("in", In, Many), port("out", Out, Many)],
        &["well-mixed"],
    )),
    row("valve", &[port("in", In, One), port("out", Out, One)], &[]),
    row("pump", &[port("in", In, One), port("out", Out, One)], &[]),
    with_loss(row(
        "turbine",
        &[port("in", In, Many), port("out", Out, Many)],
        &[],
    )),
    with_loss(row(
        "closed-heater",
        &[
            port("steam", In, One),
            port("drain", In, Any),
            port("drain", Out, One),
            port("tube", In, One),
            port("tube", Out, One),
            port("vent", Out, Optional),
        ],
        &["drain-outlet"],
    )),
    with_holdup(with_loss(row(
        "open-heater",
        &[
            port("in", In, Many),
            port("out", Out, One),
            port("vent", Out, Optional),
        ],
        &["outlet"],
    ))),
    with_holdup(with_loss(row(
        "condenser",
        &[
            port("steam", In, Many),
            port("condensate", Out, One),
            port("cooling", In, Paired),
            port("cooling", Out, Paired),
            port("vent", Out, Optional),
        ],
        &["condensate"],
    ))),
    with_loss(row(
        "exchanger",
        &[
            port("hot", In, Paired),
            port("hot", Out, Paired),
            port("cold", In, Paired),
            port("cold", Out, Paired),
        ],
        &[],
    )),
    with_holdup(row(
        "boiler",
        &[
            port("water", In, Many),
            port("water", Out, Many),
            port(REHEAT, In, Any),
            port(REHEAT, Out, Any),
        ],
        &[],
    )),
    row("generator", &[], &["driven-by"]),
    row("shaft", &[], &["drivers", "driven"]),
    row("motor", &[], &["drives"]),
];

/// Kinds that later versions know.
pub(super) const LATER: &[&str] = &[
    "compressor",
    "fan",
    "nozzle",
    "diffuser",
    "vessel",
    "flash-vessel",
    "combustion-chamber",
    "pipe",
];

impl Direction {
    /// The name that an unnamed port of this direction has.
    pub fn name(self) -> &'static str {
        match self {
            Direction::In => "in",
            Direction::Out => "out",
        }
    }

    /// The key of a stream that joins a port of this direction.
    pub fn key(self) -> &'static str {
        match self {
            Direction::In => "to",
            Direction::Out => "from",
        }
    }

    pub fn other(self) -> Direction {
        match self {
            Direction::In => Direction::Out,
            Direction::Out => Direction::In,
        }
    }
}

impl Port {
    /// Number of streams that it needs at least, given whether the port of the
    /// same name in the other direction has any.
    pub fn least(&self, has_partner: bool) -> usize {
        match self.count {
            Count::One | Count::Many => 1,
            Count::Paired => usize::from(has_partner),
            Count::Optional | Count::Any => 0,
        }
    }

    /// Whether it takes at most one stream.
    pub fn is_single(&self) -> bool {
        match self.count {
            Count::One | Count::Optional | Count::Paired => true,
            // A reheater has one outlet and any number of inlets.
            Count::Any => self.name == REHEAT && self.direction == Direction::Out,
            Count::Many => false,
        }
    }
}

impl Row {
    /// The row of a kind.
    pub fn named(name: &str) -> Option<&'static Row> {
        KINDS.iter().find(|row| row.name == name)
    }

    /// The index of a port and its number (0 where ports of that name are not
    /// numbered).
    pub fn port(&self, name: &str, direction: Direction) -> Option<(usize, u32)> {
        let number = name
            .strip_prefix(REHEAT)
            .filter(|digits| !digits.starts_with('0') && digits.len() <= 2)
            .and_then(|digits| digits.parse::<u32>().ok());
        self.ports.iter().enumerate().find_map(|(i, port)| {
            let number = match number {
                Some(n) if port.name == REHEAT => n,
                None if port.name == name && port.name != REHEAT => 0,
                _ => return None,
            };
            (port.direction == direction).then_some((i, number))
        })
    }

    /// The port that is meant where none is named.
    pub fn unnamed_port(&self, direction: Direction) -> Option<(usize, u32)> {
        self.port(direction.name(), direction)
    }

    /// The names of the ports of one direction, for messages.
    pub fn port_names(&self, direction: Direction) -> Vec<&'static str> {
        let ports = self.ports.iter().filter(|p| p.direction == direction);
        ports
            .map(|p| if p.name == REHEAT { "reheat-1" } else { p.name })
            .collect()
    }

    /// Energy is redistributed on one side only, without work or heat: what
    /// such equipment passes on to itself in a ring is determined by nothing.
    pub fn is_passive(&self) -> bool {
        matches!(self.name, "mixer" | "splitter" | "header" | "valve")
    }
}
