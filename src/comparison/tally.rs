//! Sums over pairs of reports, and what they come to.

use super::values::values;
use super::{
    BatchChange, Comparison, DeterminedChange, Moved, StatisticChange, SuspectChange, ValueChange,
    VerdictChange,
};
use crate::report::{Hypothesis, Report, Suspect, Verdict};
use indexmap::{IndexMap, IndexSet};
use std::cmp::Ordering;
use std::collections::HashMap;

/// Values that are told of a comparison.
const MOST_MOVED: usize = 100;

/// Batches that are told of a comparison.
const MOST_BATCHES: usize = 20;

/// Sums over the pairs so far.
#[derive(Clone, Debug, Default)]
pub struct Tally {
    batches: u64,
    verdicts: Vec<VerdictChange>,
    statistic: Statistic,
    suspects: IndexMap<Hypothesis, Suspected>,
    values: IndexMap<String, Sums>,
    units_changed: IndexSet<String>,
    largest: Vec<BatchChange>,
}

/// One batch as it stands and as it would be.
#[derive(Clone, Copy, Debug)]
pub struct Pair<'r> {
    /// As it stands.
    pub before: &'r Report,
    /// Under the other revision.
    pub after: &'r Report,
}

#[derive(Clone, Copy, Debug, Default)]
struct Statistic {
    batches: u64,
    before: f64,
    after: f64,
    freedom_before: f64,
    freedom_after: f64,
}

#[derive(Clone, Copy, Debug, Default)]
struct Suspected {
    gained: u64,
    lost: u64,
    stayed: u64,
}

#[derive(Clone, Debug, Default)]
struct Sums {
    unit: String,
    batches: u64,
    before: f64,
    after: f64,
    /// Of the change itself: the difference of two large means would lose
    /// digits.
    moved: f64,
    variance: f64,
    only_before: u64,
    only_after: u64,
}

impl Tally {
    /// Takes in one batch.
    pub fn add(&mut self, pair: Pair) {
        self.batches += 1;
        self.verdict(pair.before.verdict, pair.after.verdict);
        self.statistic(pair);
        self.suspects(&pair.before.suspects, &pair.after.suspects);
        self.values(pair);
        let change = pair.change();
        if change.is_one() {
            self.largest.push(change);
            self.largest
                .sort_by(|a, b| further(&a.furthest, &b.furthest));
            self.largest.truncate(MOST_BATCHES);
        }
    }

    /// What the sums come to.
    pub fn comparison(&self) -> Comparison {
        let mut suspects: Vec<SuspectChange> = self.suspects.iter().map(suspect_change).collect();
        suspects.sort_by_key(|change| std::cmp::Reverse(change.gained + change.lost));
        let both = self.values.iter().filter(|(_, sums)| sums.batches > 0);
        let mut moved: Vec<Moved> = both.map(|(of, sums)| sums.moved(of)).collect();
        moved.retain(|moved| moved.moved != 0.0);
        moved.sort_by(|a, b| by_size(a.in_uncertainties, b.in_uncertainties));
        moved.truncate(MOST_MOVED);
        let sided = self.values.iter().map(|(of, sums)| DeterminedChange {
            of: of.clone(),
            only_before: sums.only_before,
            only_after: sums.only_after,
        });
        let mut determined: Vec<DeterminedChange> =
            sided.filter(|c| c.only_before + c.only_after > 0).collect();
        determined.sort_by_key(|c| std::cmp::Reverse(c.only_before + c.only_after));
        determined.truncate(MOST_MOVED);
        Comparison {
            batches: self.batches,
            verdicts: self.verdicts.clone(),
            statistic: self.statistic.mean(),
            suspects,
            moved,
            determined,
            units_changed: self.units_changed.iter().cloned().collect(),
            largest: self.largest.clone(),
        }
    }

    fn verdict(&mut self, before: Verdict, after: Verdict) {
        let mut known = self.verdicts.iter_mut();
        match known.find(|change| change.before == before && change.after == after) {
            Some(change) => change.batches += 1,
            None => self.verdicts.push(VerdictChange {
                before,
                after,
                batches: 1,
            }),
        }
    }

    fn statistic(&mut self, pair: Pair) {
        let tests = pair.before.global_test.zip(pair.after.global_test);
        if let Some((before, after)) = tests {
            let sums = &mut self.statistic;
            sums.batches += 1;
            sums.before += before.statistic;
            sums.after += after.statistic;
            sums.freedom_before += before.degrees_of_freedom as f64;
            sums.freedom_after += after.degrees_of_freedom as f64;
        }
    }

    fn suspects(&mut self, before: &[Suspect], after: &[Suspect]) {
        let mut leaders: IndexSet<&Hypothesis> = leaders(before).collect();
        leaders.extend(self::leaders(after));
        for who in leaders {
            let counts = self.suspects.entry(who.clone()).or_default();
            match (is_suspected(before, who), is_suspected(after, who)) {
                (true, true) => counts.stayed += 1,
                (true, false) => counts.lost += 1,
                (false, _) => counts.gained += 1,
            }
        }
    }

    fn values(&mut self, pair: Pair) {
        let mut after: HashMap<String, _> = values(pair.after).collect();
        for (of, before) in values(pair.before) {
            let after = after.remove(&of);
            if after.is_some_and(|after| after.unit != before.unit) {
                self.units_changed.insert(of);
                continue;
            }
            let estimate = after.and_then(|after| after.estimate);
            let sums = self.values.entry(of).or_default();
            sums.unit.clear();
            sums.unit.push_str(before.unit);
            match (before.estimate, estimate) {
                (Some(before), Some(after)) => sums.add(before, after),
                (Some(_), None) => sums.only_before += 1,
                (None, Some(_)) => sums.only_after += 1,
                (None, None) => {}
            }
        }
        // In the report's order, whatever the order of the map.
        for (of, value) in values(pair.after) {
            if after.contains_key(&of) && value.estimate.is_some() {
                let sums = self.values.entry(of).or_default();
                sums.unit.clear();
                sums.unit.push_str(value.unit);
                sums.only_after += 1;
            }
        }
    }
}

impl Pair<'_> {
    /// What changed most.
    pub fn change(&self) -> BatchChange {
        BatchChange {
            batch: self.before.batch.clone(),
            start: self.before.start,
            before: self.before.verdict,
            after: self.after.verdict,
            furthest: self.furthest(),
        }
    }

    fn furthest(&self) -> Option<ValueChange> {
        let after: HashMap<String, _> = values(self.after).collect();
        let changes = values(self.before).filter_map(|(of, before)| {
            let after = after.get(&of).filter(|after| after.unit == before.unit)?;
            let ((x, u), (y, v)) = before.estimate.zip(after.estimate)?;
            let uncertainty = (f64::midpoint(u * u, v * v)).sqrt();
            Some(ValueChange {
                of,
                before: x,
                after: y,
                uncertainty,
                in_uncertainties: ratio(y - x, uncertainty),
                unit: before.unit.to_owned(),
            })
        });
        // Of equal ones the first.
        changes.reduce(|best, next| match by_size(size(&best), size(&next)) {
            Ordering::Greater => next,
            _ => best,
        })
    }
}

impl BatchChange {
    /// Whether the verdict or a value is another.
    fn is_one(&self) -> bool {
        let moved = self.furthest.as_ref().is_some_and(|f| f.before != f.after);
        moved || self.before != self.after
    }
}

impl Statistic {
    fn mean(&self) -> Option<StatisticChange> {
        let n = self.batches as f64;
        (self.batches > 0).then(|| StatisticChange {
            batches: self.batches,
            before: self.before / n,
            after: self.after / n,
            degrees_of_freedom_before: self.freedom_before / n,
            degrees_of_freedom_after: self.freedom_after / n,
        })
    }
}

impl Sums {
    fn add(&mut self, (x, u): (f64, f64), (y, v): (f64, f64)) {
        self.batches += 1;
        self.before += x;
        self.after += y;
        self.moved += y - x;
        self.variance += f64::midpoint(u * u, v * v);
    }

    fn moved(&self, of: &str) -> Moved {
        let n = self.batches as f64;
        let (moved, uncertainty) = (self.moved / n, (self.variance / n).sqrt());
        Moved {
            of: of.to_owned(),
            batches: self.batches,
            before: self.before / n,
            after: self.after / n,
            moved,
            uncertainty,
            in_uncertainties: ratio(moved, uncertainty),
            unit: self.unit.clone(),
        }
    }
}

fn suspect_change((who, counts): (&Hypothesis, &Suspected)) -> SuspectChange {
    SuspectChange {
        hypothesis: who.clone(),
        gained: counts.gained,
        lost: counts.lost,
        stayed: counts.stayed,
    }
}

fn leaders(suspects: &[Suspect]) -> impl Iterator<Item = &Hypothesis> {
    let firsts = suspects.iter().filter_map(|suspect| suspect.group.first());
    firsts.map(|accused| &accused.hypothesis)
}

fn is_suspected(suspects: &[Suspect], who: &Hypothesis) -> bool {
    let mut members = suspects.iter().flat_map(|suspect| &suspect.group);
    members.any(|accused| accused.hypothesis == *who)
}

/// Null of a value that is exact, and zero of one that stayed.
fn ratio(moved: f64, uncertainty: f64) -> Option<f64> {
    if moved == 0.0 {
        return Some(0.0);
    }
    let ratio = moved / uncertainty;
    ratio.is_finite().then_some(ratio)
}

fn size(change: &ValueChange) -> Option<f64> {
    change.in_uncertainties
}

/// The largest first; an exact value that moved before all.
fn by_size(a: Option<f64>, b: Option<f64>) -> Ordering {
    let size = |ratio: Option<f64>| ratio.map_or(f64::INFINITY, f64::abs);
    size(b).total_cmp(&size(a))
}

fn further(a: &Option<ValueChange>, b: &Option<ValueChange>) -> Ordering {
    let size = |change: &Option<ValueChange>| change.as_ref().map_or(Some(0.0), size);
    by_size(size(a), size(b))
}
