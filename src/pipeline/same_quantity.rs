//! Tags on one quantity that disagree: two-out-of-three transmitters, pressures
//! of one stream against different references.
//!
//! Of n readings y of one quantity with covariance V the weighted sum of squares
//! about their best value
//!
//! ```text
//! y' V^-1 y - (1' V^-1 y)^2 / (1' V^-1 1)
//! ```
//!
//! follows chi-square with n - 1 degrees of freedom where they err as stated. V
//! has the readings' own variances; the barometer's error, which every gauge and
//! vacuum reading shares once it is made absolute, adds its variance to each pair
//! of those. With G groups in a batch each is tested at the confidence c^(1/G)
//! (Sidak), so that a sound batch shows no group with probability c.
//!
//! What the sum falls by without a reading is the square of that reading's
//! difference from the others' best value over the sigma of the difference. A
//! reading is the odd one out where the others agree without it, and only
//! without it.

use super::line_up::Situation;
use crate::diagnosis::chi_square_quantile;
use crate::equations::Measured;
use crate::plant::{Barometer, Plant, PressureReference, Quantity, StreamId, Tag};
use crate::report::{Finding, FindingKind};
use nalgebra::{DMatrix, DVector};

/// What several tags measure.
#[derive(Clone, Copy, PartialEq)]
enum Same {
    /// Absolute pressure of a stream.
    Pressure(StreamId),
    /// Pressure of a stream against the atmosphere, where nothing tells that.
    Relative(StreamId),
    /// Anything else.
    Other(Quantity),
}

/// A reading of a group.
struct Member<'p> {
    tag: &'p Tag,
    /// In internal units, a pressure absolute where the barometer is known.
    value: f64,
    variance: f64,
    /// The barometer's error is in it.
    shares: bool,
}

/// Every group that disagrees, in the order of the plant file.
pub fn disagreements(situation: &Situation) -> Vec<Finding> {
    let plant = situation.compiled().plant();
    let barometer = Atmosphere::of(plant, &situation.readings.measured);
    let groups = groups(plant, &situation.readings.measured, &barometer);
    let confidence = plant.confidence.powf(1.0 / groups.len().max(1) as f64);
    let told = groups.iter().filter_map(|(same, members)| {
        let of = match same {
            Same::Pressure(s) | Same::Relative(s) => plant.streams[s.0].name.clone(),
            Same::Other(quantity) => owner(plant, *quantity),
        };
        judge(members, barometer.variance, confidence, of)
    });
    told.collect()
}

/// The atmospheric pressure that readings tell.
struct Atmosphere {
    value: Option<f64>,
    variance: f64,
}

impl Atmosphere {
    fn of(plant: &Plant, measured: &[Option<Measured>]) -> Self {
        if let Barometer::Exact(value) = plant.barometer {
            let (value, variance) = (Some(value), 0.0);
            return Atmosphere { value, variance };
        }
        let tags = plant.tags.iter().map(|t| t.quantity);
        let all = tags.chain(plant.assumptions.iter().map(|a| a.quantity));
        let read = all.zip(measured).filter(|(q, _)| *q == Quantity::Barometer);
        let (mut sum, mut weight) = (0.0, 0.0);
        for m in read.filter_map(|(_, m)| *m) {
            let own = m.sigma.get().powi(-2);
            sum += own * m.value;
            weight += own;
        }
        Atmosphere {
            value: (weight > 0.0).then(|| sum / weight),
            variance: if weight > 0.0 { 1.0 / weight } else { 0.0 },
        }
    }
}

/// Groups of two readings in use or more.
fn groups<'p>(
    plant: &'p Plant,
    measured: &[Option<Measured>],
    atmosphere: &Atmosphere,
) -> Vec<(Same, Vec<Member<'p>>)> {
    let mut groups: Vec<(Same, Vec<Member>)> = Vec::new();
    for (tag, m) in plant.tags.iter().zip(measured) {
        let Some(m) = m else { continue };
        let (same, value, shares) = match (tag.quantity, atmosphere.value) {
            (Quantity::Pressure(s, PressureReference::Absolute), _) => {
                (Same::Pressure(s), m.value, false)
            }
            (Quantity::Pressure(s, reference), atmosphere) => {
                let sign = if reference == PressureReference::Vacuum {
                    -1.0
                } else {
                    1.0
                };
                match atmosphere {
                    Some(atmosphere) => (Same::Pressure(s), atmosphere + sign * m.value, true),
                    None => (Same::Relative(s), sign * m.value, false),
                }
            }
            (quantity, _) => (Same::Other(quantity), m.value, false),
        };
        let member = Member {
            tag,
            value,
            variance: m.sigma.get().powi(2),
            shares,
        };
        match groups.iter_mut().find(|(known, _)| *known == same) {
            Some((_, members)) => members.push(member),
            None => groups.push((same, vec![member])),
        }
    }
    groups.retain(|(_, members)| members.len() > 1);
    groups
}

/// The best value of some members and the sum of squares about it; `None` where
/// their covariance cannot be inverted.
fn fit(members: &[&Member], shared: f64) -> Option<(f64, f64)> {
    let n = members.len();
    let covariance = DMatrix::from_fn(n, n, |i, j| {
        let own = if i == j { members[i].variance } else { 0.0 };
        let both = members[i].shares && members[j].shares;
        own + if both { shared } else { 0.0 }
    });
    let factor = covariance.cholesky()?;
    // About the first: what is left is small beside the values.
    let origin = members[0].value;
    let y = DVector::from_iterator(n, members.iter().map(|m| m.value - origin));
    let ones = DVector::from_element(n, 1.0);
    let weights = factor.solve(&ones);
    let total = weights.sum();
    let best = weights.dot(&y) / total;
    let residual = y.add_scalar(-best);
    let sum = residual.dot(&factor.solve(&residual));
    Some((origin + best, sum))
}

fn judge(members: &[Member], shared: f64, confidence: f64, of: String) -> Option<Finding> {
    let all: Vec<&Member> = members.iter().collect();
    let (_, sum) = fit(&all, shared)?;
    if sum <= chi_square_quantile(confidence, all.len() - 1)? {
        return None;
    }
    let names: Vec<&str> = members.iter().map(|m| m.tag.name.as_str()).collect();
    let mut finding = Finding {
        kind: FindingKind::SameQuantityDisagrees,
        tags: names.iter().map(|name| (*name).to_owned()).collect(),
        of,
        odd_one_out: None,
        text: String::new(),
        standardised: None,
    };
    if let [a, b] = &all[..] {
        let z = sum.sqrt();
        finding.standardised = Some(z);
        finding.text = format!(
            "{} and {} measure the same and differ by {} ({z:.1} sigma); which of them is wrong \
             they cannot tell",
            names[0],
            names[1],
            difference(a, a.value - b.value),
        );
        return Some(finding);
    }
    let without = |i: usize| {
        let others = all.iter().enumerate().filter(|(j, _)| *j != i);
        let others: Vec<&Member> = others.map(|(_, m)| *m).collect();
        fit(&others, shared)
    };
    let rest: Vec<(f64, f64)> = (0..all.len()).map(without).collect::<Option<_>>()?;
    let agrees = chi_square_quantile(confidence, all.len() - 2)?;
    let falls = |i: usize| (sum - rest[i].1).max(0.0).sqrt();
    let candidates: Vec<usize> = (0..all.len()).filter(|&i| rest[i].1 <= agrees).collect();
    let worst = (0..all.len()).max_by(|&i, &j| falls(i).total_cmp(&falls(j)))?;
    finding.standardised = Some(falls(worst));
    let together = names.join(", ");
    finding.text = match candidates[..] {
        [odd] => {
            finding.odd_one_out = Some(names[odd].to_owned());
            format!(
                "{together} measure the same and disagree: {} reads {} {} than the others, which \
                 agree ({:.1} sigma)",
                names[odd],
                difference(all[odd], all[odd].value - rest[odd].0),
                if all[odd].value > rest[odd].0 {
                    "more"
                } else {
                    "less"
                },
                falls(odd),
            )
        }
        [] => format!(
            "{together} measure the same and disagree, and no one of them alone explains it"
        ),
        _ => format!(
            "{together} measure the same and disagree; which of them is wrong they cannot tell"
        ),
    };
    Some(finding)
}

/// A difference in a tag's unit, to three figures.
fn difference(member: &Member, internal: f64) -> String {
    let unit = &member.tag.unit;
    let size = unit.difference_from_internal(internal).abs();
    let places = match size {
        s if s > 0.0 => (2.0 - s.log10().floor()).clamp(0.0, 9.0) as usize,
        _ => 0,
    };
    let symbol = if unit.symbol == "Cel" {
        "K"
    } else {
        &unit.symbol
    };
    format!("{size:.places$} {symbol}")
}

/// What has a quantity.
fn owner(plant: &Plant, quantity: Quantity) -> String {
    match quantity {
        Quantity::MassFlow(s)
        | Quantity::Pressure(s, _)
        | Quantity::Temperature(s)
        | Quantity::Quality(s)
        | Quantity::Enthalpy(s)
        | Quantity::Subcooling(s)
        | Quantity::PressureDrop(s, _) => plant.streams[s.0].name.clone(),
        Quantity::IsentropicEfficiency { of: e, .. }
        | Quantity::Power(e)
        | Quantity::HeatLoss(e)
        | Quantity::Loss(e)
        | Quantity::HoldupChange(e) => plant.equipment[e.0].name.clone(),
        Quantity::Barometer => "barometer".to_owned(),
    }
}
