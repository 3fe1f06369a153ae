//! Walks of batches and acts of people, drawn at random, against what must hold
//! of every walk: a silenced alarm tells nothing, nothing is raised that was not
//! significant for long enough, one cause has one alarm, and states change only
//! along the lines of the standard.

use super::*;
use crate::alarms::{Accusation, Alarm, AlarmKind};
use proptest::prelude::*;
use std::collections::{HashMap, HashSet};

/// How a statistic stands.
#[derive(Clone, Copy, Debug, PartialEq)]
enum Level {
    Low,
    Between,
    Unknown,
    Over,
}

#[derive(Clone, Debug)]
enum Step {
    Batch {
        late: bool,
        verdict: Verdict,
        /// Members of up to two suspects, by their place in [`pool`].
        groups: Vec<Vec<usize>>,
        /// Of FT-101, FT-102, TT-103 and the energy balance.
        levels: [Level; 4],
    },
    /// An act of a person on an alarm.
    Act { action: u8, id: u64, minutes: i64 },
    /// Time goes by.
    Wait { minutes: i64 },
    /// The watch is stored and read again.
    Store,
}

/// What may be suspected; the first three are tags with a level.
fn pool() -> [Hypothesis; 4] {
    [bias("FT-101"), bias("FT-102"), bias("TT-103"), leak()]
}

const SINGLES: [&str; 4] = [
    "adjustment FT-101",
    "adjustment FT-102",
    "adjustment TT-103",
    "imbalance heater-6 energy",
];

fn level() -> impl Strategy<Value = Level> {
    prop_oneof![
        4 => Just(Level::Low),
        1 => Just(Level::Between),
        1 => Just(Level::Unknown),
        4 => Just(Level::Over),
    ]
}

fn step() -> impl Strategy<Value = Step> {
    let verdict = prop_oneof![
        8 => Just(Verdict::Inconsistent),
        1 => Just(Verdict::NotConverged),
        1 => Just(Verdict::NotRedundant),
    ];
    let group = proptest::sample::subsequence(vec![0, 1, 2, 3], 1..=3).prop_shuffle();
    let groups = proptest::collection::vec(group, 0..=2);
    let levels = [level(), level(), level(), level()];
    let batch = (proptest::bool::weighted(0.1), verdict, groups, levels);
    prop_oneof![
        12 => batch.prop_map(|(late, verdict, groups, levels)| Step::Batch {
            late, verdict, groups, levels,
        }),
        6 => (0..5_u8, 1..6_u64, 0..60_i64).prop_map(|(action, id, minutes)| Step::Act {
            action, id, minutes,
        }),
        1 => (1..60_i64).prop_map(|minutes| Step::Wait { minutes }),
        1 => Just(Step::Store),
    ]
}

fn report(n: i64, verdict: Verdict, groups: &[Vec<usize>], levels: [Level; 4]) -> Report {
    let value = |level| match level {
        Level::Low => Some(-1.0),
        Level::Between => Some(3.5),
        Level::Unknown => None,
        Level::Over => Some(-5.0),
    };
    let mut report = Report {
        verdict,
        ..batch(n)
    };
    let members = |group: &Vec<usize>| group.iter().map(|i| pool()[*i].clone()).collect();
    let groups: Vec<Vec<Hypothesis>> = groups.iter().map(members).collect();
    for group in &groups {
        report = report.suspect(group);
    }
    let [.., energy] = levels;
    if groups.is_empty() {
        for (name, level) in TAGS.iter().zip(levels) {
            report = report.tag(name, value(level));
        }
        report.energy(value(energy))
    } else {
        // Before they are taken out everything is over.
        for name in TAGS {
            report = report.tag(name, Some(9.0));
        }
        report.energy(Some(9.0)).rest(|after| {
            for (name, level) in TAGS.iter().zip(levels) {
                after.tags[*name] = tag(value(level));
            }
            let own = &mut after.equipment[EQUIPMENT].imbalance;
            own.energy = Some(imbalance(value(energy), "kW"));
        })
    }
}

/// What is known of the batches that counted, worked out from the steps alone.
#[derive(Default)]
struct Reference {
    over: [u32; 4],
    below: [u32; 4],
    standing: [bool; 4],
    past: Vec<(Vec<Vec<usize>>, [Level; 4])>,
}

impl Reference {
    fn count(&mut self, groups: &[Vec<usize>], levels: [Level; 4], settings: &AlarmSettings) {
        self.past.push((groups.to_vec(), levels));
        for (at, level) in levels.into_iter().enumerate() {
            let is_member = groups.iter().flatten().any(|member| *member == at);
            match level {
                _ if is_member => self.low(at),
                Level::Low => self.low(at),
                Level::Over => {
                    self.over[at] += 1;
                    self.below[at] = 0;
                }
                Level::Between | Level::Unknown => {}
            }
            if self.standing[at] {
                self.standing[at] = self.below[at] < settings.clear_after;
            } else {
                self.standing[at] = self.over[at] >= settings.raise_after;
            }
        }
    }

    fn low(&mut self, at: usize) {
        self.over[at] = 0;
        self.below[at] += 1;
    }

    /// Batches in which a suspect stood that shares a member with these, with
    /// those that share one with it, and so on into the past, until a batch is
    /// below for whatever may be suspected.
    fn significant(&self, members: &[Hypothesis]) -> u32 {
        let places = |h: &Hypothesis| pool().iter().position(|member| member == h);
        let mut chain: HashSet<usize> = members.iter().filter_map(places).collect();
        let mut count = 0;
        for (groups, levels) in self.past.iter().rev() {
            let shares = |g: &&Vec<usize>| g.iter().any(|member| chain.contains(member));
            let sharing: Vec<_> = groups.iter().filter(shares).collect();
            let is_quiet = levels[..3].iter().all(|level| *level == Level::Low);
            if groups.is_empty() && is_quiet {
                break;
            }
            count += u32::from(!sharing.is_empty());
            chain.extend(sharing.into_iter().flatten());
        }
        count
    }
}

/// The lines along which states change.
fn is_allowed(kind: EventKind, from: State, to: State) -> bool {
    use State::{
        ActiveAcknowledged as Known, ActiveUnacknowledged as New, Normal, OutOfService as Out,
        ReturnedUnacknowledged as Gone, Shelved,
    };
    match kind {
        EventKind::Raised => matches!((from, to), (Normal | Gone, New)),
        EventKind::Returned => matches!((from, to), (New, Gone) | (Known, Normal)),
        EventKind::Acknowledged => matches!((from, to), (New, Known) | (Gone, Normal)),
        EventKind::Shelved => matches!((from, to), (Normal | New | Known | Gone, Shelved)),
        EventKind::Unshelved => matches!((from, to), (Shelved, Normal | New | Known)),
        EventKind::RemovedFromService => from != Out && to == Out,
        EventKind::ReturnedToService => matches!((from, to), (Out, Normal | New | Known)),
        EventKind::Renamed => from == to && matches!(from, New | Known | Gone),
    }
}

/// A walk, and what has been seen on it.
struct Walk {
    settings: AlarmSettings,
    watch: Watch,
    reference: Reference,
    now: OffsetDateTime,
    states: HashMap<u64, State>,
    accusations: HashMap<u64, Accusation>,
}

impl Walk {
    fn take(&mut self, n: i64, step: &Step) -> Result<(), TestCaseError> {
        match step {
            Step::Batch {
                late,
                verdict,
                groups,
                levels,
            } => {
                let number = if *late { n - 30 } else { n };
                let report = report(number, *verdict, groups, *levels);
                let is_new = self.watch.newest().is_none_or(|end| report.end > end);
                let counts = is_new && *verdict == Verdict::Inconsistent;
                if counts {
                    self.reference.count(groups, *levels, &self.settings);
                }
                let events = self.watch.look(&report, &self.settings, self.now);
                let raised = events.iter().filter(|e| e.kind == EventKind::Raised);
                let suspects = raised.filter(|e| e.alarm.kind == AlarmKind::Suspect);
                let most = if counts { groups.len() } else { 0 };
                prop_assert!(suspects.count() <= most);
                self.follow(&events)?;
            }
            Step::Act {
                action,
                id,
                minutes,
            } => {
                let events = self.watch.pass_time(self.now);
                self.follow(&events)?;
                let before = self.watch.clone();
                let act = Act {
                    by: "R. Hale".to_owned(),
                    at: self.now,
                    note: None,
                };
                let until = self.now + Duration::minutes(*minutes);
                let done = match action {
                    0 => self.watch.acknowledge(*id, act),
                    1 => self.watch.shelve(*id, until, act),
                    2 => self.watch.unshelve(*id, act),
                    3 => self.watch.remove_from_service(*id, "work", act),
                    _ => self.watch.return_to_service(*id, act),
                };
                match done {
                    Ok(event) => self.follow(&[event])?,
                    Err(_) => prop_assert_eq!(&self.watch, &before),
                }
            }
            Step::Wait { minutes } => {
                self.now += Duration::minutes(*minutes);
                let events = self.watch.pass_time(self.now);
                self.follow(&events)?;
            }
            Step::Store => {
                let text = serde_json::to_string(&self.watch).unwrap();
                let stored: Watch = serde_json::from_str(&text).unwrap();
                prop_assert_eq!(&stored, &self.watch);
                self.watch = stored;
            }
        }
        self.check()
    }

    fn follow(&mut self, events: &[Event]) -> Result<(), TestCaseError> {
        for event in events {
            let Event { kind, alarm, .. } = event;
            let from = self.states.insert(alarm.id, alarm.state);
            let from = from.unwrap_or(State::Normal);
            prop_assert!(
                is_allowed(*kind, from, alarm.state),
                "{kind:?}: {from:?} to {:?}",
                alarm.state
            );
            if *kind == EventKind::Raised && alarm.kind == AlarmKind::Suspect {
                let significant = self.reference.significant(&alarm.members);
                prop_assert!(significant >= self.settings.raise_after, "{significant}");
                prop_assert!(alarm.accusation.is_some());
            }
        }
        Ok(())
    }

    fn check(&mut self) -> Result<(), TestCaseError> {
        let mut keys = HashSet::new();
        for alarm in self.watch.alarms() {
            // Nothing changes without being told.
            prop_assert_eq!(self.states.get(&alarm.id), Some(&alarm.state));
            prop_assert!(!alarm.is_live() || keys.insert(&alarm.key), "{}", alarm.key);
            prop_assert_eq!(alarm.shelved.is_some(), alarm.state == State::Shelved);
            let is_out = alarm.out_of_service.is_some();
            prop_assert_eq!(is_out, alarm.state == State::OutOfService);
            match alarm.state {
                State::ActiveUnacknowledged | State::ActiveAcknowledged => {
                    prop_assert!(alarm.standing);
                }
                State::Normal | State::ReturnedUnacknowledged => prop_assert!(!alarm.standing),
                State::Shelved | State::OutOfService => {}
            }
        }
        // Balances and adjustments stand exactly when the reference says so, told
        // of or not, and whatever people did meanwhile.
        let alarms = self.watch.alarms().iter();
        let standing: HashSet<&str> = alarms
            .filter(|alarm: &&Alarm| alarm.standing && alarm.kind != AlarmKind::Suspect)
            .map(|alarm| alarm.key.as_str())
            .collect();
        let expected = SINGLES.iter().zip(self.reference.standing);
        let expected = expected.filter(|(_, stands)| *stands).map(|(key, _)| *key);
        prop_assert_eq!(standing, expected.collect::<HashSet<_>>());
        for accusation in self.watch.changed_accusations() {
            self.accusations.insert(accusation.id, accusation);
        }
        // Nobody closes any here: one for each alarm at most.
        let accused: HashSet<u64> = self.accusations.values().map(|a| a.alarm).collect();
        prop_assert_eq!(accused.len(), self.accusations.len());
        Ok(())
    }
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(400))]

    #[test]
    fn every_walk_keeps_the_rules(
        raise_after in 1..4_u32,
        clear_after in 1..4_u32,
        steps in proptest::collection::vec(step(), 1..120),
    ) {
        let mut walk = Walk {
            settings: AlarmSettings { raise_after, clear_after, ..AlarmSettings::default() },
            watch: Watch::new("tarn-mill"),
            reference: Reference::default(),
            now: at(0),
            states: HashMap::new(),
            accusations: HashMap::new(),
        };
        for (n, step) in (1..).zip(&steps) {
            walk.now = walk.now.max(at(n));
            walk.take(n, step)?;
        }
    }
}

/// The walks go where the rules matter: every kind of event and every state is
/// met, by a walk that is always the same.
#[test]
fn walks_reach_every_state() {
    use proptest::strategy::ValueTree;
    use proptest::test_runner::TestRunner;
    let mut runner = TestRunner::deterministic();
    let (mut kinds, mut states) = (HashSet::new(), HashSet::new());
    for _ in 0..50 {
        let mut watch = Watch::new("tarn-mill");
        for n in 1..120 {
            let events = match step().new_tree(&mut runner).unwrap().current() {
                Step::Batch {
                    verdict,
                    groups,
                    levels,
                    ..
                } => {
                    let report = report(n, verdict, &groups, levels);
                    watch.look(&report, &AlarmSettings::default(), at(n))
                }
                Step::Act { action, id, .. } => {
                    let done = match action {
                        0 => watch.acknowledge(id, act(n)),
                        1 => watch.shelve(id, at(n + 5), act(n)),
                        2 => watch.unshelve(id, act(n)),
                        3 => watch.remove_from_service(id, "work", act(n)),
                        _ => watch.return_to_service(id, act(n)),
                    };
                    done.into_iter().collect()
                }
                Step::Wait { .. } | Step::Store => Vec::new(),
            };
            kinds.extend(events.iter().map(|event| event.kind));
            states.extend(watch.alarms().iter().map(|alarm| alarm.state));
        }
    }
    assert_eq!((kinds.len(), states.len()), (8, 6));
}
