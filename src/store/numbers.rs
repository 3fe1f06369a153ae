//! The numbers of a report as one vector of doubles, and which is which.
//!
//! A series of a few tags over many batches must not parse whole reports: a
//! report of a hundred tags is some 60 kB of JSON, its vector some 10 kB that
//! need no parsing at all. All reports of one revision share one layout, kept
//! once. NaN stands for "none": a report never holds one.

use super::{Field, Selector};
use crate::report::{Imbalance, QuantityReport, Report, TagReport};
use serde::{Deserialize, Serialize};
use std::collections::HashMap;

/// What a run of numbers belongs to.
#[derive(Clone, Debug, PartialEq, Eq, Hash, Serialize, Deserialize)]
pub(super) struct Channel {
    /// Tag, assumption, or owner and quantity.
    pub name: String,
    /// Unit.
    pub unit: String,
    /// Kind.
    pub kind: ChannelKind,
}

/// What kind of numbers a channel has.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub(super) enum ChannelKind {
    /// Of a tag or assumption.
    Tag,
    /// Of a quantity of a stream or piece of equipment.
    Quantity,
    /// Of an imbalance.
    Imbalance,
}

impl ChannelKind {
    /// Its name in the database.
    pub fn name(self) -> &'static str {
        match self {
            ChannelKind::Tag => "tag",
            ChannelKind::Quantity => "quantity",
            ChannelKind::Imbalance => "imbalance",
        }
    }

    /// The kind of a name in the database.
    pub fn named(name: &str) -> Option<ChannelKind> {
        [
            ChannelKind::Tag,
            ChannelKind::Quantity,
            ChannelKind::Imbalance,
        ]
        .into_iter()
        .find(|kind| kind.name() == name)
    }

    /// Whether a selector can mean it.
    pub fn answers(self, selector: &Selector) -> bool {
        matches!(selector, Selector::Tag(_)) == (self == ChannelKind::Tag)
    }

    /// The numbers of such a channel, in their order.
    pub fn fields(self) -> &'static [Field] {
        match self {
            ChannelKind::Tag => &[
                Field::Measured,
                Field::Reconciled,
                Field::Adjustment,
                Field::UncertaintyMeasured,
                Field::Uncertainty,
                Field::Redundancy,
                Field::Standardised,
            ],
            ChannelKind::Quantity => &[Field::Reconciled, Field::Uncertainty],
            ChannelKind::Imbalance => &[Field::Reconciled, Field::Uncertainty, Field::Standardised],
        }
    }
}

/// The numbers of a report and their layout.
pub(super) struct Encoded {
    pub channels: Vec<Channel>,
    pub numbers: Vec<u8>,
}

/// Takes the numbers out of a report.
pub(super) fn encode(report: &Report) -> Encoded {
    let mut encoder = Encoder {
        channels: Vec::new(),
        numbers: Vec::new(),
    };
    for (name, tag) in report.tags.iter().chain(&report.assumptions) {
        encoder.tag(name, tag);
    }
    for (name, stream) in &report.streams {
        encoder.quantity(format!("{name}.mass_flow"), &stream.mass_flow);
        encoder.quantity(format!("{name}.pressure"), &stream.pressure);
        encoder.quantity(format!("{name}.temperature"), &stream.temperature);
        encoder.quantity(format!("{name}.enthalpy"), &stream.enthalpy);
    }
    for (name, equipment) in &report.equipment {
        let quantities = [
            ("heat", &equipment.heat),
            ("work", &equipment.work),
            ("power", &equipment.power),
            ("loss", &equipment.loss),
            ("holdup_change", &equipment.holdup_change),
        ];
        for (quantity, value) in quantities {
            if let Some(value) = value {
                encoder.quantity(format!("{name}.{quantity}"), value);
            }
        }
        for (side, imbalance) in &equipment.imbalance.mass {
            encoder.imbalance(format!("{name}.imbalance.mass.{side}"), imbalance);
        }
        if let Some(imbalance) = &equipment.imbalance.energy {
            encoder.imbalance(format!("{name}.imbalance.energy"), imbalance);
        }
    }
    Encoded {
        channels: encoder.channels,
        numbers: encoder.numbers,
    }
}

struct Encoder {
    channels: Vec<Channel>,
    numbers: Vec<u8>,
}

impl Encoder {
    fn push(&mut self, kind: ChannelKind, name: String, unit: &str, numbers: &[Option<f64>]) {
        self.channels.push(Channel {
            name,
            unit: unit.to_owned(),
            kind,
        });
        for number in numbers {
            self.numbers
                .extend(number.unwrap_or(f64::NAN).to_le_bytes());
        }
    }

    fn tag(&mut self, name: &str, tag: &TagReport) {
        let numbers = [
            tag.measured,
            tag.reconciled,
            tag.adjustment,
            tag.uncertainty_measured,
            tag.uncertainty_reconciled,
            tag.redundancy,
            tag.standardised_adjustment,
        ];
        self.push(ChannelKind::Tag, name.to_owned(), &tag.unit, &numbers);
    }

    fn quantity(&mut self, name: String, quantity: &QuantityReport) {
        let numbers = [quantity.value, quantity.uncertainty];
        self.push(ChannelKind::Quantity, name, &quantity.unit, &numbers);
    }

    fn imbalance(&mut self, name: String, imbalance: &Imbalance) {
        let numbers = [
            imbalance.value,
            imbalance.uncertainty,
            imbalance.standardised,
        ];
        self.push(ChannelKind::Imbalance, name, &imbalance.unit, &numbers);
    }
}

/// A layout made ready for look-ups.
pub(super) struct Layout {
    channels: Vec<Channel>,
    /// Place of the channel, and of its first number.
    tags: HashMap<String, (usize, usize)>,
    quantities: HashMap<String, (usize, usize)>,
}

/// Where a number is, and in which unit.
pub(super) struct Location<'l> {
    pub channel: &'l Channel,
    pub index: Option<usize>,
    pub unit: &'l str,
}

impl Layout {
    pub fn new(channels: Vec<Channel>) -> Self {
        let mut tags = HashMap::new();
        let mut quantities = HashMap::new();
        let mut first = 0;
        for (place, channel) in channels.iter().enumerate() {
            let names = match channel.kind {
                ChannelKind::Tag => &mut tags,
                ChannelKind::Quantity | ChannelKind::Imbalance => &mut quantities,
            };
            names.entry(channel.name.clone()).or_insert((place, first));
            first += channel.kind.fields().len();
        }
        Layout {
            channels,
            tags,
            quantities,
        }
    }

    /// Every channel that can be asked for, and the place of its first number.
    pub fn channels(&self) -> impl Iterator<Item = (&Channel, usize)> {
        let places = self.tags.values().chain(self.quantities.values());
        places.map(|&(place, first)| (&self.channels[place], first))
    }

    /// Where the field of the selector is; `None` where the layout does not
    /// have the selector.
    pub fn locate(&self, selector: &Selector, field: Field) -> Option<Location<'_>> {
        let &(place, first) = match selector {
            Selector::Tag(name) => self.tags.get(name)?,
            Selector::Quantity(name) => self.quantities.get(name)?,
        };
        let channel = &self.channels[place];
        let offset = channel.kind.fields().iter().position(|&has| has == field);
        let unit = match field {
            Field::Redundancy | Field::Standardised => "1",
            _ => &channel.unit,
        };
        Some(Location {
            channel,
            index: offset.map(|offset| first + offset),
            unit,
        })
    }
}

/// One number of a vector; `None` for "none".
pub(super) fn read(numbers: &[u8], index: usize) -> Option<f64> {
    let bytes = numbers.get(index * 8..index * 8 + 8)?;
    let number = f64::from_le_bytes(bytes.try_into().ok()?);
    (!number.is_nan()).then_some(number)
}
