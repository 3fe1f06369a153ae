//! A day in the life of the unit: 2026-03-17, in 288 batches of five minutes.
//!
//! The night passes at 56 % load, the morning ramp ends at half past seven, the
//! evening peak is the rated load. From 10:00 on one instrument drifts, from
//! 06:00 on one heater fouls: the first makes readings disagree, the second
//! changes the plant and leaves the readings right. A few readings are
//! missing, bad or uncertain, as on any day.

use rand::SeedableRng;
use rand_chacha::ChaCha8Rng;
use time::{Duration, OffsetDateTime, macros::datetime};

use super::design::celsius;
use super::readings::{Fault, readings};
use super::{Assumed, Conditions, Error, LineUp, Truth, truth};
use crate::plant::{Batch, Plant, Tag};

/// Seed of the day in `fixtures/demo`.
pub const DAY_SEED: u64 = 20_260_317;

/// The instrument that drifts: the final feedwater flow, which reads more and more too much.
pub const DRIFTING_TAG: &str = "FT-101";

/// The heater that fouls.
pub const FOULING_HEATER: &str = "heater-6";

/// Midnight at which the day begins.
const MIDNIGHT: OffsetDateTime = datetime!(2026-03-17 00:00 UTC);

const BATCHES: u32 = 288;
const BATCH_MINUTES: u32 = 5;

/// Load by hour of the day, joined smoothly.
const LOADS: [(f64, f64); 10] = [
    (0.0, 0.58),
    (4.5, 0.56),
    (7.5, 0.95),
    (11.0, 0.98),
    (13.5, 0.93),
    (16.5, 0.97),
    (19.0, 0.995),
    (21.0, 0.92),
    (23.0, 0.68),
    (24.0, 0.60),
];

/// Faults of single instruments: tag, first and last hour, fault.
const FAULTS: [(&str, f64, f64, Fault); 4] = [
    // The mill's network is down for half an hour at night.
    ("FT-108", 2.0, 2.5, Fault::Missing),
    ("TT-108", 2.0, 2.5, Fault::Missing),
    // A transmitter is taken out for calibration.
    ("PT-205", 14.0, 14.75, Fault::Bad),
    // A loop with a loose terminal.
    ("FT-422", 20.0, 21.0, Fault::Uncertain),
];

const DRIFT_START: f64 = 10.0;
const DRIFT_PER_HOUR: f64 = 0.5;

const FOULING_START: f64 = 6.0;
const FOULING_PER_HOUR: f64 = 0.4;

/// The batches of the day with the truth behind each, in order.
pub struct Day<'a> {
    plant: &'a Plant,
    assumed: Assumed,
    noise: ChaCha8Rng,
    level: ChaCha8Rng,
    next: u32,
}

impl<'a> Day<'a> {
    /// The day of a seed. The assumptions' true values are drawn once, as
    /// lagging and orifices stay what they are; only the deaerator's level
    /// moves otherwise in each batch.
    pub fn new(plant: &'a Plant, seed: u64) -> Self {
        let stream = |number| {
            let mut rng = ChaCha8Rng::seed_from_u64(seed);
            rng.set_stream(number);
            rng
        };
        Day {
            plant,
            assumed: Assumed::drawn(plant, &mut stream(0)),
            noise: stream(1),
            level: stream(2),
            next: 0,
        }
    }

    fn batch(&mut self, number: u32) -> Result<(Batch, Truth), Error> {
        let minute = number * BATCH_MINUTES;
        let hour = f64::from(minute) / 60.0;
        self.assumed
            .redraw(self.plant, "deaerator-level", &mut self.level);
        let truth = truth(&conditions(hour), &self.assumed)?;
        let start = MIDNIGHT + Duration::minutes(i64::from(minute));
        let batch = Batch {
            name: format!(
                "{}T{:02}:{:02}Z",
                start.date(),
                start.hour(),
                start.minute()
            ),
            start,
            end: start + Duration::minutes(i64::from(BATCH_MINUTES)),
            readings: readings(self.plant, &truth, &mut self.noise, |tag| fault(tag, hour))?,
            steadiness: None,
        };
        Ok((batch, truth))
    }
}

impl Iterator for Day<'_> {
    type Item = Result<(Batch, Truth), Error>;

    fn next(&mut self) -> Option<Self::Item> {
        (self.next < BATCHES).then(|| {
            let number = self.next;
            self.next += 1;
            self.batch(number)
        })
    }
}

/// How the unit is run at an hour of the day.
fn conditions(hour: f64) -> Conditions {
    // The governor hunts a little about its set point.
    let hunting = 0.003 * (9.0 * hour).sin() + 0.002 * (23.0 * hour).sin();
    let noon_lag = (hour - 9.0) / 24.0 * std::f64::consts::TAU;
    Conditions {
        load: load(hour) + hunting,
        fouling: FOULING_PER_HOUR * (hour - FOULING_START).max(0.0),
        cooling_inlet: celsius(12.8 + 0.9 * noon_lag.sin()),
        make_up: celsius(17.5 + 1.5 * noon_lag.sin()),
        line_up: LineUp::default(),
    }
}

/// Scheduled load, a smoothstep from each point of the table to the next.
fn load(hour: f64) -> f64 {
    LOADS
        .windows(2)
        .find(|pair| hour < pair[1].0)
        .map_or(LOADS[LOADS.len() - 1].1, |pair| {
            let [(from, low), (to, high)] = [pair[0], pair[1]];
            let x = (hour - from) / (to - from);
            low + (high - low) * x * x * (3.0 - 2.0 * x)
        })
}

/// What is wrong with a tag at an hour.
fn fault(tag: &Tag, hour: f64) -> Option<Fault> {
    if tag.name == DRIFTING_TAG && hour > DRIFT_START {
        return Some(Fault::Bias(DRIFT_PER_HOUR * (hour - DRIFT_START)));
    }
    FAULTS
        .iter()
        .find(|(name, from, to, _)| tag.name == *name && (*from..*to).contains(&hour))
        .map(|(.., fault)| *fault)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_load_is_one_that_the_unit_can_run_at_and_moves_no_faster_than_a_plant() {
        let loads: Vec<f64> = (0..BATCHES)
            .map(|n| conditions(f64::from(n * BATCH_MINUTES) / 60.0).load)
            .collect();
        assert!(loads.iter().all(|load| (0.5..=1.0).contains(load)));
        // Half a per cent a minute is a brisk ramp for such a unit.
        let fastest = loads
            .windows(2)
            .map(|pair| (pair[1] - pair[0]).abs() / f64::from(BATCH_MINUTES))
            .fold(0.0, f64::max);
        assert!(fastest < 0.005, "{fastest} a minute");
    }

    #[test]
    fn the_scheduled_load_meets_every_point_of_its_table() {
        for (hour, value) in LOADS {
            assert!((load(hour) - value).abs() < 1e-12, "{hour} h");
        }
    }
}
