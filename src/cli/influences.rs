//! `influences`: the readings that a reconciled value hangs on.

use super::CAUTION;
use super::input::{self, Read, Show};
use super::output::print;
use super::table::{Table, fixed, number, pair};
use crate::pipeline::{self, Compiled, NoInfluences};
use crate::report;
use clap::Args;
use std::path::PathBuf;
use std::process::ExitCode;

/// Readings that are listed.
const LISTED: usize = 15;

/// Print the readings that a reconciled value hangs on.
#[derive(Args, Debug)]
pub struct Influences {
    /// The plant file, .toml or .json.
    plant_file: PathBuf,

    /// The batch; the first one, or that of --batch, of an .ndjson or .jsonl file.
    batch_file: PathBuf,

    /// Tag, assumption, stream or piece of equipment.
    of: String,

    /// Of a stream: mass-flow, pressure, temperature, enthalpy; of equipment:
    /// heat, work, power, loss, holdup-change. A tag or assumption has none.
    quantity: Option<String>,

    /// Name of the batch, where the file holds several.
    #[arg(long)]
    batch: Option<String>,
}

/// Prints the readings that a reconciled value hangs on.
///
/// # Errors
///
/// Where a file cannot be read, or there is no such value.
pub fn influences(arguments: &Influences) -> anyhow::Result<ExitCode> {
    let Read::Plant(file) = input::plant_file(&arguments.plant_file, Show::Refusals)? else {
        return Ok(input::faulty());
    };
    let Some(batch) = input::batch(&arguments.batch_file, arguments.batch.as_deref())? else {
        return Ok(input::faulty());
    };
    let plant = Compiled::new(file.plant, 1);
    let quantity = arguments.quantity.as_ref().map(|q| q.replace('-', "_"));
    let of = &arguments.of;
    match pipeline::influences(&plant, &batch, &[], of, quantity.as_deref()) {
        Ok(found) => {
            print(describe(&found))?;
            Ok(ExitCode::SUCCESS)
        }
        Err(NoInfluences::Unknown(what)) => {
            anyhow::bail!("{what}")
        }
        // An answer, though not the one hoped for: as with verdicts, no failure.
        Err(nothing) => {
            print(format!("{of}: {nothing}\n"))?;
            Ok(ExitCode::SUCCESS)
        }
    }
}

fn describe(found: &report::Influences) -> String {
    let [value, uncertainty] = pair(Some(found.value), Some(found.uncertainty));
    let what = match &found.quantity {
        Some(quantity) => format!("{}, {}", found.of, quantity.replace('_', " ")),
        None => found.of.clone(),
    };
    let mut table = Table::new(&[
        "<tag or assumption",
        "share of variance",
        "moved it by",
        "per unit of it",
        "<",
    ]);
    for influence in found.readings.iter().take(LISTED) {
        table.row(vec![
            influence.tag.clone(),
            format!("{} %", fixed(Some(100.0 * influence.share), 1)),
            influence
                .moved
                .map_or_else(|| "unchecked".to_owned(), |moved| signed(moved, found)),
            short(influence.sensitivity),
            format!("{} per {}", found.unit, influence.unit),
        ]);
    }
    let listed = found.readings.len().min(LISTED);
    let told: f64 = found.readings.iter().take(listed).map(|i| i.share).sum();
    format!(
        "{what}: {value} ± {uncertainty} {}\n\n{table}\n\
         These {listed} make {:.0} % of its variance. \"Moved it by\": the value less what it would \
         be without\nthe reading. ± is the half-width at 95 % coverage. {CAUTION}\n",
        found.unit,
        100.0 * told,
    )
}

/// With the digits of the value's own uncertainty, and one more.
fn signed(moved: f64, found: &report::Influences) -> String {
    let decimals = super::table::decimals(found.uncertainty) + 1;
    super::table::plain_zero(format!("{moved:+.decimals$}"))
}

/// Three significant digits.
fn short(value: f64) -> String {
    let scale = 10_f64.powi(2 - value.abs().log10().floor().clamp(-12.0, 12.0) as i32);
    number((value * scale).round() / scale)
}
