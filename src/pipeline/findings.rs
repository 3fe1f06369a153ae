//! What stands out before any balance is made, in this order: tags on one
//! quantity that disagree; a status that contradicts what flows; a status that is
//! not known.
//!
//! Something flows where a flow or power reads z sigma above zero, with z the
//! one-sided normal quantile at the confidence c^(1/n) over the n tags of the
//! batch that are out of service (so that a sound batch shows none with
//! probability c), and more than a low-flow cut-off of its range: below that an
//! idle transmitter's zero error is common. (2 % is common practice.) Nothing
//! flows where a reading is below both.

use super::line_up::{Situation, conditions, signal_name};
use super::same_quantity;
use crate::diagnosis::chi_square_quantile;
use crate::plant::{Condition, EquipmentId, Plant, Quantity, Signal, StreamId, Tag};
use crate::report::{Finding, FindingKind};

/// Part of its range below which an idle meter may read.
const IDLE: f64 = 0.02;

/// Every finding of a batch.
pub fn findings(situation: &Situation) -> Vec<Finding> {
    let mut found = Vec::new();
    let stands_still = situation.standstill().is_some();
    if !stands_still {
        found.extend(same_quantity::disagreements(situation));
    }
    found.extend(contradictions(situation, stands_still));
    found.extend(unknown(situation));
    found
}

/// A part with a condition of its own.
#[derive(Clone, Copy, PartialEq)]
enum Part {
    Stream(StreamId),
    Equipment(EquipmentId),
}

/// What a flow or power tag reads.
struct Seen<'p> {
    tag: &'p Tag,
    place: usize,
    quantity: Part,
    /// Over its sigma; zero where it has none there.
    z: f64,
    /// Above the cut-off of its range; `None` where it has no range.
    above_idle: Option<bool>,
}

/// Flow and power tags with a reading that may be used.
fn seen<'p>(situation: &'p Situation) -> Vec<Seen<'p>> {
    let Some(decided) = situation.decided() else {
        return Vec::new();
    };
    let readings = situation.all_readings();
    let tags = situation.plant().tags.iter().enumerate();
    tags.filter_map(|(place, tag)| {
        let quantity = match tag.quantity {
            Quantity::MassFlow(s) => Part::Stream(s),
            Quantity::Power(e) => Part::Equipment(e),
            _ => return None,
        };
        let value = decided.signals.value(Signal::Tag(place))?;
        let measured = readings.measured[place];
        Some(Seen {
            tag,
            place,
            quantity,
            z: measured.map_or(0.0, |m| m.value / m.sigma.get()),
            above_idle: tag
                .range
                .map(|(low, high)| value > low.max(0.0) + IDLE * (high - low)),
        })
    })
    .collect()
}

/// The one-sided normal quantile at a confidence.
fn quantile(confidence: f64) -> f64 {
    // The square of a normal number exceeds z^2 on either side.
    let two_sided = 1.0 - 2.0 * (1.0 - confidence);
    chi_square_quantile(two_sided, 1).map_or(f64::INFINITY, f64::sqrt)
}

fn contradictions(situation: &Situation, stands_still: bool) -> Vec<Finding> {
    let Some(decided) = situation.decided() else {
        return Vec::new();
    };
    let plant = situation.plant();
    let seen = seen(situation);
    let is_out = |tag: &Seen| match tag.quantity {
        _ if stands_still => true,
        Part::Stream(s) => !decided.service.streams[s.0],
        Part::Equipment(e) => !decided.service.equipment[e.0],
    };
    let idle: Vec<&Seen> = seen.iter().filter(|tag| is_out(tag)).collect();
    let critical = quantile(plant.confidence.powf(1.0 / idle.len().max(1) as f64));
    let flowing = idle
        .iter()
        .filter(|tag| tag.z > critical && tag.above_idle != Some(false));
    let flowing: Vec<&Seen> = flowing.copied().collect();
    if stands_still {
        // Cooling water may well run through a plant that is down.
        let most = 2 * flowing.len() > idle.len();
        return match most {
            true => vec![flows(plant.name.clone(), "not running", &flowing)],
            false => Vec::new(),
        };
    }
    let mut found: Vec<Finding> = Vec::new();
    let mut told: Vec<(String, Vec<&Seen>)> = Vec::new();
    for tag in flowing {
        let of = switched_off(situation, tag);
        match told.iter_mut().find(|(known, _)| *known == of) {
            Some((_, tags)) => tags.push(tag),
            None => told.push((of, vec![tag])),
        }
    }
    found.extend(
        told.into_iter()
            .map(|(of, tags)| flows(of, "out of service", &tags)),
    );
    for (part, name, condition) in parts(plant) {
        if decided.signals.holds(condition) == Some(true) {
            found.extend(still(situation, &seen, part, name, condition));
        }
    }
    found
}

/// The part that took a tag's stream or equipment out of service.
fn switched_off(situation: &Situation, tag: &Seen) -> String {
    let plant = situation.plant();
    let name = |part: Part| match part {
        Part::Stream(s) => plant.streams[s.0].name.clone(),
        Part::Equipment(e) => plant.equipment[e.0].name.clone(),
    };
    let ends = match tag.quantity {
        Part::Stream(s) => [plant.streams[s.0].from, plant.streams[s.0].to],
        Part::Equipment(_) => [None, None],
    };
    let ends = ends.into_iter().flatten().map(Part::Equipment);
    let mut near = std::iter::once(tag.quantity).chain(ends);
    let off = near.find(|near| {
        let condition = parts(plant).find(|(part, ..)| part == near);
        let holds = condition.and_then(|(.., c)| situation.decided()?.signals.holds(c));
        holds == Some(false)
    });
    name(off.unwrap_or(tag.quantity))
}

/// Parts with a condition of their own.
fn parts(plant: &Plant) -> impl Iterator<Item = (Part, &str, &Condition)> {
    let streams = plant.streams.iter().enumerate().filter_map(|(s, stream)| {
        let condition = stream.in_service_when.as_ref()?;
        Some((Part::Stream(StreamId(s)), stream.name.as_str(), condition))
    });
    let equipment = plant.equipment.iter().enumerate();
    let equipment = equipment.filter_map(|(e, item)| {
        let condition = item.in_service_when.as_ref()?;
        Some((
            Part::Equipment(EquipmentId(e)),
            item.name.as_str(),
            condition,
        ))
    });
    streams.chain(equipment)
}

fn flows(of: String, state: &str, tags: &[&Seen]) -> Finding {
    let names: Vec<String> = tags.iter().map(|seen| seen.tag.name.clone()).collect();
    let largest = tags.iter().map(|seen| seen.z).fold(0.0, f64::max);
    let verb = if names.len() == 1 { "reads" } else { "read" };
    Finding {
        kind: FindingKind::OutOfServiceAndFlowing,
        text: format!(
            "{of} is said to be {state}, and {} {verb} far above zero ({largest:.1} sigma)",
            names.join(", "),
        ),
        tags: names,
        of,
        odd_one_out: None,
        standardised: Some(largest),
    }
}

/// A part in service of which every flow tag says that nothing flows.
fn still(
    situation: &Situation,
    seen: &[Seen],
    part: Part,
    name: &str,
    condition: &Condition,
) -> Option<Finding> {
    let plant = situation.plant();
    let is_on = |seen: &&Seen| match (part, seen.quantity) {
        (Part::Equipment(e), Part::Stream(s)) => {
            let stream = &plant.streams[s.0];
            [stream.from, stream.to].contains(&Some(e))
        }
        (part, quantity) => part == quantity,
    };
    let own: Vec<&Seen> = seen
        .iter()
        .filter(is_on)
        .filter(|seen| condition.signal != Signal::Tag(seen.place))
        .collect();
    let critical = quantile(plant.confidence);
    let none = own
        .iter()
        .all(|seen| seen.z < critical && seen.above_idle != Some(true));
    if own.is_empty() || !none {
        return None;
    }
    let names: Vec<String> = own.iter().map(|seen| seen.tag.name.clone()).collect();
    let verb = if names.len() == 1 { "says" } else { "say" };
    Some(Finding {
        kind: FindingKind::InServiceAndNotFlowing,
        text: format!(
            "{name} is said to be in service, and {} {verb} that nothing flows",
            names.join(", "),
        ),
        tags: names,
        of: name.to_owned(),
        odd_one_out: None,
        standardised: None,
    })
}

/// Signals that decide and are missing or bad, each with all that it decides.
fn unknown(situation: &Situation) -> Vec<Finding> {
    let Some(decided) = situation.decided() else {
        return Vec::new();
    };
    let plant = situation.plant();
    let mut told: Vec<(Signal, Vec<&str>)> = Vec::new();
    for (name, condition) in conditions(plant) {
        if decided.signals.value(condition.signal).is_some() {
            continue;
        }
        match told
            .iter_mut()
            .find(|(known, _)| *known == condition.signal)
        {
            Some((_, names)) => names.push(name),
            None => told.push((condition.signal, vec![name])),
        }
    }
    told.into_iter()
        .map(|(signal, names)| {
            let (tag, _) = signal_name(plant, signal);
            let assumed = |name: &&str| plant.assumptions.iter().any(|a| a.name == **name);
            let (out, parts): (Vec<&str>, Vec<&str>) = names.iter().partition(|n| assumed(n));
            let mut taken = Vec::new();
            if !parts.is_empty() {
                taken.push(format!("{} counts as in service", parts.join(", ")));
            }
            if !out.is_empty() {
                taken.push(format!("the assumption {} is left out", out.join(", ")));
            }
            Finding {
                kind: FindingKind::StatusUnknown,
                tags: vec![tag.to_owned()],
                of: names.first().map_or_else(String::new, |n| (*n).to_owned()),
                odd_one_out: None,
                text: format!("{tag} is missing or bad: {}", taken.join("; ")),
                standardised: None,
            }
        })
        .collect()
}
