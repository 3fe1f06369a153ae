//! What to check next: the field checks that would tell the members of a group
//! apart.
//!
//! With b the size of member h, sigma_b its standard uncertainty and dx/db the
//! response of the solution to it, the states under h are x - b dx/db, and the
//! variance of a quantity q under h is that without any suspect plus
//! (dq/db sigma_b)^2, since the residuals that b is estimated from are
//! independent of the estimate. A portable instrument of standard uncertainty s
//! that reads q then adds to the likelihood ratio of h over another member k a
//! normal number of mean d and variance 4 d,
//!
//! ```text
//! d = (q_h - q_k)^2 / (s^2 + var q)
//! ```
//!
//! where h is true, and k is cleared once their ratios differ by more than the
//! group distance. A valve that is made sure to be shut settles whether it
//! passed.

use super::compiled::Compiled;
use super::search::Member;
use super::solution::Solution;
use super::streams::{BAR, ZERO_CELSIUS};
use crate::equations::{Blame, Layout};
use crate::plant::{COVERAGE_FACTOR, Portable, StreamId};
use crate::report::{FieldCheck, SingleTest};
use statrs::distribution::{ContinuousCDF, Normal};

/// Checks that are listed.
const LISTED: usize = 6;
/// What clears less than this part of the others is not worth the walk.
const WORTH: f64 = 0.2;
/// Likelihood ratio by which a reading must speak for one of two at least: 95 %
/// of one sign, 1.645 squared.
const LEAST_DISTANCE: f64 = 2.706;
/// Members that are reckoned with.
const MOST_MEMBERS: usize = 12;

/// The checks that tell the members of a group apart, the most decisive first;
/// none for a group of one.
pub fn worth_doing(
    compiled: &Compiled,
    test: &SingleTest,
    before: &Solution,
    members: &[Member],
) -> Vec<FieldCheck> {
    if members.len() < 2 {
        return Vec::new();
    }
    let members = &members[..members.len().min(MOST_MEMBERS)];
    let group = Group {
        members,
        distance: test.group_distance,
        responses: (members.iter())
            .map(|member| {
                before
                    .response(&compiled.hypotheses()[member.hypothesis])
                    .states
            })
            .collect(),
    };
    let portable = &compiled.plant().portable;
    let streams = (0..compiled.plant().streams.len()).map(StreamId);
    let readable = streams.flat_map(|s| {
        quantities(before, s, portable)
            .into_iter()
            .map(move |q| (s, q))
    });
    let mut checks: Vec<FieldCheck> = readable
        .filter_map(|(s, quantity)| {
            let of = compiled.plant().streams[s.0].name.clone();
            group.reading(before, of, &quantity)
        })
        .chain(group.valves(compiled, test.critical_value))
        .filter(|check| check.decides >= WORTH)
        .collect();
    checks.sort_by(|a, b| b.decides.total_cmp(&a.decides));
    checks.truncate(LISTED);
    checks
}

/// Something that a portable instrument can read, in the unit of the report.
struct Readable {
    name: &'static str,
    unit: &'static str,
    value: f64,
    gradient: Vec<(usize, f64)>,
    /// Standard uncertainty of the portable instrument.
    sigma: f64,
}

/// What can be read at a stream; nothing where the instrument would have no
/// uncertainty or an infinite one.
fn quantities(solution: &Solution, s: StreamId, portable: &Portable) -> Vec<Readable> {
    let layout: &Layout = solution.layout();
    let (m, p) = (layout.m(s), layout.p(s));
    let (flow, pressure) = (solution.x()[m], solution.x()[p]);
    let mut quantities = Vec::new();
    if let Some(sigma) = portable.mass_flow.sigma(flow) {
        quantities.push(Readable {
            name: "mass-flow",
            unit: "kg/s",
            value: flow,
            gradient: vec![(m, 1.0)],
            sigma: sigma.get(),
        });
    }
    if let Some(sigma) = portable.pressure.sigma(pressure) {
        quantities.push(Readable {
            name: "pressure",
            unit: "bar",
            value: pressure / BAR,
            gradient: vec![(p, 1.0 / BAR)],
            sigma: sigma.get() / BAR,
        });
    }
    if let (Some(state), Some(sigma)) = (solution.state(s), portable.temperature.sigma(1.0)) {
        quantities.push(Readable {
            name: "temperature",
            unit: "Cel",
            value: state.t - ZERO_CELSIUS,
            gradient: vec![(p, state.t_p), (layout.h(s), state.t_h)],
            sigma: sigma.get(),
        });
    }
    quantities
}

struct Group<'a> {
    members: &'a [Member],
    distance: f64,
    /// Response of the states to one unit of each member.
    responses: Vec<Vec<f64>>,
}

impl Group<'_> {
    fn reading(&self, before: &Solution, of: String, quantity: &Readable) -> Option<FieldCheck> {
        let sigma = before.uncertainty(&quantity.gradient)?;
        let slopes: Vec<f64> = (self.responses.iter())
            .map(|response| {
                quantity
                    .gradient
                    .iter()
                    .map(|&(j, d)| d * response[j])
                    .sum()
            })
            .collect();
        let expected: Vec<f64> = (self.members.iter().zip(&slopes))
            .map(|(member, slope)| quantity.value - member.size * slope)
            .collect();
        let variances: Vec<f64> = (self.members.iter().zip(&slopes))
            .map(|(member, slope)| {
                quantity.sigma.powi(2) + sigma.powi(2) + (slope * member.sigma).powi(2)
            })
            .collect();
        Some(FieldCheck {
            action: "read".to_owned(),
            quantity: Some(quantity.name.to_owned()),
            of,
            uncertainty: Some(COVERAGE_FACTOR * quantity.sigma),
            decides: self.decides(&expected, &variances),
            expected,
            unit: quantity.unit.to_owned(),
        })
    }

    /// The part of the other members that a reading is expected to clear.
    fn decides(&self, expected: &[f64], variances: &[f64]) -> f64 {
        let n = self.members.len();
        let mut cleared = 0.0;
        for h in 0..n {
            for k in (0..n).filter(|&k| k != h) {
                let variance = variances[h].max(variances[k]);
                let d = (expected[h] - expected[k]).powi(2) / variance;
                if d > 0.0 {
                    let ahead = self.members[h].ratio - self.members[k].ratio;
                    let apart = self.distance.max(LEAST_DISTANCE);
                    let margin = (d + ahead - apart) / (2.0 * d.sqrt());
                    cleared += Normal::standard().cdf(margin);
                }
            }
        }
        cleared / (n * (n - 1)) as f64
    }

    /// Valves that may pass: shut for certain, the disagreement goes or stays.
    fn valves(&self, compiled: &Compiled, critical: f64) -> Vec<FieldCheck> {
        let n = self.members.len() as f64;
        let members = self.members.iter();
        members
            .filter_map(|member| {
                let Blame::Passing { stream, .. } = compiled.hypotheses()[member.hypothesis].blame
                else {
                    return None;
                };
                let seen = Normal::standard().cdf(member.size / member.sigma - critical);
                let flows = self.members.iter().map(|other| {
                    if other.hypothesis == member.hypothesis {
                        member.size
                    } else {
                        0.0
                    }
                });
                Some(FieldCheck {
                    action: "close".to_owned(),
                    quantity: None,
                    of: compiled.plant().streams[stream.0].name.clone(),
                    uncertainty: None,
                    expected: flows.collect(),
                    unit: "kg/s".to_owned(),
                    // If it passed, all others are cleared; if not, it alone is.
                    decides: 2.0 * seen / n,
                })
            })
            .collect()
    }
}
