//! Second thoughts of a search: is each suspect needed, is another better, and
//! which of two searches is kept.
//!
//! A suspect without which nothing else is left unexplained goes; one that
//! explains less than another gives way. With a suspect out and the others in,
//! the batch cannot fit worse than with none in: a solution that does is a false
//! minimum and is not used.

use super::search::{EQUAL, Findings, Group, Member, Search};
use super::solution::Solution;
use super::trial::Trial;
use crate::diagnosis::chi_square_quantile;

/// Exchanges of one suspect for another.
const MOST_EXCHANGES: usize = 3;

impl Search<'_> {
    /// The suspects of a stage that are needed, each with its group, and the
    /// stage that they make.
    ///
    /// `last` is the group that the suspect taken in last was found with: it stands
    /// as long as nothing else has changed.
    pub(super) fn refined(
        &self,
        stage: Trial,
        mut last: Option<Group>,
        plain: &Solution,
    ) -> (Vec<Group>, Trial) {
        let forward = stage.suspects.clone();
        let mut stage = self.pruned(stage);
        let mut exchanges = 0;
        'again: loop {
            let mut groups = Vec::new();
            for nth in 0..stage.suspects.len() {
                let suspect = stage.suspects[nth];
                if nth + 1 == forward.len()
                    && stage.suspects == forward
                    && let Some(last) = last.take()
                {
                    groups.push(last);
                    continue;
                }
                let Some(before) = self.without(&stage, nth) else {
                    groups.extend(self.alone(&stage, suspect));
                    continue;
                };
                let Some(mut step) = self.step_from(&before, plain) else {
                    // Not needed after all.
                    stage = before;
                    continue 'again;
                };
                if step.members[0].hypothesis != suspect
                    && exchanges < MOST_EXCHANGES
                    && let Some(best) = step.best.take()
                    && best.outcome.objective < stage.outcome.objective * (1.0 - EQUAL)
                {
                    exchanges += 1;
                    stage = best;
                    continue 'again;
                }
                // The one that is in leads its group.
                match step.members.iter().position(|m| m.hypothesis == suspect) {
                    Some(at) => step.members[..=at].rotate_right(1),
                    None => step
                        .members
                        .splice(0..0, self.member(&stage, &before, suspect))
                        .for_each(drop),
                }
                groups.push(Group {
                    members: step.members,
                    before,
                    statistic_after: stage.outcome.objective,
                });
            }
            return (groups, stage);
        }
    }

    /// Only suspects that are needed with the others in: the weakest goes as
    /// long as its size over its uncertainty is below the critical value.
    fn pruned(&self, mut stage: Trial) -> Trial {
        while stage.suspects.len() > 1 {
            let view = stage.view(self.base, self.test);
            let solution = view.solution();
            let strengths = stage.suspects.iter().map(|&h| {
                let Some((size, sigma)) = self.sized(&stage, &solution, h) else {
                    return 0.0;
                };
                if self.base.hypotheses()[h].one_sided {
                    size / sigma
                } else {
                    size.abs() / sigma
                }
            });
            let weakest = strengths.enumerate().min_by(|a, b| a.1.total_cmp(&b.1));
            let Some((nth, _)) = weakest.filter(|&(_, s)| s <= self.test.critical_value) else {
                break;
            };
            match self.without(&stage, nth) {
                Some(without) => stage = without,
                None => break,
            }
        }
        stage
    }

    /// The batch without suspect number `nth`, the others in: from the stage and
    /// from the batch without any, whichever fits better.
    fn without(&self, stage: &Trial, nth: usize) -> Option<Trial> {
        let mut others = stage.suspects.clone();
        others.remove(nth);
        if others.is_empty() {
            return Some(self.nothing.clone());
        }
        let plain = self.nothing.outcome.objective;
        let less = stage.less(self.base, nth, self.readings);
        let less = less.map(|less| less.settled(self.base));
        let anew = Some(self.take_in(&others)).filter(|anew| anew.suspects == others);
        let fits = |trial: &Trial| trial.outcome.objective <= plain * (1.0 + EQUAL);
        less.into_iter()
            .chain(anew)
            .filter(fits)
            .min_by(|a, b| a.outcome.objective.total_cmp(&b.outcome.objective))
    }

    /// The group of a suspect whose absence does not solve: itself, by linear
    /// figures.
    fn alone(&self, stage: &Trial, suspect: usize) -> Option<Group> {
        let member = self.member(stage, &self.nothing, suspect)?;
        Some(Group {
            members: vec![Member {
                ratio: member.linear_ratio,
                solved: false,
                ..member
            }],
            before: self.nothing.clone(),
            statistic_after: stage.outcome.objective,
        })
    }

    /// A suspect that is in, as a member of its group.
    fn member(&self, stage: &Trial, before: &Trial, suspect: usize) -> Option<Member> {
        let view = stage.view(self.base, self.test);
        let (size, sigma) = self.sized(stage, &view.solution(), suspect)?;
        Some(Member {
            hypothesis: suspect,
            size,
            sigma,
            ratio: before.outcome.objective - stage.outcome.objective,
            linear_ratio: (size / sigma).powi(2),
            solved: true,
            leads: true,
        })
    }

    /// Hypotheses that stand in several groups: one cause may have been taken for
    /// two.
    pub fn shared(&self, findings: &Findings) -> Vec<usize> {
        let groups = || findings.suspects.iter().enumerate();
        let mut shared: Vec<usize> = groups()
            .flat_map(|(n, group)| group.members.iter().map(move |member| (n, member)))
            .filter(|(n, member)| {
                let mut others = groups().filter(|(other, _)| other != n);
                member.leads
                    && others.any(|(_, group)| {
                        let mut members = group.members.iter();
                        members.any(|m| m.hypothesis == member.hypothesis)
                    })
            })
            .map(|(_, member)| member.hypothesis)
            .collect();
        shared.sort_unstable();
        shared.dedup();
        shared
    }

    /// Whether one suspect after another may have led astray: several were
    /// named, or those named leave the global test failing.
    pub fn is_muddled(&self, findings: &Findings, plain: &Solution) -> bool {
        let statistic = match &findings.explained {
            Some(explained) => explained.outcome.objective,
            None => plain.objective(),
        };
        let named = findings.suspects.len();
        let left = plain.degrees_of_freedom().saturating_sub(named);
        let critical = chi_square_quantile(self.base.plant().confidence, left);
        named > 1 || critical.is_some_and(|critical| statistic > critical)
    }

    /// Whether suspects that were chosen otherwise are worth a search: those of
    /// them that are needed explain as much for their number as what was found.
    pub fn is_promising(&self, chosen: &[usize], findings: &Findings) -> bool {
        let stage = self.pruned(self.take_in(chosen));
        let suspects = stage.suspects.len() as f64;
        let price = stage.outcome.objective + suspects * self.test.critical_value.powi(2);
        !stage.suspects.is_empty() && price < self.price(findings)
    }

    /// What is left unexplained, and what each suspect has to explain to be worth
    /// naming: of two searches the cheaper one is kept.
    pub fn price(&self, findings: &Findings) -> f64 {
        let suspects = findings.suspects.len() as f64;
        let explained = findings.explained.as_ref().unwrap_or(&self.nothing);
        explained.outcome.objective + suspects * self.test.critical_value.powi(2)
    }
}
