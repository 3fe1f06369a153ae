//! Quantities as a plant file writes them: `"1008 mbar"`, `"1 %"`.

use super::reader::{At, Context};
use super::tree::Content;
use crate::plant::{Dimension, Unit};

/// A number with its unit.
#[derive(Clone, Debug, PartialEq)]
pub(super) struct Amount {
    pub value: f64,
    pub unit: Unit,
}

impl Amount {
    /// The value in the internal unit.
    pub fn internal(&self) -> f64 {
        self.unit.to_internal(self.value)
    }
}

/// Reads a quantity of a dimension.
pub(super) fn amount(at: &At<'_>, dimension: Dimension, cx: &mut Context<'_>) -> Option<Amount> {
    let (value, unit) = parts(at, dimension.common()[0], cx)?;
    match dimension.unit(unit) {
        Ok(unit) => Some(Amount { value, unit }),
        Err(fault) => {
            cx.error(&at.place, fault.what, fault.mend);
            None
        }
    }
}

/// A number and the text of its unit, whatever that measures.
pub(super) fn parts<'n>(at: &At<'n>, common: &str, cx: &mut Context<'_>) -> Option<(f64, &'n str)> {
    let example = format!("\"1 {common}\"");
    if let Content::Number(x) = &at.node.value {
        let written = format!("\"{x} {common}\"");
        cx.error(
            &at.place,
            "a number without a unit",
            format!("write number and unit as a string, such as {written}"),
        );
        return None;
    }
    let text = at.string(cx, &example)?;
    let (number, unit) = split(text);
    let Some(value) = number.parse::<f64>().ok().filter(|x| x.is_finite()) else {
        let mend = if text.contains(',') {
            "write a decimal point, not a comma".to_owned()
        } else {
            format!("write a finite number and a unit, such as {example}")
        };
        cx.error(
            &at.place,
            format!("`{text}` does not start with a number"),
            mend,
        );
        return None;
    };
    if unit.starts_with(',') {
        let mend = "write a decimal point, not a comma, and nothing between thousands";
        cx.error(
            &at.place,
            format!("a comma in the number of `{text}`"),
            mend,
        );
        return None;
    }
    if unit.is_empty() {
        let mend = format!("write the unit too, such as \"{number} {common}\"");
        cx.error(&at.place, format!("`{text}` has no unit"), mend);
        return None;
    }
    Some((value, unit))
}

/// A fraction: `"1 %"`.
pub(super) fn fraction(at: &At<'_>, cx: &mut Context<'_>) -> Option<f64> {
    let amount = amount(at, Dimension::Fraction, cx)?;
    // 0.01 is no double and 100 is: "95 %" is 95 / 100, the double nearest 0.95.
    let per = (1.0 / amount.unit.factor).round();
    Some(if 1.0 / per == amount.unit.factor {
        amount.value / per
    } else {
        amount.internal()
    })
}

/// Splits off the longest number that a text starts with.
fn split(text: &str) -> (&str, &str) {
    let text = text.trim();
    let bytes = text.as_bytes();
    let digits = |mut at: usize| {
        while bytes.get(at).is_some_and(u8::is_ascii_digit) {
            at += 1;
        }
        at
    };
    let sign = |at: usize| at + usize::from(matches!(bytes.get(at), Some(b'+' | b'-')));
    let mut end = digits(sign(0));
    if bytes.get(end) == Some(&b'.') {
        end = digits(end + 1);
    }
    if matches!(bytes.get(end), Some(b'e' | b'E')) {
        let exponent = sign(end + 1);
        if digits(exponent) > exponent {
            end = digits(exponent);
        }
    }
    (&text[..end], text[end..].trim_start())
}

#[cfg(test)]
mod tests {
    use super::split;

    #[test]
    fn number_and_unit() {
        assert_eq!(split("1008 mbar"), ("1008", "mbar"));
        assert_eq!(split(" 1% "), ("1", "%"));
        assert_eq!(split("-1.5e-3 bar"), ("-1.5e-3", "bar"));
        assert_eq!(split("2eV"), ("2", "eV"));
        assert_eq!(split("1,5 K"), ("1", ",5 K"));
        assert_eq!(split("bar"), ("", "bar"));
        assert_eq!(split("10*3.[lb_av]/h"), ("10", "*3.[lb_av]/h"));
        assert_eq!(split("1 °C"), ("1", "°C"));
    }
}
