//! The reconciled values of a report under the names that series know them by.

use crate::report::{QuantityReport, Report, TagReport};

/// A reconciled value.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) struct Value<'r> {
    /// Best estimate with its uncertainty (95 %); `None` where it has none.
    pub estimate: Option<(f64, f64)>,
    /// Unit.
    pub unit: &'r str,
}

/// Every reconciled value of a report, in its order.
pub(super) fn values(report: &Report) -> impl Iterator<Item = (String, Value<'_>)> {
    let tags = report.tags.iter().chain(&report.assumptions);
    let tags = tags.map(|(name, tag)| (name.clone(), of_tag(tag)));
    let streams = report.streams.iter().flat_map(|(name, stream)| {
        [
            ("mass_flow", &stream.mass_flow),
            ("pressure", &stream.pressure),
            ("temperature", &stream.temperature),
            ("enthalpy", &stream.enthalpy),
        ]
        .map(|(quantity, value)| (format!("{name}.{quantity}"), of_quantity(value)))
    });
    let equipment = report.equipment.iter().flat_map(|(name, equipment)| {
        let has = [
            ("heat", &equipment.heat),
            ("work", &equipment.work),
            ("power", &equipment.power),
            ("loss", &equipment.loss),
            ("holdup_change", &equipment.holdup_change),
        ];
        has.into_iter().filter_map(move |(quantity, value)| {
            let value = value.as_ref()?;
            Some((format!("{name}.{quantity}"), of_quantity(value)))
        })
    });
    tags.chain(streams).chain(equipment)
}

fn of_tag(tag: &TagReport) -> Value<'_> {
    Value {
        estimate: tag.reconciled.zip(tag.uncertainty_reconciled),
        unit: &tag.unit,
    }
}

fn of_quantity(quantity: &QuantityReport) -> Value<'_> {
    Value {
        estimate: quantity.value.zip(quantity.uncertainty),
        unit: &quantity.unit,
    }
}
