//! From the samples of a period to its readings: time-weighted means with the
//! uncertainty that scatter adds, flags for samples that are not to be trusted,
//! and whether tag and plant were steady. Pure: no clock, no store.
//!
//! A period holds the instants from its start up to, and without, its end. Of
//! each tag (`tag`): samples are marked (`marks`, `spikes`), what is left
//! makes a signal with weights in time (`signal`), a short series of it tells
//! how uncertain the mean is (`scatter`) and whether it moved (`steady`).

mod marks;
mod scatter;
mod series;
mod signal;
mod spikes;
mod status;
mod steady;
mod tag;
#[cfg(test)]
mod tests;

use crate::plant::{AveragingMethod, Batch, Plant, Reading, Sample, Steadiness, Tag, TagAveraging};
use std::collections::HashMap;
use time::{Duration, OffsetDateTime};

/// A status holds until the next, and historians store changes only; after so
/// long nobody looks for the last one any more.
const STATUS_HOLDS: Duration = Duration::days(31);

/// A period and its length.
#[derive(Clone, Copy)]
struct Period {
    start: OffsetDateTime,
    /// Length, s.
    length: f64,
}

/// Makes the batch of a period from samples.
///
/// `samples` has those of each tag and status of the plant that has any, in
/// order of time: within the period, the last one before it (more of them, up to
/// [`lookback`], let stuck signals be seen and spikes be judged at its edge), and
/// the first one at or after its end. A tag without samples gets no reading.
/// Readings stand in the order of their tags' names.
pub fn batch(
    plant: &Plant,
    start: OffsetDateTime,
    end: OffsetDateTime,
    name: &str,
    samples: &HashMap<&str, &[Sample]>,
) -> Batch {
    let period = Period {
        start,
        length: (end - start).as_seconds_f64(),
    };
    let of = |tag: &str| samples.get(tag).copied().filter(|list| !list.is_empty());
    let mut readings: Vec<Reading> = Vec::new();
    let mut key = Judged::default();
    for (place, tag) in plant.tags.iter().enumerate() {
        let Some(list) = of(&tag.name) else {
            continue;
        };
        let reading = tag::reading(tag, settings(plant, tag), period, list);
        if plant.averaging.key_tags.is_empty() || plant.averaging.key_tags.contains(&place) {
            key.note(&reading);
        }
        readings.push(reading);
    }
    let mut states = Judged::default();
    for status in &plant.statuses {
        if let Some(list) = of(&status.name) {
            let reading = status::reading(&status.name, period, list);
            states.note(&reading);
            readings.push(reading);
        }
    }
    readings.sort_by(|a, b| a.tag.cmp(&b.tag));
    Batch {
        name: name.to_owned(),
        start,
        end,
        readings,
        steadiness: steadiness(key, states, plant.averaging.unsteady_allowed),
    }
}

/// How long a sample of a tag or status can matter to periods after it; `None`
/// where the plant does not know it.
pub fn holds(plant: &Plant, tag: &str) -> Option<Duration> {
    if plant.statuses.iter().any(|status| status.name == tag) {
        return Some(STATUS_HOLDS);
    }
    let settings = settings(plant, plant.tags.iter().find(|known| known.name == tag)?);
    Some(match settings.method {
        AveragingMethod::Sum => Duration::ZERO,
        _ => settings
            .stale_after
            .max(settings.stuck_after.unwrap_or_default()),
    })
}

/// How long a sample of a tag can matter to periods before it: a line is drawn to
/// it from the sample before.
pub fn reaches_back(plant: &Plant, tag: &str) -> Duration {
    let found = plant.tags.iter().find(|known| known.name == tag);
    let settings = found.map(|tag| settings(plant, tag));
    match settings {
        Some(settings) if settings.method == AveragingMethod::Linear => settings.stale_after,
        _ => Duration::ZERO,
    }
}

/// How far outside a period a sample of any tag or status of the plant can matter
/// to it: the greatest of [`holds`] and [`reaches_back`].
pub fn reach(plant: &Plant) -> Duration {
    let tags = plant.tags.iter().map(|tag| tag.name.as_str());
    let statuses = plant.statuses.iter().map(|status| status.name.as_str());
    let each = tags.chain(statuses).map(|name| {
        let holds = holds(plant, name).unwrap_or_default();
        holds.max(reaches_back(plant, name))
    });
    each.max().unwrap_or_default()
}

/// How far before a period samples still tell whether a signal is stuck.
pub fn lookback(plant: &Plant) -> Duration {
    let stuck = plant
        .tags
        .iter()
        .map(|tag| settings(plant, tag).stuck_after);
    stuck.flatten().max().unwrap_or(Duration::ZERO)
}

fn settings<'p>(plant: &'p Plant, tag: &'p Tag) -> &'p TagAveraging {
    tag.averaging.as_ref().unwrap_or(&plant.averaging.usual)
}

/// Verdicts of some tags.
#[derive(Default)]
struct Judged {
    judged: u32,
    unsteady: Vec<String>,
}

impl Judged {
    fn note(&mut self, reading: &Reading) {
        if let Some(steady) = reading.averaged.as_ref().and_then(|made| made.steady) {
            self.judged += 1;
            if !steady {
                self.unsteady.push(reading.tag.clone());
            }
        }
    }
}

/// The plant is steady where no status changed and not more than the allowed
/// part of the key tags moved. `None` where nothing was judged: a status that
/// stayed says nothing of flows.
fn steadiness(key: Judged, states: Judged, allowed: f64) -> Option<Steadiness> {
    if key.judged == 0 && states.unsteady.is_empty() {
        return None;
    }
    let moved = key.unsteady.len() as f64;
    let mut unsteady = key.unsteady;
    let steady = states.unsteady.is_empty() && moved <= allowed * f64::from(key.judged);
    unsteady.extend(states.unsteady);
    unsteady.sort();
    Some(Steadiness {
        steady,
        judged: key.judged + states.judged,
        unsteady,
    })
}
