//! What is new of a tag's samples, and what it changes.

use super::sift::{Row, Stretch, Tag};

/// What is new in a stretch, and what else is there.
pub(super) struct Kept<'a> {
    pub tag: &'a Tag,
    pub tag_id: i64,
    pub stretch: &'a Stretch,
    pub there: Vec<Row>,
    pub new: Vec<Row>,
}

impl Kept<'_> {
    /// As far as these samples can change anything.
    pub fn reach(&self) -> (i64, i64) {
        (
            self.stretch.first.saturating_sub(self.tag.reaches_back),
            self.stretch.last.saturating_add(self.tag.holds),
        )
    }

    /// The place to look for neighbours: tag, first, last, and how far away.
    pub fn asked(&self) -> (i64, i64, i64, i64, i64) {
        let (from, to) = self.reach();
        (self.tag_id, self.stretch.first, self.stretch.last, from, to)
    }

    /// The open intervals that the new samples change, given the samples before
    /// and after the stretch.
    pub fn changed(&self, before: Option<i64>, after: Option<i64>) -> Vec<(i64, i64)> {
        let within = self.there.iter().chain(&self.new).map(|row| row.time);
        let mut times: Vec<i64> = before.into_iter().chain(within).chain(after).collect();
        times.sort_unstable();
        let intervals = self.new.iter().map(|row| {
            let at = times.partition_point(|&time| time < row.time);
            let former = at.checked_sub(1).map_or(i64::MIN, |at| times[at]);
            let next = times.get(at + 1).copied().unwrap_or(i64::MAX);
            (
                former.max(row.time.saturating_sub(self.tag.reaches_back)),
                next.min(row.time.saturating_add(self.tag.holds)),
            )
        });
        intervals.collect()
    }
}
