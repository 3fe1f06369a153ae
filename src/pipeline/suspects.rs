//! Suspects in the report: who, how large, on what evidence, and the reconciled
//! values with them taken out.

use super::attempt::{Found, attempt};
use super::checks;
use super::compiled::Compiled;
use super::hypotheses::{Judged, arguable, named, unit};
use super::line_up::Situation;
use super::readings::Readings;
use super::search::{Findings, Group, MOST_SUSPECTS, Member, Search};
use super::solution::Solution;
use super::trial::Trial;
use super::{class_set, equipment, global_test, robust, streams, tags};
use crate::diagnosis::{HARDLY_REDUNDANT, detectable};
use crate::equations::Role;
use crate::plant::{Batch, ByHand, COVERAGE_FACTOR};
use crate::report::{Accused, AfterSuspects, Repaired, Report, SingleTest, Suspect, Verdict};

/// Standardised statistics below this are no evidence.
const WORTH_SAYING: f64 = 2.0;
/// Hypotheses of several groups that are tried by themselves.
const MOST_RETRIED: usize = 3;
/// Pieces of evidence that are listed, of balances and of tags.
const LISTED: usize = 6;

/// Searches a batch for suspects and puts into the report what was found.
pub fn name(
    compiled: &Compiled,
    readings: &Readings,
    found: &Found,
    solution: &Solution,
    judged: &[Judged],
    report: &mut Report,
) {
    let Some(test) = report.single_test.clone() else {
        return;
    };
    let search = Search {
        base: compiled,
        readings: &readings.measured,
        test: &test,
        plain: judged,
        nothing: Trial::without_suspects(found),
    };
    let mut findings = search.run(solution, &[]);
    let mut starts: Vec<Vec<usize>> = (search.shared(&findings).into_iter().take(MOST_RETRIED))
        .map(|shared| vec![shared])
        .collect();
    if compiled.plant().robust_start && search.is_muddled(&findings, solution) {
        let mut chosen = robust::left_out(compiled, found, test.critical_value);
        chosen.retain(|&h| judged[h].is_ok());
        starts.push(chosen);
    }
    for start in starts {
        if !search.is_promising(&start, &findings) {
            continue;
        }
        let other = search.run(solution, &start);
        if search.price(&other) < search.price(&findings) {
            findings = other;
        }
    }
    let tell = Telling {
        compiled,
        test: &test,
        plain: solution,
        search: &search,
    };
    report.suspects = tell.suspects(&findings);
    if let Some(explained) = &findings.explained {
        let view = explained.view(compiled, &test);
        let solution = view.solution();
        let after = after_suspects(compiled, readings, explained, &solution);
        report.after_suspects = Some(Box::new(after));
    }
    report.suspects_remarks = remarks(report, &findings);
}

/// The batch with one hypothesis in, whether or not anything speaks for it: its
/// size and how much it explains. `None` where the batch does not converge with
/// it or nothing of it shows.
pub fn suppose(
    compiled: &Compiled,
    batch: &Batch,
    by_hand: &[ByHand],
    supposed: &crate::report::Hypothesis,
) -> Option<Accused> {
    let situation = Situation::new(compiled, batch, by_hand);
    if situation.standstill().is_some() {
        return None;
    }
    let (compiled, readings) = (situation.compiled(), &situation.readings);
    let found = attempt(compiled, &readings.measured).ok()?;
    let class_set = class_set::of(compiled, &found);
    let solution = Solution::new(compiled, &found, &class_set);
    let test = solution.single_test()?;
    let all = compiled.hypotheses();
    let place = all.iter().position(|h| named(compiled, h) == *supposed)?;
    let evidence = arguable(&solution, &all[place]).ok()?;
    let search = Search {
        base: compiled,
        readings: &readings.measured,
        test: &test,
        plain: &[],
        nothing: Trial::without_suspects(&found),
    };
    let nothing = &search.nothing;
    let trial = nothing
        .with(compiled, place, evidence.size)?
        .settled(compiled);
    let view = trial.view(compiled, &test);
    let (size, sigma) = search.sized(&trial, &view.solution(), place)?;
    let tell = Telling {
        compiled,
        test: &test,
        plain: &solution,
        search: &search,
    };
    Some(tell.accused(&Member {
        hypothesis: place,
        size,
        sigma,
        ratio: nothing.outcome.objective - trial.outcome.objective,
        linear_ratio: evidence.ratio(false),
        solved: true,
        leads: true,
    }))
}

/// What telling of suspects needs to know.
struct Telling<'a> {
    compiled: &'a Compiled,
    test: &'a SingleTest,
    /// The batch without any suspect in.
    plain: &'a Solution<'a>,
    search: &'a Search<'a>,
}

impl Telling<'_> {
    fn suspects(&self, findings: &Findings) -> Vec<Suspect> {
        let Some(explained) = &findings.explained else {
            let told = findings.suspects.iter();
            return told.map(|group| self.suspect(group, None)).collect();
        };
        let view = explained.view(self.compiled, self.test);
        let solution = view.solution();
        let groups = findings.suspects.iter();
        groups
            .map(|group| self.suspect(group, Some((explained, &solution))))
            .collect()
    }

    fn suspect(&self, group: &Group, after: Option<(&Trial, &Solution)>) -> Suspect {
        if group.before.suspects.is_empty() {
            return self.suspect_between(group, self.plain, after);
        }
        let view = group.before.view(self.compiled, self.test);
        let before = view.solution();
        self.suspect_between(group, &before, after)
    }

    fn suspect_between(
        &self,
        group: &Group,
        before: &Solution,
        after: Option<(&Trial, &Solution)>,
    ) -> Suspect {
        let mut members = group.members.clone();
        if let (Some(first), Some((trial, solution))) = (members.first_mut(), after)
            && let Some((size, sigma)) = self.search.sized(trial, solution, first.hypothesis)
        {
            (first.size, first.sigma) = (size, sigma);
        }
        let after = after.map(|(_, solution)| solution);
        let accused = members.iter().map(|member| self.accused(member));
        Suspect {
            group: accused.collect(),
            statistic_before: group.before.outcome.objective,
            statistic_after: group.statistic_after,
            balances: repaired(
                balances(self.compiled, before),
                after.map(|s| balances(self.compiled, s)),
            ),
            tags: repaired(
                readings(self.compiled, before),
                after.map(|s| readings(self.compiled, s)),
            ),
            checks: checks::worth_doing(self.compiled, self.test, before, &members),
        }
    }

    fn accused(&self, member: &Member) -> Accused {
        let hypothesis = &self.compiled.hypotheses()[member.hypothesis];
        let (unit, factor) = unit(self.compiled, hypothesis);
        let linear = "the batch was not solved with it: size and ratio are linear estimates";
        Accused {
            hypothesis: named(self.compiled, hypothesis),
            size: factor * member.size,
            uncertainty: COVERAGE_FACTOR * factor.abs() * member.sigma,
            unit,
            ratio: member.ratio,
            detectable: detectable(self.test.critical_value, factor.abs() * member.sigma),
            remark: (!member.solved).then(|| linear.to_owned()),
        }
    }
}

/// Standardised imbalance of every balance that is checked.
fn balances(compiled: &Compiled, solution: &Solution) -> Vec<(String, Option<f64>)> {
    let relations = compiled.system().relations.iter().enumerate();
    relations
        .filter_map(|(k, relation)| {
            let equipment = &compiled.plant().equipment[relation.of?.0].name;
            let name = match &relation.role {
                Role::Mass { side } => format!("{equipment} mass {side}"),
                Role::Energy => format!("{equipment} energy"),
                _ => return None,
            };
            Some((name, solution.miss(k).map(|miss| miss.standardised)))
        })
        .collect()
}

/// Standardised adjustment of every tag and assumption that has one.
fn readings(compiled: &Compiled, solution: &Solution) -> Vec<(String, Option<f64>)> {
    let plant = compiled.plant();
    let tags = plant.tags.iter().map(|tag| &tag.name);
    let names = tags.chain(plant.assumptions.iter().map(|a| &a.name));
    names
        .enumerate()
        .map(|(i, name)| {
            let redundancy = solution.redundancy(i);
            let tested = solution.measured(i).is_some() && redundancy >= HARDLY_REDUNDANT;
            let standardised = tested.then(|| solution.adjustment(i) / redundancy.sqrt());
            (name.clone(), standardised)
        })
        .collect()
}

/// What stood out before and does less after, the largest change first.
fn repaired(
    before: Vec<(String, Option<f64>)>,
    after: Option<Vec<(String, Option<f64>)>>,
) -> Vec<Repaired> {
    let Some(after) = after else {
        return Vec::new();
    };
    let pairs = before.into_iter().zip(after);
    let mut repaired: Vec<Repaired> = pairs
        .filter_map(|((of, before), (_, after))| {
            let before = before.filter(|z| z.abs() > WORTH_SAYING)?;
            let better = after.is_none_or(|after| after.abs() < before.abs());
            better.then_some(Repaired {
                of,
                standardised_before: before,
                standardised_after: after,
            })
        })
        .collect();
    let change =
        |r: &Repaired| r.standardised_before.abs() - r.standardised_after.unwrap_or(0.0).abs();
    repaired.sort_by(|a, b| change(b).total_cmp(&change(a)));
    repaired.truncate(LISTED);
    repaired
}

fn after_suspects(
    compiled: &Compiled,
    readings: &Readings,
    explained: &Trial,
    solution: &Solution,
) -> AfterSuspects {
    let mut left = readings.clone();
    for &suspect in &explained.suspects {
        if let Some(i) = compiled.hypotheses()[suspect].observation() {
            left.measured[i] = None;
            left.reasons[i] = Some("suspected: left out".to_owned());
        }
    }
    AfterSuspects {
        global_test: global_test(solution, compiled.plant().confidence),
        tags: tags::tags(compiled, &left, Some(solution)),
        assumptions: tags::assumptions(compiled, &left, Some(solution)),
        streams: streams::streams(explained.compiled(compiled), solution),
        equipment: equipment::equipment(explained.compiled(compiled), solution),
    }
}

/// What the suspects alone do not tell.
fn remarks(report: &Report, findings: &Findings) -> Vec<String> {
    let mut remarks = Vec::new();
    if report.verdict == Verdict::Inconsistent && report.suspects.is_empty() {
        remarks.push("the global test fails and no single cause explains it".to_owned());
    }
    if findings.more {
        remarks.push(format!(
            "{MOST_SUSPECTS} suspects do not explain everything, and more are not looked for"
        ));
    }
    if let Some(after) = &report.after_suspects {
        let test = &after.global_test;
        match test.critical_value {
            None => remarks.push(
                "the redundancy is used up: with the suspects out nothing checks the rest"
                    .to_owned(),
            ),
            Some(critical) if test.statistic > critical => remarks.push(
                "the global test fails even with the suspects out: something is left unexplained"
                    .to_owned(),
            ),
            Some(_) => {}
        }
    } else if !report.suspects.is_empty() {
        remarks.push(
            "the batch could not be solved with the suspect out: its figures are linear estimates"
                .to_owned(),
        );
    }
    remarks
}
