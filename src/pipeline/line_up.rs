//! What of the plant is in service in a batch, and the report of the whole plant
//! from that of the part that is.
//!
//! Every entrance to the pipeline asks here first: the conditions of the plant
//! file decide with the batch's signals, what hangs on what is out of service
//! goes with it, and the plant that is left is what the stages see. A signal that
//! is missing or bad leaves a part in service, where its balances are right
//! whatever flows; an assumption with such a condition is left out, as it would
//! be wrong.

use super::compiled::{Compiled, LinedUp};
use super::readings::{Readings, in_report};
use super::{findings, tags};
use crate::plant::{
    Action, Batch, ByHand, Condition, Grade, Places, Plant, Reading, Service, Signal, Test,
};
use crate::report::{ByHandReport, Class, LineUp, Report, TagReport, Verdict};
use indexmap::IndexMap;
use std::collections::HashMap;
use std::sync::Arc;

/// A plant as it is lined up.
pub enum AsLinedUp<'a> {
    /// Everything is in service.
    Whole(&'a Compiled),
    /// Something is out of service.
    Part(Arc<LinedUp>),
}

impl<'a> AsLinedUp<'a> {
    fn new(whole: &'a Compiled, service: &Service) -> Self {
        match whole.line_up(service) {
            None => AsLinedUp::Whole(whole),
            Some(part) => AsLinedUp::Part(part),
        }
    }

    /// What is in service, compiled.
    pub fn compiled(&self) -> &Compiled {
        match self {
            AsLinedUp::Whole(compiled) => compiled,
            AsLinedUp::Part(part) => &part.compiled,
        }
    }

    /// Where the whole plant's members are in it; `None` where it is the whole.
    pub fn places(&self) -> Option<&Places> {
        match self {
            AsLinedUp::Whole(_) => None,
            AsLinedUp::Part(part) => Some(&part.places),
        }
    }
}

/// What a plant's conditions come to.
pub struct Decided {
    /// What is in service, closed.
    pub service: Service,
    /// `false`: the plant is down.
    pub running: bool,
    /// What the signals read.
    pub signals: Signals,
}

/// Values of statuses and tags, by their place.
pub struct Signals {
    statuses: Vec<Option<f64>>,
    tags: Vec<Option<f64>>,
}

impl Signals {
    /// Those of a batch, with what was decided by hand about them.
    fn of(plant: &Plant, batch: &Batch, by_hand: &[ByHand]) -> Self {
        let by_tag: HashMap<&str, &Reading> =
            batch.readings.iter().map(|r| (r.tag.as_str(), r)).collect();
        let value = |name: &str| {
            let reading = by_tag.get(name)?;
            let unused = reading.averaged.as_ref().and_then(|a| a.unused.as_ref());
            let usable = reading.quality.grade != Grade::Bad && unused.is_none();
            let value = reading.value.filter(|_| usable)?;
            let decisions = by_hand.iter();
            let mut decisions = decisions.filter(|d| d.tag == name && d.covers(batch));
            decisions.try_fold(value, |value, decision| match decision.action {
                Action::OutOfService => None,
                Action::Offset(offset) => Some(value + offset),
            })
        };
        Signals {
            statuses: plant.statuses.iter().map(|s| value(&s.name)).collect(),
            tags: plant.tags.iter().map(|t| value(&t.name)).collect(),
        }
    }

    /// What they read at normal operation.
    fn normal(plant: &Plant) -> Self {
        Signals {
            statuses: plant.statuses.iter().map(|s| s.normal).collect(),
            tags: plant.tags.iter().map(|t| t.normal).collect(),
        }
    }

    /// What a signal reads.
    pub fn value(&self, signal: Signal) -> Option<f64> {
        match signal {
            Signal::Status(s) => self.statuses[s],
            Signal::Tag(t) => self.tags[t],
        }
    }

    /// Whether a condition holds; `None` where its signal is missing or bad.
    pub fn holds(&self, condition: &Condition) -> Option<bool> {
        self.value(condition.signal).map(|v| condition.holds(v))
    }
}

impl Decided {
    fn new(plant: &Plant, signals: Signals) -> Self {
        let running = plant.running_when.as_ref();
        Decided {
            running: running.is_none_or(|c| signals.holds(c).unwrap_or(true)),
            service: Service::decided(plant, |signal| signals.value(signal)),
            signals,
        }
    }

    /// The parts whose own condition does not hold, streams first.
    fn switched_off<'p>(&self, plant: &'p Plant) -> Vec<&'p str> {
        let streams = plant.streams.iter();
        let streams = streams.map(|s| (&s.name, &s.in_service_when));
        let equipment = plant.equipment.iter();
        let equipment = equipment.map(|e| (&e.name, &e.in_service_when));
        let off = streams.chain(equipment).filter(|(_, condition)| {
            let condition = condition.as_ref();
            condition.is_some_and(|c| self.signals.holds(c) == Some(false))
        });
        off.map(|(name, _)| name.as_str()).collect()
    }

    /// As reports tell it.
    fn line_up(&self, plant: &Plant, places: Option<&Places>) -> LineUp {
        let off = self.switched_off(plant);
        let out = |names: Vec<&String>, is_in: &[bool]| -> Vec<String> {
            let pairs = names.into_iter().zip(is_in);
            let out = pairs.filter(|(_, is_in)| !**is_in);
            out.map(|(name, _)| name.clone()).collect()
        };
        let statuses = plant.statuses.iter().zip(&self.signals.statuses);
        let mut decided_by: IndexMap<String, Option<f64>> =
            statuses.map(|(s, v)| (s.name.clone(), *v)).collect();
        for (t, _) in tested_tags(plant) {
            decided_by.insert(plant.tags[t].name.clone(), self.signals.tags[t]);
        }
        LineUp {
            name: match &off[..] {
                _ if !self.running => "not running".to_owned(),
                [] => "full".to_owned(),
                _ => format!("without {}", off.join(", ")),
            },
            streams_out: out(
                plant.streams.iter().map(|s| &s.name).collect(),
                &self.service.streams,
            ),
            equipment_out: out(
                plant.equipment.iter().map(|e| &e.name).collect(),
                &self.service.equipment,
            ),
            pipes: places.map_or_else(Vec::new, |places| {
                let pipes = places.pipes.iter();
                pipes.map(|e| plant.equipment[e.0].name.clone()).collect()
            }),
            decided_by,
        }
    }
}

/// Every condition of a plant, with the name of what it is about.
pub fn conditions(plant: &Plant) -> impl Iterator<Item = (&str, &Condition)> {
    let streams = plant.streams.iter();
    let streams = streams.filter_map(|s| Some((s.name.as_str(), s.in_service_when.as_ref()?)));
    let equipment = plant.equipment.iter();
    let equipment = equipment.filter_map(|e| Some((e.name.as_str(), e.in_service_when.as_ref()?)));
    let assumed = plant.assumptions.iter();
    let assumed = assumed.filter_map(|a| Some((a.name.as_str(), a.in_service_when.as_ref()?)));
    let running = plant.running_when.iter().map(|c| (plant.name.as_str(), c));
    running.chain(streams).chain(equipment).chain(assumed)
}

/// Tags that conditions test, each once, in the order of the plant file.
fn tested_tags(plant: &Plant) -> IndexMap<usize, &Test> {
    let tested = conditions(plant).filter_map(|(_, condition)| match condition.signal {
        Signal::Tag(t) => Some((t, &condition.test)),
        Signal::Status(_) => None,
    });
    let mut tested: IndexMap<usize, &Test> = tested.collect();
    tested.sort_unstable_keys();
    tested
}

/// How a batch finds the plant.
pub struct Situation<'a> {
    whole: &'a Compiled,
    decided: Option<Decided>,
    line_up: AsLinedUp<'a>,
    /// Readings of what is in service.
    pub readings: Readings,
    /// Readings of the whole plant, where that is something else.
    all: Option<Readings>,
    /// Decisions about statuses that hold for this batch.
    about_statuses: Vec<ByHandReport>,
}

impl<'a> Situation<'a> {
    /// Finds what is in service in a batch, and resolves its readings.
    pub fn new(whole: &'a Compiled, batch: &Batch, by_hand: &[ByHand]) -> Self {
        let plant = whole.plant();
        let decided = plant
            .has_conditions()
            .then(|| Decided::new(plant, Signals::of(plant, batch, by_hand)));
        let line_up = match &decided {
            Some(decided) if decided.running && decided.service.streams.contains(&true) => {
                AsLinedUp::new(whole, &decided.service)
            }
            _ => AsLinedUp::Whole(whole),
        };
        let readings = Readings::new(line_up.compiled().plant(), batch, by_hand);
        let all = line_up
            .places()
            .map(|_| Readings::new(plant, batch, by_hand));
        let is_status = |tag: &str| plant.statuses.iter().any(|s| s.name == tag);
        let about_statuses = by_hand.iter();
        let about_statuses = about_statuses.filter(|d| is_status(&d.tag) && d.covers(batch));
        Situation {
            about_statuses: about_statuses.map(in_report).collect(),
            whole,
            decided,
            line_up,
            readings,
            all,
        }
    }

    /// What is in service, compiled.
    pub fn compiled(&self) -> &Compiled {
        self.line_up.compiled()
    }

    /// The whole plant.
    pub fn plant(&self) -> &Plant {
        self.whole.plant()
    }

    /// Readings of the whole plant.
    pub fn all_readings(&self) -> &Readings {
        self.all.as_ref().unwrap_or(&self.readings)
    }

    /// What the conditions come to; `None` where there are none.
    pub fn decided(&self) -> Option<&Decided> {
        self.decided.as_ref()
    }

    /// Why nothing is reconciled, where the plant is down.
    pub fn standstill(&self) -> Option<String> {
        let decided = self.decided.as_ref()?;
        if decided.running {
            let nothing = !decided.service.streams.contains(&true);
            return nothing.then(|| "every stream is out of service".to_owned());
        }
        let condition = self.plant().running_when.as_ref()?;
        let (name, unit) = signal_name(self.plant(), condition.signal);
        let value = decided.signals.value(condition.signal)?;
        Some(format!("{name} reads {value}{unit}"))
    }

    /// The name that a stream has among those in service: two that have become one
    /// have the name of the first.
    pub fn stream_name<'n>(&'n self, name: &'n str) -> &'n str {
        let Some(places) = self.line_up.places() else {
            return name;
        };
        let s = self.plant().streams.iter().position(|s| s.name == name);
        let id = s.and_then(|s| places.streams[s]);
        id.map_or(name, |id| &self.compiled().plant().streams[id.0].name)
    }

    /// Whether a stream, piece of equipment, tag or assumption of the plant is out
    /// of service.
    pub fn is_out(&self, name: &str) -> bool {
        let plant = self.plant();
        let Some(places) = self.line_up.places() else {
            return false;
        };
        let at = |mut names: Box<dyn Iterator<Item = &String> + '_>| names.position(|n| n == name);
        let stream = at(Box::new(plant.streams.iter().map(|s| &s.name)));
        let equipment = at(Box::new(plant.equipment.iter().map(|e| &e.name)));
        let tag = at(Box::new(plant.tags.iter().map(|t| &t.name)));
        let assumption = at(Box::new(plant.assumptions.iter().map(|a| &a.name)));
        stream.is_some_and(|s| places.streams[s].is_none())
            || equipment.is_some_and(|e| places.equipment[e].is_none())
            || tag.is_some_and(|t| places.tags[t].is_none())
            || assumption.is_some_and(|a| places.assumptions[a].is_none())
    }

    /// Makes the report of what is in service one of the whole plant.
    pub fn complete(&self, report: &mut Report) {
        let all = self.all_readings();
        report.ignored_tags.clone_from(&all.ignored);
        report.by_hand.clone_from(&all.by_hand);
        report.by_hand.extend(self.about_statuses.iter().cloned());
        report.findings = findings::findings(self);
        let Some(decided) = &self.decided else {
            return;
        };
        report.line_up = Some(decided.line_up(self.plant(), self.line_up.places()));
        if let Some(reason) = self.standstill() {
            report.verdict = Verdict::NotRunning;
            report.reason = Some(reason);
            // They tell what was done with readings that are used.
            report.remarks.clear();
            let all = report
                .tags
                .values_mut()
                .chain(report.assumptions.values_mut());
            all.for_each(|tag| out_of_service(tag, "the plant is not running"));
            return;
        }
        let Some(places) = self.line_up.places() else {
            return;
        };
        self.spread_tags(&mut report.tags, &mut report.assumptions, places);
        spread(&mut report.streams, self.plant(), places);
        if let Some(after) = &mut report.after_suspects {
            self.spread_tags(&mut after.tags, &mut after.assumptions, places);
            spread(&mut after.streams, self.plant(), places);
        }
    }

    /// Puts the tags and assumptions that are out of service among the others.
    fn spread_tags(
        &self,
        tags: &mut IndexMap<String, TagReport>,
        assumptions: &mut IndexMap<String, TagReport>,
        places: &Places,
    ) {
        let all = self.all_readings();
        let mut unused = tags::tags(self.whole, all, None);
        merge(tags, &mut unused, &places.tags);
        let mut unused = tags::assumptions(self.whole, all, None);
        merge(assumptions, &mut unused, &places.assumptions);
    }
}

/// What the plant is at normal operation, and how that is told.
pub fn normal(whole: &Compiled) -> (AsLinedUp<'_>, Option<LineUp>) {
    let plant = whole.plant();
    if !plant.has_conditions() {
        return (AsLinedUp::Whole(whole), None);
    }
    let mut decided = Decided::new(plant, Signals::normal(plant));
    // It is assessed as it runs.
    decided.running = true;
    let line_up = AsLinedUp::new(whole, &decided.service);
    let told = decided.line_up(plant, line_up.places());
    (line_up, Some(told))
}

/// A signal's name, and its unit with a space before it.
pub fn signal_name(plant: &Plant, signal: Signal) -> (&str, String) {
    match signal {
        Signal::Status(s) => (&plant.statuses[s].name, String::new()),
        Signal::Tag(t) => (
            &plant.tags[t].name,
            format!(" {}", plant.tags[t].unit.symbol),
        ),
    }
}

/// The members of the whole plant in its order: those in service as `some` has
/// them, the others as they are in `all`.
fn merge(
    some: &mut IndexMap<String, TagReport>,
    all: &mut IndexMap<String, TagReport>,
    places: &[Option<usize>],
) {
    for ((name, entry), place) in all.iter_mut().zip(places) {
        match place.and_then(|_| some.swap_remove(name)) {
            Some(known) => *entry = known,
            None => out_of_service(entry, "out of service"),
        }
    }
    std::mem::swap(some, all);
}

fn out_of_service(tag: &mut TagReport, reason: &str) {
    tag.class = Class::Unused;
    tag.reason = Some(reason.to_owned());
}

/// The streams in service in the order of the whole plant, each as the one that it
/// is in the part.
pub fn spread<T: Clone>(part: &mut IndexMap<String, T>, plant: &Plant, places: &Places) {
    let pairs = plant.streams.iter().zip(&places.streams);
    let whole = pairs.filter_map(|(stream, place)| {
        let (_, entry) = part.get_index((*place)?.0)?;
        Some((stream.name.clone(), entry.clone()))
    });
    *part = whole.collect();
}
