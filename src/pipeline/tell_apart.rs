//! Which causes the readings tell apart at an operating point, before any of
//! them has happened.
//!
//! Where hypothesis t holds with size b, its standardised statistic has the mean
//! D = b / sigma_t, and that of another, h, the mean rho D, with rho the
//! correlation of the two. The likelihood ratio of h is then expected to fall
//! short of that of t by
//!
//! ```text
//! (1 - rho^2) D^2,    D = 2 (c + 0.842)  at twice the limit of t
//! ```
//!
//! and h stands in the group of t where this is within the group distance. A
//! statistic of one sign counts only where rho D has that sign. With n_h the
//! numerator of h (`Shift`), rho is n_h of the response to one unit of t, times
//! sigma_h sigma_t.

use super::assess::{operating_point, with_line_up};
use super::attempt::attempt;
use super::class_set;
use super::compiled::Compiled;
use super::hypotheses::{judged, limits, testable};
use super::line_up::{self, Situation};
use super::solution::Solution;
use crate::diagnosis::detectable;
use crate::equations::Hypothesis;
use crate::plant::Batch;
use crate::report::{Apart, Limit, MixedUp, SingleTest, TellApart};

/// How many times its limit a cause is taken to be.
const TIMES_LIMIT: f64 = 2.0;

/// What is told apart where the batch stands, or without one at the normal
/// readings of the plant file.
pub fn tell_apart(compiled: &Compiled, batch: Option<&Batch>) -> TellApart {
    let mut told = TellApart {
        plant: compiled.plant().name.clone(),
        revision: compiled.revision(),
        operating_point: String::new(),
        reason: None,
        critical_value: None,
        group_distance: None,
        rows: Vec::new(),
        unseen: Vec::new(),
    };
    let Some(batch) = batch else {
        let (line_up, normal) = line_up::normal(compiled);
        let compiled = line_up.compiled();
        let (found, in_words) = operating_point(compiled);
        told.operating_point = with_line_up(in_words, normal.as_ref());
        let class_set = class_set::apart(compiled, &found);
        tell(
            &Solution::new(compiled, &found, &class_set),
            compiled,
            &mut told,
        );
        return told;
    };
    told.operating_point = format!("batch {}", batch.name);
    let situation = Situation::new(compiled, batch, &[]);
    if let Some(reason) = situation.standstill() {
        told.reason = Some(reason);
        return told;
    }
    let compiled = situation.compiled();
    match attempt(compiled, &situation.readings.measured) {
        Ok(found) => {
            let class_set = class_set::of(compiled, &found);
            tell(
                &Solution::new(compiled, &found, &class_set),
                compiled,
                &mut told,
            );
        }
        Err(reason) => told.reason = Some(reason),
    }
    told
}

/// A hypothesis that can be tested.
struct Tested<'a> {
    hypothesis: &'a Hypothesis,
    sigma: f64,
}

fn tell(solution: &Solution, compiled: &Compiled, told: &mut TellApart) {
    let Some(test) = solution.single_test() else {
        told.reason = Some("nothing is redundant, so nothing is tested".to_owned());
        return;
    };
    told.critical_value = Some(test.critical_value);
    told.group_distance = Some(test.group_distance);
    // The seen stand in the order of the hypotheses, as those that are tested do.
    let (seen, unseen): (Vec<Limit>, Vec<Limit>) = limits(
        compiled,
        &judged(compiled, solution),
        Some(test.critical_value),
    )
    .into_iter()
    .partition(|limit| limit.detectable.is_some());
    told.unseen = unseen;
    let all = compiled.hypotheses().iter();
    let tested: Vec<Tested> = all
        .filter_map(|hypothesis| {
            let sigma = testable(solution, hypothesis).ok()?.sigma;
            Some(Tested { hypothesis, sigma })
        })
        .collect();
    let correlation = correlations(solution, &tested);
    let one_sided: Vec<bool> = tested.iter().map(|t| t.hypothesis.one_sided).collect();
    told.rows = rows(&correlation, &one_sided, &test)
        .into_iter()
        .map(|row| Apart {
            causes: row.causes.iter().map(|&t| seen[t].clone()).collect(),
            alike: row.alike,
            mixed_up_with: (row.others.iter())
                .map(|&(h, correlation)| MixedUp {
                    hypothesis: seen[h].hypothesis.clone(),
                    correlation,
                })
                .collect(),
        })
        .collect();
}

/// Correlations of the statistics, a row for each hypothesis.
fn correlations(solution: &Solution, tested: &[Tested]) -> Vec<Vec<f64>> {
    let shifts: Vec<_> = (tested.iter())
        .map(|t| solution.shift(t.hypothesis))
        .collect();
    tested
        .iter()
        .map(|t| {
            let response = solution.response(t.hypothesis);
            let others = shifts.iter().zip(tested);
            others
                .map(|(shift, h)| {
                    let n = shift.numerator(&response.residuals, &response.multipliers);
                    (n * h.sigma * t.sigma).clamp(-1.0, 1.0)
                })
                .collect()
        })
        .collect()
}

/// Hypotheses of one group, by their place among those that can be tested.
struct Row {
    causes: Vec<usize>,
    alike: Option<f64>,
    others: Vec<(usize, f64)>,
}

/// Every hypothesis with its group; equal groups are one row.
fn rows(correlation: &[Vec<f64>], one_sided: &[bool], test: &SingleTest) -> Vec<Row> {
    let distance = TIMES_LIMIT * detectable(test.critical_value, 1.0);
    let least = (1.0 - test.group_distance / distance.powi(2)).max(0.0);
    let groups: Vec<Vec<usize>> = (0..correlation.len())
        .map(|t| {
            let within = |&h: &usize| {
                let rho = correlation[t][h];
                let fits = rho > 0.0 || !(one_sided[t] && one_sided[h]);
                h == t || (rho.powi(2) >= least && fits)
            };
            (0..correlation.len()).filter(within).collect()
        })
        .collect();
    let mut rows: Vec<Row> = Vec::new();
    for (t, group) in groups.iter().enumerate() {
        if groups[..t].contains(group) {
            continue;
        }
        let (causes, others): (Vec<usize>, Vec<usize>) =
            group.iter().partition(|&&h| groups[h] == *group);
        let pairs = causes.iter().enumerate();
        let alike = pairs
            .flat_map(|(n, &a)| causes[n + 1..].iter().map(move |&b| correlation[a][b]))
            .min_by(|a, b| a.abs().total_cmp(&b.abs()));
        let strongest = |h: usize| {
            let of_causes = causes.iter().map(|&t| correlation[t][h]);
            of_causes.fold(0.0, |a: f64, b| if b.abs() > a.abs() { b } else { a })
        };
        let mut others: Vec<(usize, f64)> = others.iter().map(|&h| (h, strongest(h))).collect();
        others.sort_by(|a, b| b.1.abs().total_cmp(&a.1.abs()).then(a.0.cmp(&b.0)));
        rows.push(Row {
            causes,
            alike,
            others,
        });
    }
    rows
}

#[cfg(test)]
mod tests {
    use super::*;

    fn grouped(correlation: &[Vec<f64>], one_sided: &[bool]) -> Vec<(Vec<usize>, Vec<usize>)> {
        let test = SingleTest {
            critical_value: 3.0,
            method: "simulated".to_owned(),
            statistics: correlation.len(),
            class_set: String::new(),
            group_distance: 6.0,
        };
        rows(correlation, one_sided, &test)
            .into_iter()
            .map(|row| (row.causes, row.others.into_iter().map(|o| o.0).collect()))
            .collect()
    }

    #[test]
    fn the_shortfall_decides_who_is_mixed_up() {
        // D = 2 (3 + 0.842) = 7.683; the shortfall is 6 at rho^2 = 1 - 6 / D^2, rho = 0.9478.
        let pair = |rho: f64| vec![vec![1.0, rho], vec![rho, 1.0]];
        assert_eq!(
            grouped(&pair(0.947), &[false; 2]),
            [(vec![0], vec![]), (vec![1], vec![])]
        );
        assert_eq!(
            grouped(&pair(0.949), &[false; 2]),
            [(vec![0, 1], Vec::<usize>::new())]
        );
        assert_eq!(
            grouped(&pair(-0.949), &[true, false]),
            [(vec![0, 1], Vec::<usize>::new())]
        );
    }

    #[test]
    fn of_one_sign_each_means_never_of_opposite_effect() {
        let pair = vec![vec![1.0, -0.99], vec![-0.99, 1.0]];
        assert_eq!(
            grouped(&pair, &[true, true]),
            [(vec![0], vec![]), (vec![1], vec![])]
        );
    }

    #[test]
    fn one_in_the_middle_has_a_row_of_its_own() {
        // 0 - 1 - 2 in a chain: 0 and 2 are told apart, 1 from neither.
        let chain = vec![
            vec![1.0, 0.96, 0.85],
            vec![0.96, 1.0, 0.97],
            vec![0.85, 0.97, 1.0],
        ];
        assert_eq!(
            grouped(&chain, &[false; 3]),
            [
                (vec![0], vec![1]),
                (vec![1], vec![2, 0]),
                (vec![2], vec![1])
            ]
        );
    }
}
