//! Reconciled values that are others with the suspects out, for people.

use super::table::{Table, pair};
use crate::report::{AfterSuspects, EquipmentReport, Report, StreamReport, TagReport};
use indexmap::IndexMap;

/// How far a value must move to be listed, as a part of its uncertainty.
const WORTH_LISTING: f64 = 0.25;

/// A value with what it is of, its name there and its unit.
struct Line<'r> {
    of: &'r str,
    what: &'static str,
    value: Option<f64>,
    uncertainty: Option<f64>,
    unit: &'r str,
}

/// The values that are others with the suspects out, in the order of the report;
/// `None` where there are none.
pub(super) fn moved(report: &Report) -> Option<Table> {
    let after = report.after_suspects.as_ref()?;
    let mut table = Table::new(&[
        "<with the suspects out",
        "<",
        "before",
        "±",
        "after",
        "±",
        "<unit",
    ]);
    let after = lines_after(after);
    // Streams in series move alike: they share a row.
    let mut rows: Vec<(Vec<&str>, Vec<String>)> = Vec::new();
    for before in lines_before(report) {
        let same = |line: &&Line| line.of == before.of && line.what == before.what;
        let Some(after) = after.iter().find(same) else {
            continue;
        };
        let change = before.value.zip(after.value).map(|(x, y)| (y - x).abs());
        let far = change.zip(before.uncertainty);
        if far.is_some_and(|(change, uncertainty)| change > WORTH_LISTING * uncertainty) {
            let mut cells = vec![before.what.to_owned()];
            cells.extend(pair(before.value, before.uncertainty));
            cells.extend(pair(after.value, after.uncertainty));
            cells.push(before.unit.to_owned());
            match rows.last_mut() {
                Some((names, known)) if *known == cells => names.push(before.of),
                _ => rows.push((vec![before.of], cells)),
            }
        }
    }
    for (names, cells) in rows {
        let name = match &names[..] {
            [first, .., last] => format!("{first} ... {last} ({})", names.len()),
            _ => names.concat(),
        };
        table.row([name].into_iter().chain(cells).collect());
    }
    (!table.is_empty()).then_some(table)
}

fn lines_before(report: &Report) -> Vec<Line<'_>> {
    lines(
        [&report.tags, &report.assumptions],
        &report.streams,
        &report.equipment,
    )
}

fn lines_after(after: &AfterSuspects) -> Vec<Line<'_>> {
    lines(
        [&after.tags, &after.assumptions],
        &after.streams,
        &after.equipment,
    )
}

/// Tags and assumptions, flows and temperatures of streams, heats and powers.
fn lines<'r>(
    tags: [&'r IndexMap<String, TagReport>; 2],
    streams: &'r IndexMap<String, StreamReport>,
    equipment: &'r IndexMap<String, EquipmentReport>,
) -> Vec<Line<'r>> {
    let tags = tags.into_iter().flatten().map(|(name, tag)| Line {
        of: name,
        what: "",
        value: tag.reconciled,
        uncertainty: tag.uncertainty_reconciled,
        unit: &tag.unit,
    });
    let of_streams = streams.iter().flat_map(|(name, stream)| {
        let flow = ("mass flow", Some(&stream.mass_flow));
        let temperature = ("temperature", Some(&stream.temperature));
        [flow, temperature].map(|(what, quantity)| (name, what, quantity))
    });
    let of_equipment = equipment.iter().flat_map(|(name, equipment)| {
        [
            ("heat", equipment.heat.as_ref()),
            ("work", equipment.work.as_ref()),
            ("power", equipment.power.as_ref()),
            ("loss", equipment.loss.as_ref()),
            ("holdup change", equipment.holdup_change.as_ref()),
        ]
        .map(|(what, quantity)| (name, what, quantity))
    });
    let quantities = of_streams.chain(of_equipment);
    let quantities = quantities.filter_map(|(name, what, quantity)| {
        let quantity = quantity?;
        Some(Line {
            of: name,
            what,
            value: quantity.value,
            uncertainty: quantity.uncertainty,
            unit: &quantity.unit,
        })
    });
    tags.chain(quantities).collect()
}
