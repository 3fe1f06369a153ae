//! The terms of an uncertainty.

use super::amount::{amount, fraction, parts};
use super::reader::{At, Context, Fields, Shape};
use crate::plant::{Dimension, Uncertainty, Unit};

/// What an uncertainty belongs to.
pub(super) struct Subject<'a> {
    /// `None` where it is unclear: only the shape of terms is checked.
    pub dimension: Option<Dimension>,
    /// `None` where the unit is faulty: terms are checked and not converted.
    pub unit: Option<&'a Unit>,
    /// Upper minus lower end of the range.
    pub span: Span,
}

/// The span of a range.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) enum Span {
    /// Known, positive.
    Known(f64),
    /// There is no range.
    Absent,
    /// There is a faulty range.
    Unclear,
    /// An assumption: it cannot have a range.
    Impossible,
}

const TAG: Shape = Shape {
    owner: "the uncertainty of a tag",
    keys: &["of-reading", "of-range", "absolute", "of-differential-span"],
};

const ASSUMPTION: Shape = Shape {
    owner: "the uncertainty of an assumption",
    keys: &["absolute", "of-reading", "of-value"],
};

/// Reads the key `uncertainty`, which must be there.
pub(super) fn uncertainty(
    fields: &Fields<'_>,
    subject: &Subject<'_>,
    cx: &mut Context<'_>,
) -> Option<Uncertainty> {
    let example = example(subject);
    let mend = format!("state it at 95 % coverage: uncertainty = {example}");
    let at = fields.require("uncertainty", cx, &mend)?;
    let is_assumption = subject.span == Span::Impossible;
    let shape = if is_assumption { &ASSUMPTION } else { &TAG };
    let faults_before = cx.findings.errors();
    let terms = at.fields(cx, shape, &example)?;
    let mut out = Uncertainty::default();
    let mut of_range = 0.0;
    let mut absolute = 0.0;
    // Whatever the unit and the range come to.
    let mut is_zero = true;
    for key in ["of-reading", "of-value"] {
        if let Some(term) = terms.get(key).filter(|_| shape.keys.contains(&key)) {
            out.of_reading += of_reading(&term, subject, cx).unwrap_or(0.0);
            is_zero &= out.of_reading == 0.0;
        }
    }
    if let Some(term) = terms.get("of-range").filter(|_| !is_assumption)
        && let Some((share, span)) = of_span(&term, subject, cx)
    {
        is_zero &= share == 0.0;
        of_range = share * span.unwrap_or(0.0);
    }
    if let Some(term) = terms.get("absolute") {
        let stated = stated(&term, subject, cx).unwrap_or(0.0);
        is_zero &= stated == 0.0;
        absolute = subject
            .unit
            .map_or(0.0, |unit| unit.difference_from_internal(stated));
    }
    if let Some(term) = terms.get("of-differential-span").filter(|_| !is_assumption) {
        // Only square-root extraction makes such a term.
        if matches!(subject.dimension, Some(Dimension::MassFlow) | None) {
            if let Some((share, span)) = of_span(&term, subject, cx) {
                is_zero &= share == 0.0;
                out.differential = span.map_or(0.0, |span| 0.5 * share * span * span);
            }
        } else {
            let what = "`of-differential-span` belongs to flows by square-root extraction only";
            cx.error(&term.key, what, "use `of-range`");
        }
    }
    out.constant = f64::hypot(of_range, absolute);
    if cx.findings.errors() > faults_before {
        return None;
    }
    let known = subject.unit.is_some() && subject.span != Span::Unclear;
    if is_zero || (known && out == Uncertainty::default()) {
        let what = "the uncertainty is zero";
        cx.error(
            &at.place,
            what,
            format!("state at least one term, such as {example}"),
        );
        return None;
    }
    let finite = [out.of_reading, out.constant, out.differential];
    if !finite.iter().all(|x| x.is_finite()) {
        cx.error(
            &at.place,
            "the uncertainty is infinite",
            "state a finite one",
        );
        return None;
    }
    known.then_some(out)
}

fn example(subject: &Subject<'_>) -> String {
    format!("{{ absolute = \"1 {}\" }}", common(subject))
}

/// A unit of differences, for messages.
fn common(subject: &Subject<'_>) -> &'static str {
    match subject.dimension {
        Some(Dimension::Temperature | Dimension::TemperatureDifference) => "K",
        Some(other) => other.common()[0],
        None => "bar",
    }
}

/// An absolute term in the internal unit; as written where that is unclear.
fn stated(at: &At<'_>, subject: &Subject<'_>, cx: &mut Context<'_>) -> Option<f64> {
    let stated = match subject.dimension {
        Some(dimension) => {
            let difference = amount(at, dimension.of_difference(), cx)?;
            difference.unit.difference_to_internal(difference.value)
        }
        None => parts(at, common(subject), cx)?.0,
    };
    Some(not_negative(at, stated, cx))
}

fn not_negative(at: &At<'_>, x: f64, cx: &mut Context<'_>) -> f64 {
    if x < 0.0 {
        cx.error(
            &at.place,
            "an uncertainty cannot be negative",
            "leave the sign out",
        );
        return 0.0;
    }
    x
}

fn of_reading(at: &At<'_>, subject: &Subject<'_>, cx: &mut Context<'_>) -> Option<f64> {
    let share = fraction(at, cx)?;
    let share = not_negative(at, share, cx);
    if let Some(unit) = subject.unit.filter(|unit| unit.offset != 0.0) {
        let what = format!(
            "a share of a reading in `{}` means nothing: its zero is arbitrary",
            unit.symbol
        );
        cx.error(
            &at.key,
            what,
            "state it as `absolute`, such as absolute = \"1.5 K\"",
        );
        return None;
    }
    Some(share)
}

/// A share of the span, with the span where it is clear.
fn of_span(at: &At<'_>, subject: &Subject<'_>, cx: &mut Context<'_>) -> Option<(f64, Option<f64>)> {
    let share = fraction(at, cx)?;
    let share = not_negative(at, share, cx);
    match subject.span {
        Span::Known(span) => Some((share, Some(span))),
        Span::Unclear | Span::Impossible => Some((share, None)),
        Span::Absent => {
            let what = "a share of the range, and the tag has no `range`";
            cx.error(
                &at.key,
                what,
                "add the range in the tag's unit, such as range = [0, 400]",
            );
            None
        }
    }
}
