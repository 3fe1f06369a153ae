//! Telling new samples from those that are there.

use crate::plant::{Grade, Sample};
use crate::store::sqlite::fault::{corrupt, nanoseconds};
use crate::store::{NewTagSamples, StoreError};
use std::cmp::Ordering;
use std::collections::HashMap;

/// A sample as it stands in the database.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) struct Row {
    pub time: i64,
    pub value: Option<f64>,
    pub grade: i64,
    pub code: Option<i64>,
}

/// The samples of one tag in a call.
pub(super) struct Tag {
    pub name: String,
    pub holds: i64,
    pub reaches_back: i64,
    /// Samples close together, in order of time: what lies among them in the
    /// database is looked at. Far ones apart, or one late sample would have days
    /// looked at.
    pub stretches: Vec<Stretch>,
}

/// Samples close together.
pub(super) struct Stretch {
    pub first: i64,
    pub last: i64,
    /// With the places of tag and sample in the call; in order of time, and of
    /// coming where they are of one time.
    samples: Vec<(Row, (usize, usize))>,
}

/// What a stretch comes to.
pub(super) struct Sifted {
    pub new: Vec<Row>,
    pub known: u64,
    pub conflicting: Vec<(usize, usize)>,
}

/// The samples of a call by tag, in stretches where none is further than `near`
/// from the next.
pub(super) fn by_tag(tags: Vec<NewTagSamples>, near: i64) -> Result<Vec<Tag>, StoreError> {
    let mut places: HashMap<String, usize> = HashMap::new();
    let mut gathered = Vec::new();
    for (at, tag) in tags.into_iter().enumerate() {
        if tag.samples.is_empty() {
            continue;
        }
        let holds = length(tag.holds);
        let reaches_back = length(tag.reaches_back);
        let place = *places.entry(tag.tag.clone()).or_insert(gathered.len());
        if place == gathered.len() {
            gathered.push((tag.tag.clone(), 0, 0, Vec::new()));
        }
        let (_, longest, furthest, samples) = &mut gathered[place];
        *longest = holds.max(*longest);
        *furthest = reaches_back.max(*furthest);
        for (within, sample) in tag.samples.iter().enumerate() {
            samples.push((row(&tag.tag, sample)?, (at, within)));
        }
    }
    let tags = gathered.into_iter();
    Ok(tags
        .map(|(name, holds, reaches_back, mut samples)| {
            samples.sort_by_key(|(row, _)| row.time);
            let stretches = samples.chunk_by(|a, b| b.0.time.saturating_sub(a.0.time) <= near);
            Tag {
                name,
                holds,
                reaches_back,
                stretches: stretches.filter_map(Stretch::new).collect(),
            }
        })
        .collect())
}

/// Nanoseconds, none for what is negative.
fn length(duration: time::Duration) -> i64 {
    i64::try_from(duration.whole_nanoseconds().max(0)).unwrap_or(i64::MAX)
}

fn row(tag: &str, sample: &Sample) -> Result<Row, StoreError> {
    // The database would keep it as none.
    if sample.value.is_some_and(f64::is_nan) {
        return Err(corrupt(format!(
            "a sample of tag \"{tag}\" that is no number"
        )));
    }
    Ok(Row {
        time: nanoseconds(sample.time),
        value: sample.value,
        grade: match sample.quality.grade {
            Grade::Good => 0,
            Grade::Uncertain => 1,
            Grade::Bad => 2,
        },
        code: sample.quality.code.map(i64::from),
    })
}

impl Tag {
    /// The same with each instant as a stretch of its own.
    pub fn apart(&self) -> Tag {
        let samples = self.stretches.iter().flat_map(|stretch| {
            let instants = stretch.samples.chunk_by(|a, b| a.0.time == b.0.time);
            instants.filter_map(Stretch::new)
        });
        Tag {
            name: self.name.clone(),
            stretches: samples.collect(),
            ..*self
        }
    }
}

impl Stretch {
    fn new(samples: &[(Row, (usize, usize))]) -> Option<Self> {
        Some(Stretch {
            first: samples.first()?.0.time,
            last: samples.last()?.0.time,
            samples: samples.to_vec(),
        })
    }

    /// Which of the samples are new beside those that are there, in order of
    /// time. What has the time of another and not its content is in conflict.
    pub fn sift(&self, there: &[Row]) -> Sifted {
        let mut there = there.iter().copied().peekable();
        let mut sifted = Sifted {
            new: Vec::new(),
            known: 0,
            conflicting: Vec::new(),
        };
        for &(row, place) in &self.samples {
            let mut same_time = None;
            while let Some(other) = there.peek() {
                match other.time.cmp(&row.time) {
                    Ordering::Less => drop(there.next()),
                    Ordering::Equal => {
                        same_time = Some(*other);
                        break;
                    }
                    Ordering::Greater => break,
                }
            }
            let before = sifted.new.last().filter(|new| new.time == row.time);
            match same_time.or(before.copied()) {
                None => sifted.new.push(row),
                Some(other) if other == row => sifted.known += 1,
                Some(_) => sifted.conflicting.push(place),
            }
        }
        sifted
    }
}
