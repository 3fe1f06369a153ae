//! Text in columns, and numbers with as many digits as their uncertainty
//! leaves them.

use std::fmt;

/// A table: columns as wide as their widest cell, the first to the left and
/// numbers to the right.
pub(super) struct Table {
    heads: Vec<&'static str>,
    rows: Vec<Vec<String>>,
}

impl Table {
    /// A table with these heads. A head that starts with `<` makes its column
    /// stand to the left.
    pub fn new(heads: &[&'static str]) -> Self {
        Table {
            heads: heads.to_vec(),
            rows: Vec::new(),
        }
    }

    pub fn row(&mut self, cells: Vec<String>) {
        self.rows.push(cells);
    }

    pub fn is_empty(&self) -> bool {
        self.rows.is_empty()
    }
}

impl fmt::Display for Table {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let heads: Vec<String> = self
            .heads
            .iter()
            .map(|h| h.trim_start_matches('<').to_owned())
            .collect();
        let width = |column: usize| {
            let cells = self
                .rows
                .iter()
                .chain([&heads])
                .filter_map(|row| row.get(column));
            cells.map(|cell| cell.chars().count()).max().unwrap_or(0)
        };
        let widths: Vec<usize> = (0..heads.len()).map(width).collect();
        for row in [&heads].into_iter().chain(&self.rows) {
            let mut line = String::new();
            for (column, cell) in row.iter().enumerate() {
                let width = widths.get(column).copied().unwrap_or(0);
                if self
                    .heads
                    .get(column)
                    .is_some_and(|head| head.starts_with('<'))
                {
                    line.push_str(&format!("  {cell:<width$}"));
                } else {
                    line.push_str(&format!("  {cell:>width$}"));
                }
            }
            writeln!(f, "{}", line.trim_end())?;
        }
        Ok(())
    }
}

/// A value and its uncertainty: the uncertainty with two significant digits,
/// the value with as many decimals.
pub(super) fn pair(value: Option<f64>, uncertainty: Option<f64>) -> [String; 2] {
    let Some(value) = value else {
        return [String::from("-"), String::new()];
    };
    match uncertainty {
        Some(uncertainty) if uncertainty > 0.0 && uncertainty.is_finite() => {
            let decimals = decimals(uncertainty);
            [
                plain_zero(format!("{value:.decimals$}")),
                format!("{uncertainty:.decimals$}"),
            ]
        }
        _ => [number(value), String::new()],
    }
}

/// A number that rounds to zero has no sign.
pub(super) fn plain_zero(text: String) -> String {
    let digits = text.trim_start_matches(['+', '-']);
    if digits.chars().all(|c| c == '0' || c == '.') {
        digits.to_owned()
    } else {
        text
    }
}

/// Decimals that show two significant digits of a number that is not negative.
pub(super) fn decimals(number: f64) -> usize {
    // Between 0 and 12, so that the cast is exact.
    (1.0 - number.log10().floor()).clamp(0.0, 12.0) as usize
}

/// A number without an uncertainty: five significant digits.
pub(super) fn number(value: f64) -> String {
    if value == 0.0 || !value.is_finite() {
        return value.to_string();
    }
    // Between 0 and 12, so that the cast is exact.
    let decimals = (4.0 - value.abs().log10().floor()).clamp(0.0, 12.0) as usize;
    let text = format!("{value:.decimals$}");
    match text.contains('.') {
        true => text.trim_end_matches('0').trim_end_matches('.').to_owned(),
        false => text,
    }
}

/// An optional number with fixed decimals.
pub(super) fn fixed(value: Option<f64>, decimals: usize) -> String {
    value.map_or_else(
        || "-".to_owned(),
        |value| plain_zero(format!("{value:.decimals$}")),
    )
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_value_has_the_digits_of_its_uncertainty() {
        let shown = |value, uncertainty| pair(Some(value), Some(uncertainty)).join(" ");
        assert_eq!(shown(371.23456, 3.4567), "371.2 3.5");
        assert_eq!(shown(371.23456, 0.034567), "371.235 0.035");
        assert_eq!(shown(3712.3456, 345.0), "3712 345");
        assert_eq!(pair(None, Some(1.0)), ["-", ""]);
        assert_eq!(fixed(Some(-0.004), 2), "0.00");
        assert_eq!(fixed(Some(-0.006), 2), "-0.01");
        assert_eq!(number(0.000123456), "0.00012346");
        assert_eq!(number(250.0), "250");
        assert_eq!(number(61054.963), "61055");
    }

    #[test]
    fn columns_are_aligned() {
        let mut table = Table::new(&["<tag", "value"]);
        table.row(vec!["A".into(), "10.5".into()]);
        table.row(vec!["LONG".into(), "9".into()]);
        assert_eq!(
            table.to_string(),
            "  tag   value\n  A      10.5\n  LONG      9\n"
        );
    }
}
