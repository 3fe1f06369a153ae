//! Causes in words.

use super::table::{decimals, pair};
use crate::report::{Accused, Cause, Hypothesis, Limit};

/// What a cause is called in a table: "leak out of heater-6 (tube)".
pub(super) fn cause_name(hypothesis: &Hypothesis) -> String {
    format!("{} {}", kind_name(hypothesis.cause), place_name(hypothesis))
}

/// A kind of causes, before the name of a place.
pub(super) fn kind_name(cause: Cause) -> &'static str {
    match cause {
        Cause::Bias => "bias of",
        Cause::Departure => "departure of",
        Cause::Leak => "leak out of",
        Cause::LeakBetween => "leak in",
        Cause::Passing => "passing through",
        Cause::HeatLoss => "unstated loss of",
    }
}

/// What a cause blames: "heater-6 (tube)".
pub(super) fn place_name(hypothesis: &Hypothesis) -> String {
    match hypothesis.side.as_deref() {
        // The only side of a machine or vessel says nothing.
        None | Some("flow") => hypothesis.of.clone(),
        Some(side) => format!("{} ({side})", hypothesis.of),
    }
}

/// What a suspect does, with its size: "FT-101 reads 13.8 ± 4.6 t/h too much".
pub(super) fn accusation(accused: &Accused) -> String {
    let Hypothesis { cause, of, side } = &accused.hypothesis;
    let more = accused.size >= 0.0;
    let [value, uncertainty] = pair(Some(accused.size.abs()), Some(accused.uncertainty));
    let size = format!("{value} ± {uncertainty} {}", difference(&accused.unit));
    match cause {
        Cause::Bias => {
            let too = match (is_amount(&accused.unit), more) {
                (true, true) => "much",
                (true, false) => "little",
                (false, true) => "high",
                (false, false) => "low",
            };
            format!("{of} reads {size} too {too}")
        }
        Cause::Departure => {
            let than = if more { "more" } else { "less" };
            format!("{of}: stated {size} {than} than true")
        }
        Cause::Leak => match side.as_deref() {
            None | Some("flow") => format!("{of}: {size} leak out"),
            Some(side) => format!("{of}: {size} leak out of its {}", side_name(side)),
        },
        Cause::LeakBetween => {
            let sides = side.as_deref().and_then(|side| side.split_once(" into "));
            let Some((first, second)) = sides else {
                return format!("{of}: {size} leak inside it");
            };
            let (from, into) = if more {
                (first, second)
            } else {
                (second, first)
            };
            let (from, into) = (side_name(from), side_name(into));
            format!("{of}: {size} leak from its {from} into its {into}")
        }
        Cause::Passing => format!("{of} passes {size}"),
        Cause::HeatLoss => format!("{of} loses {size} that nothing states"),
    }
}

fn side_name(side: &str) -> String {
    match side {
        "tube" | "cooling" => "tubes".to_owned(),
        side => format!("{side} side"),
    }
}

/// The smallest size found, with two significant digits, and its unit.
pub(super) fn limit_size(limit: &Limit) -> [String; 2] {
    let Some(size) = limit.detectable else {
        return ["-".to_owned(), String::new()];
    };
    let places = decimals(size);
    let unit = difference(&limit.unit);
    [format!("{size:.places$}"), unit.to_owned()]
}

/// The unit of a difference: that of a temperature on a scale is a length.
pub(super) fn difference(unit: &str) -> &str {
    if unit == "Cel" { "K" } else { unit }
}

/// A flow, a power or a heat: of these there is much or little.
fn is_amount(unit: &str) -> bool {
    unit.ends_with("/h") || unit.ends_with("/s") || unit.ends_with('W') || unit == "[HP]"
}

#[cfg(test)]
mod tests {
    use super::*;

    fn said(cause: Cause, of: &str, side: Option<&str>, size: f64, unit: &str) -> String {
        accusation(&Accused {
            hypothesis: Hypothesis {
                cause,
                of: of.to_owned(),
                side: side.map(str::to_owned),
            },
            size,
            uncertainty: 0.61,
            unit: unit.to_owned(),
            ratio: 30.0,
            detectable: 1.0,
            remark: None,
        })
    }

    #[test]
    fn a_bias_is_much_or_little_of_an_amount_and_high_or_low_else() {
        let said = |size, unit| said(Cause::Bias, "X", None, size, unit);
        assert_eq!(said(13.84, "t/h"), "X reads 13.84 ± 0.61 t/h too much");
        assert_eq!(said(-2.0, "MW"), "X reads 2.00 ± 0.61 MW too little");
        assert_eq!(said(2.0, "Cel"), "X reads 2.00 ± 0.61 K too high");
        assert_eq!(said(-2.0, "bar"), "X reads 2.00 ± 0.61 bar too low");
    }

    #[test]
    fn a_leak_of_two_signs_changes_its_way() {
        let said = |cause, side, size| said(cause, "E", side, size, "kg/s");
        let inside = Some("hot into cold");
        assert_eq!(
            said(Cause::LeakBetween, inside, 2.0),
            "E: 2.00 ± 0.61 kg/s leak from its hot side into its cold side"
        );
        assert_eq!(
            said(Cause::LeakBetween, inside, -2.0),
            "E: 2.00 ± 0.61 kg/s leak from its cold side into its hot side"
        );
        assert_eq!(
            said(Cause::LeakBetween, Some("tube into steam"), 2.0),
            "E: 2.00 ± 0.61 kg/s leak from its tubes into its steam side"
        );
        assert_eq!(
            said(Cause::Leak, Some("flow"), 2.0),
            "E: 2.00 ± 0.61 kg/s leak out"
        );
        assert_eq!(
            said(Cause::Departure, None, -2.0),
            "E: stated 2.00 ± 0.61 kg/s less than true"
        );
    }
}
