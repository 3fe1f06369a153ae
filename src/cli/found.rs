//! What a day's reports name, taken together: one cause stands in batch after
//! batch, and what comes by chance does not.

use super::check::counted;
use super::table::Table;
use super::text::minute;
use super::words::{accusation, cause_name};
use crate::report::{Accused, Hypothesis, Report};
use std::collections::{HashMap, HashSet};
use std::fmt;
use time::OffsetDateTime;

/// Batches in a row in which a cause must lead a group before it stands.
const IN_A_ROW: usize = 3;
/// Batches that the size at the end is a mean of.
const LATEST: usize = 12;
/// Causes that are listed at most.
const LISTED: usize = 10;
/// Part of its batches in which another must be in the group to be named with it.
const USUALLY: f64 = 0.5;

/// A cause that led a group.
struct Named<'r> {
    hypothesis: &'r Hypothesis,
    /// Batches in which it led, by their place in the day.
    batches: Vec<usize>,
    /// It, in each of them.
    accused: Vec<&'r Accused>,
    /// Others of its groups, with the number of batches they were there.
    others: HashMap<&'r Hypothesis, usize>,
}

/// What the suspects of many reports, in the order of their time, come to.
pub(super) struct Found<'r> {
    reports: &'r [Report],
    /// The one that was named most comes first.
    named: Vec<Named<'r>>,
}

/// A run of batches.
struct Run {
    first: usize,
    length: usize,
}

impl<'r> Found<'r> {
    pub fn new(reports: &'r [Report]) -> Self {
        let mut named: Vec<Named> = Vec::new();
        let mut place: HashMap<&Hypothesis, usize> = HashMap::new();
        for (batch, report) in reports.iter().enumerate() {
            for suspect in &report.suspects {
                let Some((first, others)) = suspect.group.split_first() else {
                    continue;
                };
                let at = *place.entry(&first.hypothesis).or_insert(named.len());
                if at == named.len() {
                    named.push(Named {
                        hypothesis: &first.hypothesis,
                        batches: Vec::new(),
                        accused: Vec::new(),
                        others: HashMap::new(),
                    });
                }
                let known = &mut named[at];
                known.batches.push(batch);
                known.accused.push(first);
                for other in others {
                    *known.others.entry(&other.hypothesis).or_default() += 1;
                }
            }
        }
        named.sort_by_key(|cause| std::cmp::Reverse(cause.batches.len()));
        Found { reports, named }
    }

    fn start(&self, batch: usize) -> OffsetDateTime {
        self.reports[batch].start
    }
}

impl Named<'_> {
    /// The first run in which it stood, and the longest.
    fn stood(&self) -> Option<[Run; 2]> {
        let mut runs: Vec<Run> = Vec::new();
        for &batch in &self.batches {
            match runs.last_mut() {
                Some(run) if run.first + run.length == batch => run.length += 1,
                _ => runs.push(Run {
                    first: batch,
                    length: 1,
                }),
            }
        }
        runs.retain(|run| run.length >= IN_A_ROW);
        let first = runs.first().map(|run| Run { ..*run })?;
        let longest = runs.into_iter().max_by_key(|run| run.length)?;
        Some([first, longest])
    }

    /// It with the mean of its latest sizes, and how many they are. The
    /// uncertainty is that of one batch: what is common to all is not averaged out.
    fn latest(&self) -> Option<(Accused, usize)> {
        let latest = &self.accused[self.accused.len().saturating_sub(LATEST)..];
        let mean = |of: fn(&Accused) -> f64| {
            latest.iter().map(|a| of(a)).sum::<f64>() / latest.len() as f64
        };
        let last = (*latest.last()?).clone();
        Some((
            Accused {
                size: mean(|a| a.size),
                uncertainty: mean(|a| a.uncertainty),
                ..last
            },
            latest.len(),
        ))
    }

    /// Who was usually in its group, the most frequent first.
    fn company(&self) -> Vec<String> {
        let least = USUALLY * self.batches.len() as f64;
        let mut usual: Vec<(usize, String)> = (self.others.iter())
            .filter(|&(_, &count)| count as f64 >= least)
            .map(|(hypothesis, &count)| (count, cause_name(hypothesis)))
            .collect();
        usual.sort_by(|a, b| b.0.cmp(&a.0).then_with(|| a.1.cmp(&b.1)));
        usual.into_iter().map(|(_, name)| name).collect()
    }
}

impl fmt::Display for Found<'_> {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let standing: Vec<(&Named, [Run; 2])> = (self.named.iter())
            .filter_map(|named| Some((named, named.stood()?)))
            .collect();
        let Some((leader, [first, longest])) = standing.first() else {
            writeln!(f, "No suspect stood in {IN_A_ROW} batches in a row.\n")?;
            return self.by_chance(f);
        };
        if let Some((accused, batches)) = leader.latest() {
            writeln!(
                f,
                "Suspected most: {}\n  (mean of the last {batches} batches that named it).",
                accusation(&accused)
            )?;
            writeln!(
                f,
                "  It first stood from {} UTC on, led in {} of {} batches, and in {} in a row from {} UTC.",
                minute(self.start(first.first)),
                leader.batches.len(),
                self.reports.len(),
                longest.length,
                minute(self.start(longest.first)),
            )?;
            match &leader.company()[..] {
                [] => writeln!(f, "  Usually nothing else could be meant.\n")?,
                others => writeln!(
                    f,
                    "  What could usually not be told from it: {}.\n",
                    others.join(", ")
                )?,
            }
        }
        let mut table = Table::new(&[
            "<suspects that stood",
            "<from (UTC)",
            "batches",
            "longest run",
            "<at the end",
        ]);
        for (named, [first, longest]) in standing.iter().take(LISTED) {
            let at_end = named.latest().map(|(accused, _)| accusation(&accused));
            table.row(vec![
                cause_name(named.hypothesis),
                minute(self.start(first.first)),
                named.batches.len().to_string(),
                longest.length.to_string(),
                at_end.unwrap_or_default(),
            ]);
        }
        writeln!(f, "{table}")?;
        self.by_chance(f)
    }
}

impl Found<'_> {
    fn by_chance(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let passing: Vec<&Named> = (self.named.iter())
            .filter(|named| named.stood().is_none())
            .collect();
        if passing.is_empty() {
            return Ok(());
        }
        let batches: HashSet<usize> = passing.iter().flat_map(|n| &n.batches).copied().collect();
        let batches = batches.len();
        let total = self.reports.len();
        write!(
            f,
            "Never in {IN_A_ROW} batches in a row: {}, in {batches} of {total} batches",
            counted(passing.len(), "other cause", "other causes")
        )?;
        let tests = self.reports.iter().filter_map(|r| r.global_test.as_ref());
        match tests.map(|test| 1.0 - test.confidence).next() {
            Some(part) => writeln!(
                f,
                "; by chance a suspect\nis named in {:.0} % of sound batches.\n",
                100.0 * part
            ),
            None => writeln!(f, ".\n"),
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use serde_json::{Value, json};

    fn report(batch: usize, suspects: Value) -> Report {
        let start = format!("2026-03-17T{:02}:{:02}:00Z", batch / 12, 5 * (batch % 12));
        serde_json::from_value(json!({
            "plant": "mill", "revision": 1, "batch": start, "start": start, "end": start,
            "verdict": "consistent", "tags": {}, "assumptions": {}, "streams": {},
            "equipment": {}, "suspects": suspects, "ignored_tags": [], "remarks": [],
            "global_test": {"statistic": 1.0, "degrees_of_freedom": 1, "critical_value": 3.8,
                            "p_value": 0.3, "confidence": 0.95},
        }))
        .unwrap()
    }

    fn suspect(group: &[(&str, f64)]) -> Value {
        let group = group.iter().map(|(of, size)| {
            json!({"cause": "bias", "of": of, "size": size, "uncertainty": 0.5, "unit": "t/h",
                   "ratio": 20.0, "detectable": 1.0})
        });
        json!({"group": group.collect::<Vec<_>>(), "statistic_before": 30.0,
               "statistic_after": 10.0, "balances": [], "tags": [], "checks": []})
    }

    #[test]
    fn what_stands_is_told_from_what_comes_by_chance() {
        let day: Vec<Report> = (0..30)
            .map(|batch| {
                let drift = 0.1 * batch as f64;
                report(
                    batch,
                    match batch {
                        // Twice in a row is not yet to stand.
                        3 | 4 => json!([suspect(&[("CHANCE", 1.0)])]),
                        10 | 11 => json!([suspect(&[("DRIFTS", drift)])]),
                        20.. => json!([suspect(&[("DRIFTS", drift), ("BESIDE", -drift)])]),
                        _ => json!([]),
                    },
                )
            })
            .collect();
        insta::with_settings!({ prepend_module_to_snapshot => false }, {
            insta::assert_snapshot!("found_in_a_day", Found::new(&day).to_string());
        });
    }

    #[test]
    fn a_quiet_day_names_nobody() {
        let day: Vec<Report> = (0..5).map(|batch| report(batch, json!([]))).collect();
        assert_eq!(
            Found::new(&day).to_string(),
            "No suspect stood in 3 batches in a row.\n\n"
        );
    }
}
