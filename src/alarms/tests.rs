//! Alarms from reports made by hand.

mod accusing;
mod operating;
mod walk;
mod watching;

use super::{Act, Alarm, Event, EventKind, Key, State, Watch};
use crate::plant::AlarmSettings;
use crate::report::{
    Accused, AfterSuspects, Cause, Class, EquipmentReport, GlobalTest, Hypothesis, Imbalance,
    Imbalances, Report, SingleTest, Suspect, TagReport, Verdict,
};
use indexmap::IndexMap;
use time::macros::datetime;
use time::{Duration, OffsetDateTime};

/// Critical value of every report here; the dead band ends at 3.2.
const CRITICAL: f64 = 4.0;

const TAGS: [&str; 3] = ["FT-101", "FT-102", "TT-103"];
const ASSUMPTION: &str = "drop-6";
const EQUIPMENT: &str = "heater-6";
const SIDES: [&str; 2] = ["steam", "tube"];

/// End of the period of the n-th batch, and when it is looked at.
fn at(n: i64) -> OffsetDateTime {
    datetime!(2031-04-02 10:00 UTC) + Duration::minutes(5 * n)
}

/// A report of the n-th batch in which nothing stands out.
fn batch(n: i64) -> Report {
    Report {
        plant: "tarn-mill".to_owned(),
        revision: 1,
        batch: format!("b{n}"),
        start: at(n - 1),
        end: at(n),
        verdict: Verdict::Consistent,
        reason: None,
        global_test: None,
        single_test: Some(SingleTest {
            critical_value: CRITICAL,
            method: "simulated".to_owned(),
            statistics: 10,
            class_set: "a".to_owned(),
            group_distance: 3.0,
        }),
        tags: TAGS.map(|name| (name.to_owned(), tag(Some(0.1)))).into(),
        assumptions: [(ASSUMPTION.to_owned(), tag(Some(0.1)))].into(),
        streams: IndexMap::new(),
        equipment: [(EQUIPMENT.to_owned(), equipment())].into(),
        suspects: Vec::new(),
        suspects_remarks: Vec::new(),
        after_suspects: None,
        limits: Vec::new(),
        by_hand: Vec::new(),
        line_up: None,
        findings: Vec::new(),
        steadiness: None,
        ignored_tags: Vec::new(),
        remarks: Vec::new(),
    }
}

fn tag(standardised: Option<f64>) -> TagReport {
    TagReport {
        measured: Some(100.0),
        reconciled: Some(99.0),
        adjustment: standardised.map(|s| s / 2.0),
        unit: "t/h".to_owned(),
        uncertainty_measured: Some(1.0),
        uncertainty_reconciled: Some(0.5),
        redundancy: Some(0.75),
        standardised_adjustment: standardised,
        detectable: Some(3.0),
        class: Class::Redundant,
        reason: None,
        averaged: None,
    }
}

fn imbalance(standardised: Option<f64>, unit: &str) -> Imbalance {
    Imbalance {
        value: standardised.map(|s| s * 10.0),
        uncertainty: standardised.map(|_| 19.6),
        unit: unit.to_owned(),
        standardised,
    }
}

fn equipment() -> EquipmentReport {
    EquipmentReport {
        kind: "closed-heater".to_owned(),
        heat: None,
        work: None,
        power: None,
        loss: None,
        holdup_change: None,
        imbalance: Imbalances {
            mass: SIDES
                .map(|side| (side.to_owned(), imbalance(Some(0.1), "kg/s")))
                .into(),
            energy: Some(imbalance(Some(0.1), "kW")),
        },
    }
}

fn hypothesis(cause: Cause, of: &str, side: Option<&str>) -> Hypothesis {
    Hypothesis {
        cause,
        of: of.to_owned(),
        side: side.map(str::to_owned),
    }
}

fn bias(of: &str) -> Hypothesis {
    hypothesis(Cause::Bias, of, None)
}

fn leak() -> Hypothesis {
    hypothesis(Cause::Leak, EQUIPMENT, Some("steam"))
}

fn accused(hypothesis: Hypothesis, size: f64) -> Accused {
    Accused {
        hypothesis,
        size,
        uncertainty: 0.4,
        unit: "t/h".to_owned(),
        ratio: 36.0,
        detectable: 1.0,
        remark: None,
    }
}

/// Reports by what differs from [`batch`].
trait Differing: Sized {
    fn tag(self, name: &str, standardised: Option<f64>) -> Self;
    fn energy(self, standardised: Option<f64>) -> Self;
    /// A further suspect, with everything quiet once it is taken out.
    fn suspect(self, group: &[Hypothesis]) -> Self;
    /// What is still there with the suspects taken out.
    fn rest(self, change: impl FnOnce(&mut AfterSuspects)) -> Self;
}

impl Differing for Report {
    fn tag(mut self, name: &str, standardised: Option<f64>) -> Self {
        self.tags[name] = tag(standardised);
        self
    }

    fn energy(mut self, standardised: Option<f64>) -> Self {
        self.equipment[EQUIPMENT].imbalance.energy = Some(imbalance(standardised, "kW"));
        self
    }

    fn suspect(mut self, group: &[Hypothesis]) -> Self {
        let group = group.iter().map(|h| accused(h.clone(), 3.1));
        self.suspects.push(Suspect {
            group: group.collect(),
            statistic_before: 60.0,
            statistic_after: 24.0,
            balances: Vec::new(),
            tags: Vec::new(),
            checks: Vec::new(),
        });
        let quiet = batch(0);
        self.after_suspects = Some(Box::new(AfterSuspects {
            global_test: GlobalTest {
                statistic: 24.0,
                degrees_of_freedom: 20,
                critical_value: Some(31.4),
                p_value: Some(0.24),
                confidence: 0.95,
            },
            tags: quiet.tags,
            assumptions: quiet.assumptions,
            streams: quiet.streams,
            equipment: quiet.equipment,
        }));
        self
    }

    fn rest(mut self, change: impl FnOnce(&mut AfterSuspects)) -> Self {
        change(self.after_suspects.as_mut().unwrap());
        self
    }
}

/// A watch that looks at each batch when it ends.
fn look(watch: &mut Watch, report: &Report) -> Vec<Event> {
    watch.look(report, &AlarmSettings::default(), report.end)
}

fn kinds(events: &[Event]) -> Vec<(EventKind, u64)> {
    events.iter().map(|e| (e.kind, e.alarm.id)).collect()
}

/// A watch in which batches 1 to 3 have raised one alarm about a bias of FT-101.
fn raised() -> Watch {
    let mut watch = Watch::new("tarn-mill");
    for n in 1..=3 {
        look(&mut watch, &batch(n).suspect(&[bias("FT-101")]));
    }
    assert_eq!(only(&watch).state, State::ActiveUnacknowledged);
    watch
}

fn only(watch: &Watch) -> &Alarm {
    match watch.alarms() {
        [alarm] => alarm,
        alarms => panic!("{} alarms", alarms.len()),
    }
}

fn act(n: i64) -> Act {
    Act {
        by: "R. Hale".to_owned(),
        at: at(n),
        note: Some("seen".to_owned()),
    }
}
