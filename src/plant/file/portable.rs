//! The table `[portable]`: uncertainties of the instruments that people carry.

use super::reader::{Context, Fields, Shape};
use super::terms::{Span, Subject, uncertainty};
use crate::plant::{Dimension, Portable, Uncertainty, Unit};

const SHAPE: Shape = Shape {
    owner: "the portable instruments",
    keys: &["mass-flow", "pressure", "temperature"],
};

const ONE: Shape = Shape {
    owner: "a portable instrument",
    keys: &["uncertainty"],
};

const EXAMPLE: &str = "{ mass-flow = { uncertainty = { of-reading = \"2 %\" } } }";

/// Reads the table; `None` after a fault.
pub(super) fn read(root: &Fields<'_>, cx: &mut Context<'_>) -> Option<Portable> {
    let usual = Portable::default();
    let Some(at) = root.get("portable") else {
        return Some(usual);
    };
    let fields = at.fields(cx, &SHAPE, EXAMPLE)?;
    let flow = one(
        &fields,
        "mass-flow",
        usual.mass_flow,
        Dimension::MassFlow,
        cx,
    );
    let pressure = one(&fields, "pressure", usual.pressure, Dimension::Pressure, cx);
    let temperature = one(
        &fields,
        "temperature",
        usual.temperature,
        Dimension::Temperature,
        cx,
    );
    Some(Portable {
        mass_flow: flow?,
        pressure: pressure?,
        temperature: temperature?,
    })
}

fn one(
    fields: &Fields<'_>,
    key: &str,
    usual: Uncertainty,
    dimension: Dimension,
    cx: &mut Context<'_>,
) -> Option<Uncertainty> {
    let Some(at) = fields.get(key) else {
        return Some(usual);
    };
    let terms = at.fields(cx, &ONE, "{ uncertainty = { absolute = \"1 K\" } }")?;
    let unit = Unit {
        symbol: dimension.internal().to_owned(),
        factor: 1.0,
        // A share of a temperature means nothing, whatever its unit.
        offset: if dimension == Dimension::Temperature {
            273.15
        } else {
            0.0
        },
    };
    let subject = Subject {
        dimension: Some(dimension),
        unit: Some(&unit),
        span: Span::Impossible,
    };
    uncertainty(&terms, &subject, cx)
}
