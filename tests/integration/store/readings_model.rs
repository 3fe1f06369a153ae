//! Which periods samples open, held to a model that looks at everything.
//!
//! The model keeps all samples in a set. Of each new one it finds the neighbours
//! among all that are there after the call, and opens its own period and every
//! period that it knows with an instant strictly between them, within what the
//! tag allows.

use super::readings::{added, at, closed, open, samples, tag};
use super::{plant, sqlite};
use counterpoise::plant::Sample;
use counterpoise::store::{BackfillMark, Closed, NewSamples, NewTagSamples, Store};
use proptest::prelude::*;
use proptest::test_runner::{Config, TestRunner};
use std::collections::{BTreeMap, BTreeSet};
use time::Duration;

const PERIOD: i64 = 60;

/// What each tag is like: how long its values hold, and how far they reach back.
const TAGS: [(&str, i64, i64); 3] = [("stepped", 150, 0), ("linear", 90, 90), ("sum", 0, 0)];

#[derive(Clone, Debug)]
enum Act {
    /// Tag and second of each sample; whether a backfill brings them.
    Add(Vec<(usize, i64)>, bool),
    /// Closes the open periods whose place is in here.
    Close(Vec<prop::sample::Index>),
}

#[derive(Default)]
struct Model {
    samples: [BTreeSet<i64>; 3],
    made: BTreeSet<i64>,
    /// Start, and whether only backfills touched it.
    open: BTreeMap<i64, bool>,
}

impl Model {
    /// Answers which periods were touched.
    fn add(&mut self, seconds: &[(usize, i64)], backfill: bool) -> BTreeSet<i64> {
        let new: Vec<(usize, i64)> = seconds
            .iter()
            .copied()
            .filter(|&(tag, second)| self.samples[tag].insert(second))
            .collect();
        let mut touched = BTreeSet::new();
        for (tag, second) in new {
            let (_, holds, reaches_back) = TAGS[tag];
            touched.insert(second.div_euclid(PERIOD) * PERIOD);
            let before = self.samples[tag].range(..second).next_back();
            let after = self.samples[tag].range(second + 1..).next();
            let from = before.map_or(i64::MIN, |&s| s).max(second - reaches_back);
            let to = after.map_or(i64::MAX, |&s| s).min(second + holds);
            let known = self.made.iter().chain(self.open.keys());
            touched
                .extend(known.filter(|&&start| from < to && start < to && start + PERIOD > from));
        }
        for &start in &touched {
            let only = self.open.entry(start).or_insert(true);
            *only = *only && backfill;
        }
        touched
    }

    fn open(&self) -> Vec<(i64, bool)> {
        let mut open: Vec<_> = self
            .open
            .iter()
            .map(|(&start, &only)| (start, only))
            .collect();
        open.sort_by_key(|&(start, only)| (only, start));
        open
    }
}

fn acts() -> impl Strategy<Value = Vec<Act>> {
    // On the edges of periods more often than chance would have it.
    let second = prop_oneof![(-3..12i64).prop_map(|n| n * PERIOD), -200..700i64];
    let add = (
        prop::collection::vec((0..TAGS.len(), second), 1..8),
        any::<bool>(),
    );
    let close = prop::collection::vec(any::<prop::sample::Index>(), 1..6);
    let act = prop_oneof![
        3 => add.prop_map(|(seconds, backfill)| Act::Add(seconds, backfill)),
        2 => close.prop_map(Act::Close),
    ];
    prop::collection::vec(act, 1..14)
}

fn call(plant: &str, seconds: &[(usize, i64)], backfill: bool) -> NewSamples {
    let tags = seconds.iter().map(|&(place, second)| {
        let (name, holds, reaches_back) = TAGS[place];
        let value: Sample = super::readings::sample(second, 1.0);
        NewTagSamples {
            holds: Duration::seconds(holds),
            ..tag(name, reaches_back, &[value])
        }
    });
    NewSamples {
        plant: plant.to_owned(),
        backfill: backfill.then(|| BackfillMark {
            name: "b".to_owned(),
            bytes: 0,
            lines: 0,
            refused: 0,
            header: None,
        }),
        ..samples(tags.collect())
    }
}

async fn check(store: &dyn Store, name: &str, acts: &[Act]) -> Result<(), TestCaseError> {
    store.put_plant(plant(name, "{}")).await.expect("put");
    let mut model = Model::default();
    let periods = async || {
        let far = at(1_000_000);
        store.open_periods(name, far, 1000).await.expect("read")
    };
    for (place, act) in (1u8..).zip(acts) {
        let before = periods().await;
        match act {
            Act::Add(seconds, backfill) => {
                added(store, call(name, seconds, *backfill)).await;
                let touched = model.add(seconds, *backfill);
                for period in periods().await {
                    let former = before.iter().find(|other| other.start == period.start);
                    let grown = former.is_none_or(|former| former.generation < period.generation);
                    let start = (period.start - at(0)).whole_seconds();
                    prop_assert_eq!(grown, touched.contains(&start), "{} after {:?}", start, act);
                }
            }
            Act::Close(places) => {
                for index in places {
                    let open = periods().await;
                    if open.is_empty() {
                        break;
                    }
                    let period = index.get(&open);
                    let closed = closed(store, period, place).await;
                    let start = (period.start - at(0)).whole_seconds();
                    let fresh = model.made.insert(start);
                    prop_assert_eq!(matches!(closed, Closed::New(_)), fresh);
                    prop_assert_eq!(matches!(closed, Closed::Changed(_)), !fresh);
                    model.open.remove(&start);
                }
            }
        }
        let open = periods().await.into_iter();
        let open: Vec<(i64, bool)> = open
            .map(|period| ((period.start - at(0)).whole_seconds(), period.backfill))
            .collect();
        prop_assert_eq!(open, model.open(), "after {:?}", act);
    }
    Ok(())
}

#[test]
fn samples_open_the_periods_that_they_change_and_no_others() {
    let runtime = tokio::runtime::Runtime::new().expect("a runtime");
    let (_directory, store) = runtime.block_on(sqlite());
    let mut runner = TestRunner::new(Config {
        cases: 96,
        failure_persistence: None,
        ..Config::default()
    });
    let count = std::cell::Cell::new(0);
    let outcome = runner.run(&acts(), |acts| {
        count.set(count.get() + 1);
        runtime.block_on(check(&store, &format!("p{}", count.get()), &acts))
    });
    if let Err(error) = outcome {
        panic!("{error}");
    }
    runtime.block_on(store.close()).expect("closed");
}

/// The length of periods is changed while some are made and some are open: each
/// instant still belongs to one period.
#[tokio::test]
async fn periods_do_not_overlap_where_their_length_changes() {
    let (_directory, store) = sqlite().await;
    store.put_plant(plant("p", "{}")).await.expect("put");
    let with = |minutes: i64, second: i64| NewSamples {
        period: Duration::minutes(minutes),
        ..samples(vec![tag("F-1", 0, &[super::readings::sample(second, 1.0)])])
    };
    let seconds = [10, 610, 130, 65, 330, 700, 599, 0, 1100, 1260];
    let mut spans = BTreeMap::new();
    for (place, second) in (0..).zip(seconds) {
        added(&store, with([1, 5, 3][place % 3], second)).await;
        let open = open(&store).await;
        let own = open
            .iter()
            .find(|period| period.start <= at(second) && at(second) < period.end);
        let own = own.expect("a period of its own");
        spans.insert(own.start, own.end);
        if place % 2 == 0 {
            let closed = closed(&store, own, 1).await;
            assert!(
                matches!(closed, Closed::New(_) | Closed::Same(_)),
                "{closed:?}"
            );
        }
    }
    let spans: Vec<_> = spans.into_iter().collect();
    for pair in spans.windows(2) {
        assert!(pair[0].1 <= pair[1].0, "{pair:?}");
    }
    assert!(spans.len() > 4, "{spans:?}");
    store.close().await.expect("closed");
}
