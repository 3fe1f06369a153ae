//! The demonstration plant: Gannet Holm unit 1, an invented reheat unit, and a
//! day in its life.
//!
//! [`truth()`] is an exact heat balance of the whole unit at any load: every
//! relation that the plant file implies holds to rounding. [`readings()`] looks
//! at it through the plant file's instruments, with seeded normal noise of
//! exactly the stated uncertainty. [`Day`] strings 288 five-minute batches
//! together, with a meter that drifts and a heater that fouls, and
//! [`make_fixture`] writes them down with the truth beside them. Everything is
//! reproducible from a seed, and everything is invented.

mod assumed;
mod balance;
mod cold_end;
mod day;
mod design;
mod expansion;
mod feed;
mod fixture;
mod normal;
mod readings;
mod truth;

pub use assumed::Assumed;
pub use balance::truth;
pub use day::{DAY_SEED, DRIFTING_TAG, Day, FOULING_HEATER};
pub use design::{Conditions, LineUp};
pub use fixture::make_fixture;
pub use readings::{Fault, readings};
pub use truth::{Flow, Machine, Truth};

use crate::fluid::OutOfRange;
use crate::plant::{self, Format, Plant, Reduced, Service, Signal};

/// Why the simulation gave no result. Each is a fault of the simulation or of
/// its plant file: at loads from 0.5 to 1 none occurs.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum Error {
    /// A state left the range of the properties.
    #[error(transparent)]
    OutOfRange(#[from] OutOfRange),
    /// The plant file lacks an assumption that the simulation draws.
    #[error("the demo plant file has no assumption {0}")]
    NoAssumption(&'static str),
    /// The plant file has a stream that the simulation does not know.
    #[error("the demo simulation has no stream {0}")]
    NoStream(String),
    /// The iteration of the bleed flows did not settle.
    #[error("the demo heat balance did not settle at load {0}")]
    NotSettled(f64),
    /// The plant file does not parse.
    #[error("the demo plant file has faults:\n{0}")]
    PlantFile(String),
}

/// The plant file of the demonstration plant, TOML.
pub fn plant_file() -> &'static str {
    include_str!("../../fixtures/demo/plant.toml")
}

/// The demonstration plant, parsed.
///
/// # Errors
/// [`Error::PlantFile`] where the parser finds fault with the file.
pub fn plant() -> Result<Plant, Error> {
    plant::read(plant_file(), Format::Toml)
        .map(|file| file.plant)
        .map_err(|faults| Error::PlantFile(faults.to_string()))
}

/// The demonstration plant as it is lined up: what is in service, as a plant without
/// conditions.
///
/// # Errors
/// As [`plant()`].
pub fn lined_up(line_up: LineUp) -> Result<Plant, Error> {
    let plant = plant()?;
    let service = Service::decided(&plant, |signal| match signal {
        Signal::Status(s) => line_up.status(&plant.statuses[s].name),
        Signal::Tag(_) => None,
    });
    Ok(Reduced::new(&plant, &service).plant)
}
