//! Which periods samples change.
//!
//! A sample at t between its neighbours p < t < n changes what is known of its
//! tag between p and n and nowhere else; less where a value holds for a limited
//! time or, at p, where no line joins the two. So it changes the means of the
//! periods that have an instant in common with the open interval (p, n) cut to
//! (t - reach, t + hold), beside its own.
//!
//! Of several new samples the union counts. It is the same whether each looks at
//! its neighbours among all of them or among the old ones only: what one takes
//! too much, behind a new neighbour, that neighbour takes anyway.

use std::collections::BTreeMap;

/// Periods of a plant around the samples of a call, by start and end.
pub(super) struct Periods {
    /// Length of new ones.
    length: i64,
    /// Those that are made or open; no two overlap.
    known: BTreeMap<i64, i64>,
    /// Those that are to be open.
    opened: BTreeMap<i64, i64>,
}

impl Periods {
    /// With the periods that are made or open.
    pub fn new(length: i64, known: Vec<(i64, i64)>) -> Self {
        Periods {
            length,
            known: known.into_iter().collect(),
            opened: BTreeMap::new(),
        }
    }

    /// Opens the period of an instant: the one that is known, or a new one,
    /// shortened where known ones of another length lie in the way.
    pub fn open_own(&mut self, time: i64) {
        let before = self.known.range(..=time).next_back();
        if let Some((&start, &end)) = before
            && time < end
        {
            self.opened.insert(start, end);
            return;
        }
        let aligned = aligned(time, self.length);
        let start = before.map_or(aligned, |(_, &end)| aligned.max(end));
        let end = aligned.saturating_add(self.length);
        let after = self.known.range(time..).next();
        let end = after.map_or(end, |(&next, _)| end.min(next));
        self.known.insert(start, end);
        self.opened.insert(start, end);
    }

    /// Whether periods that are not to be open yet have an instant in common
    /// with an open interval.
    pub fn would_open(&self, from: i64, to: i64) -> bool {
        let mut within = self.within(from, to);
        within.any(|(start, _)| !self.opened.contains_key(&start))
    }

    /// Opens every known period that has an instant in common with one of these
    /// open intervals.
    pub fn open_within(&mut self, mut intervals: Vec<(i64, i64)>) {
        intervals.sort_unstable();
        let mut done = i64::MIN;
        for (from, to) in intervals {
            let rest: Vec<_> = self.within(from.max(done), to).collect();
            self.opened.extend(rest);
            done = done.max(to);
        }
    }

    /// Start and end of what is to be open, in order.
    pub fn opened(&self) -> Vec<(i64, i64)> {
        self.opened.iter().map(|(&s, &e)| (s, e)).collect()
    }

    fn within(&self, from: i64, to: i64) -> impl Iterator<Item = (i64, i64)> {
        let first = self.known.range(..=from).next_back();
        let first = first.map_or(from, |(&start, _)| start);
        let reached = self.known.range(first..to.max(first));
        let reached = reached.map(|(&start, &end)| (start, end));
        reached.filter(move |&(start, end)| from < to && start < to && end > from)
    }
}

/// Start of the period of an instant, counted from 1970.
pub(super) fn aligned(time: i64, length: i64) -> i64 {
    time.saturating_sub(time.rem_euclid(length))
}

#[cfg(test)]
mod tests {
    use super::*;

    fn opened(known: &[(i64, i64)], own: &[i64], intervals: &[(i64, i64)]) -> Vec<(i64, i64)> {
        let mut periods = Periods::new(10, known.to_vec());
        for &time in own {
            periods.open_own(time);
        }
        periods.open_within(intervals.to_vec());
        periods.opened()
    }

    #[test]
    fn a_sample_has_one_period() {
        for (time, start) in [(0, 0), (9, 0), (10, 10), (-1, -10), (-10, -10)] {
            assert_eq!(opened(&[], &[time], &[]), [(start, start + 10)], "{time}");
        }
    }

    #[test]
    fn periods_of_another_length_are_kept_and_never_overlapped() {
        assert_eq!(opened(&[(0, 30)], &[25], &[]), [(0, 30)]);
        assert_eq!(opened(&[(0, 5)], &[7], &[]), [(5, 10)]);
        assert_eq!(opened(&[(5, 10)], &[2], &[]), [(0, 5)]);
        assert_eq!(opened(&[(0, 2), (6, 20)], &[3], &[]), [(2, 6)]);
    }

    #[test]
    fn an_interval_opens_what_it_has_an_instant_in_common_with() {
        let known = [(0, 10), (10, 20), (30, 40)];
        for (interval, expected) in [
            ((10, 30), &[(10, 20)][..]),
            ((9, 10), &[(0, 10)]),
            ((9, 11), &[(0, 10), (10, 20)]),
            ((20, 30), &[]),
            ((15, 15), &[]),
            ((-5, 100), &known),
        ] {
            assert_eq!(opened(&known, &[], &[interval]), expected, "{interval:?}");
        }
        let both = opened(&known, &[], &[(12, 13), (0, 10), (5, 35)]);
        assert_eq!(both, known, "intervals in any order");
    }
}
