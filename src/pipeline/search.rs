//! Which hypotheses explain a disagreement.
//!
//! One after another, the hypothesis with the largest generalised likelihood
//! ratio above the square of the critical value is taken in as an unknown and
//! the batch solved again, nonlinearly, until none is left above it (Narasimhan
//! and Mah 1987). Then each that was taken in must still be needed with the
//! others in, and may be exchanged for one that explains more. Last, each gets
//! its group: every hypothesis whose ratio after solving again lies within the
//! calibrated distance of the best. Linear theory chooses who is solved.

use super::attempt::Found;
use super::compiled::Compiled;
use super::hypotheses::{Judged, arguable, testable};
use super::solution::Solution;
use super::trial::Trial;
use crate::diagnosis::{Evidence, chi_square_quantile};
use crate::equations::Measured;
use crate::report::SingleTest;

/// Most suspects of a batch.
pub const MOST_SUSPECTS: usize = 5;
/// Most hypotheses that are solved to find one suspect and its group.
const MOST_SOLVED: usize = 8;
/// How much further than the group distance linear theory is trusted to err.
const MARGIN: f64 = 1.0;
/// The same as a part of the ratio, before the first is solved...
const MARGIN_OF_RATIO: f64 = 0.05;
/// ...and in errors that it turned out to have.
const FAMILIAR_ERRORS: f64 = 2.0;
/// Exchanges of one suspect for another.
const MOST_EXCHANGES: usize = 3;
/// Ratios this near, as a part of the larger, are equal but for rounding: the
/// order of the hypotheses then decides.
const EQUAL: f64 = 1e-6;

/// What the search found.
#[derive(Default)]
pub struct Findings {
    /// Suspects in the order in which they were taken in.
    pub suspects: Vec<Group>,
    /// The batch with all of them in, the first member of each group.
    pub explained: Option<Trial>,
    /// More than [`MOST_SUSPECTS`] would be needed.
    pub more: bool,
}

/// Hypotheses that the readings cannot tell apart.
pub struct Group {
    /// The likeliest first.
    pub members: Vec<Member>,
    /// The batch without it, the other suspects in.
    pub before: Trial,
    /// Weighted sum of squares with it.
    pub statistic_after: f64,
}

/// A member of a group; size and sigma in internal units.
#[derive(Clone, Copy, Debug)]
pub struct Member {
    /// Its place among the hypotheses.
    pub hypothesis: usize,
    /// Size.
    pub size: f64,
    /// Standard uncertainty of the size.
    pub sigma: f64,
    /// Generalised likelihood ratio.
    pub ratio: f64,
    /// Size and ratio are of a solve and not of linear theory.
    pub solved: bool,
}

/// One batch to be searched.
pub struct Search<'a> {
    /// The plant.
    pub base: &'a Compiled,
    /// Readings in use.
    pub readings: &'a [Option<Measured>],
    /// Critical value and group distance.
    pub test: &'a SingleTest,
    /// What the batch without suspects says of every hypothesis.
    pub plain: &'a [Judged],
}

/// One step: the members of a group, the best first, and the best one solved.
struct Step {
    members: Vec<Member>,
    best: Option<Trial>,
}

impl Search<'_> {
    /// Searches from the batch as it was solved, or from suspects that were
    /// chosen otherwise.
    pub fn run(&self, found: &Found, solution: &Solution, chosen: &[usize]) -> Findings {
        let nothing = Trial::without_suspects(found);
        let mut more = false;
        let mut kept: Vec<Group> = Vec::new();
        let mut stage = self.take_in(&nothing, chosen);
        loop {
            let step = if stage.suspects.is_empty() {
                self.step(&stage, solution)
            } else {
                self.step(&stage, &stage.view(self.base, self.test).solution())
            };
            let Some(Step { members, best }) = step else {
                break;
            };
            if stage.suspects.len() == MOST_SUSPECTS {
                more = true;
                break;
            }
            let Some(best) = best else {
                // Linear figures are all there is, and there is nowhere to go on from.
                let statistic_after = stage.outcome.objective - members[0].ratio;
                kept.push(Group {
                    members,
                    statistic_after,
                    before: stage,
                });
                return Findings {
                    suspects: kept,
                    explained: None,
                    more,
                };
            };
            let statistic_after = best.outcome.objective;
            let before = std::mem::replace(&mut stage, best);
            kept.push(Group {
                members,
                before,
                statistic_after,
            });
        }
        if stage.suspects.len() > 1 || !chosen.is_empty() {
            stage = self.pruned(stage);
            (kept, stage) = self.regrouped(stage, solution);
        }
        Findings {
            suspects: kept,
            explained: (!stage.suspects.is_empty()).then_some(stage),
            more,
        }
    }

    /// Whether one suspect after another may have led astray: several were
    /// named, or those named leave the global test failing.
    pub fn is_muddled(&self, findings: &Findings, solution: &Solution) -> bool {
        let statistic = match &findings.explained {
            Some(explained) => explained.outcome.objective,
            None => solution.objective(),
        };
        let named = findings.suspects.len();
        let left = solution.degrees_of_freedom().saturating_sub(named);
        let critical = chi_square_quantile(self.base.plant().confidence, left);
        named > 1 || critical.is_some_and(|critical| statistic > critical)
    }

    /// What is left unexplained, and what each suspect has to explain to be worth
    /// naming: of two searches the cheaper one is kept.
    pub fn price(&self, findings: &Findings, solution: &Solution) -> f64 {
        let suspects = findings.suspects.len() as f64;
        match &findings.explained {
            Some(explained) => {
                explained.outcome.objective + suspects * self.test.critical_value.powi(2)
            }
            None if findings.suspects.is_empty() => solution.objective(),
            None => f64::INFINITY,
        }
    }

    /// The batch with all of these in; those that do not solve stay out.
    fn take_in(&self, nothing: &Trial, chosen: &[usize]) -> Trial {
        let mut stage = nothing.clone();
        for &suspect in chosen.iter().take(MOST_SUSPECTS) {
            if let Some(next) = stage.with(self.base, suspect, 0.0) {
                stage = next.settled(self.base);
            }
        }
        stage
    }

    /// What is spoken for most strongly, with the suspects of `stage` in;
    /// `None` where nothing stands above the critical value.
    fn step(&self, stage: &Trial, solution: &Solution) -> Option<Step> {
        let scores = self.scores(stage, solution);
        let (_, _, largest) = *scores.first()?;
        let speaks = |&(h, _, ratio): &(usize, Evidence, f64)| {
            let hypothesis = &self.base.hypotheses()[h];
            ratio > self.test.critical_value.powi(2) && testable(solution, hypothesis).is_ok()
        };
        if !scores.iter().any(speaks) {
            return None;
        }
        let distance = self.test.group_distance;
        let mut reach = distance + MARGIN + MARGIN_OF_RATIO * largest;
        let mut best: Option<Trial> = None;
        let mut members = Vec::new();
        for (nth, &(hypothesis, evidence, ratio)) in scores.iter().enumerate() {
            if ratio < largest - reach {
                break;
            }
            let linear = Member {
                hypothesis,
                size: evidence.size,
                sigma: evidence.sigma,
                ratio,
                solved: false,
            };
            let solved = (nth < MOST_SOLVED)
                .then(|| self.solved(stage, linear))
                .flatten();
            let Some((member, trial)) = solved else {
                members.push(linear);
                continue;
            };
            if self.base.hypotheses()[hypothesis].one_sided && member.size <= 0.0 {
                continue;
            }
            if nth == 0 {
                // Linear theory errs for the others as it does for the first.
                let error = (member.ratio - ratio).abs();
                reach = reach.min(distance + MARGIN + FAMILIAR_ERRORS * error);
            }
            members.push(member);
            let objective = trial.outcome.objective;
            let lower = |best: &Trial| objective < best.outcome.objective * (1.0 - EQUAL);
            if best.as_ref().is_none_or(lower) {
                best = Some(trial);
            }
        }
        let best = best.map(|best| best.settled(self.base));
        self.rank(&mut members, best.as_ref());
        (!members.is_empty()).then_some(Step { members, best })
    }

    /// A member by a solve of its own.
    fn solved(&self, stage: &Trial, linear: Member) -> Option<(Member, Trial)> {
        let trial = stage.with(self.base, linear.hypothesis, linear.size)?;
        let reading = self.reading(linear.hypothesis);
        let member = Member {
            size: trial.size(self.base, linear.hypothesis, reading)?,
            ratio: stage.outcome.objective - trial.outcome.objective,
            solved: true,
            ..linear
        };
        Some((member, trial))
    }

    /// The best first, and only what lies within the group distance of it.
    fn rank(&self, members: &mut Vec<Member>, best: Option<&Trial>) {
        let first = best.and_then(|trial| trial.suspects.last().copied());
        let leads = |member: &Member| match first {
            Some(first) => member.hypothesis == first,
            None => !member.solved,
        };
        let Some(lead) = members.iter().position(leads) else {
            return;
        };
        let lead = members.remove(lead);
        members.retain(|member| member.ratio >= lead.ratio - self.test.group_distance);
        // Stable: what is equal but for rounding stays in the order it has.
        let whole = |member: &Member| (member.ratio / (EQUAL * lead.ratio)).round();
        members.sort_by(|a, b| {
            whole(b)
                .total_cmp(&whole(a))
                .then(a.hypothesis.cmp(&b.hypothesis))
        });
        members.insert(0, lead);
    }

    /// Hypotheses that can be argued for and are not in, with their ratio, the
    /// largest first.
    fn scores(&self, stage: &Trial, solution: &Solution) -> Vec<(usize, Evidence, f64)> {
        let all = self.base.hypotheses().iter().enumerate();
        let mut scores: Vec<(usize, Evidence, f64)> = all
            .filter(|(h, _)| !stage.suspects.contains(h))
            .filter_map(|(h, hypothesis)| {
                let known = hypothesis.observation().is_none() && stage.suspects.is_empty();
                let judged = if known {
                    self.plain[h]
                } else {
                    arguable(solution, hypothesis)
                };
                let evidence = judged.ok()?;
                let ratio = evidence.ratio(hypothesis.one_sided);
                (ratio > 0.0).then_some((h, evidence, ratio))
            })
            .collect();
        let largest = scores.iter().map(|s| s.2).fold(0.0, f64::max);
        let whole = |ratio: f64| (ratio / (EQUAL * largest)).round();
        scores.sort_by(|a, b| whole(b.2).total_cmp(&whole(a.2)).then(a.0.cmp(&b.0)));
        scores
    }

    /// Only suspects that are needed with the others in: the weakest goes as
    /// long as its size over its uncertainty is below the critical value.
    fn pruned(&self, mut stage: Trial) -> Trial {
        while stage.suspects.len() > 1 {
            let view = stage.view(self.base, self.test);
            let solution = view.solution();
            let strengths = stage.suspects.iter().map(|&h| {
                let (size, sigma) = self.sized(&stage, &solution, h)?;
                let strength = size.abs() / sigma;
                Some(strength)
            });
            let weakest = strengths
                .map(|strength| strength.unwrap_or(0.0))
                .enumerate()
                .min_by(|a, b| a.1.total_cmp(&b.1));
            let Some((nth, _)) = weakest.filter(|&(_, s)| s <= self.test.critical_value) else {
                break;
            };
            match stage.less(self.base, nth, self.readings) {
                Some(less) => stage = less.settled(self.base),
                None => break,
            }
        }
        stage
    }

    /// Size of a suspect that is in and its standard uncertainty, internal units.
    pub fn sized(&self, stage: &Trial, solution: &Solution, suspect: usize) -> Option<(f64, f64)> {
        let size = stage.size(self.base, suspect, self.reading(suspect))?;
        let sigma = match self.base.hypotheses()[suspect].observation() {
            Some(i) => {
                let (_, predicted) = solution.predict(i)?;
                self.readings[i]?.sigma.get().hypot(predicted)
            }
            None => solution.uncertainty(&[(stage.state(suspect)?, 1.0)])?,
        };
        Some((size, sigma))
    }

    /// The group of each suspect with the others in; a suspect gives way to one
    /// that explains more.
    fn regrouped(&self, mut stage: Trial, plain: &Solution) -> (Vec<Group>, Trial) {
        let mut exchanges = 0;
        'again: loop {
            let mut groups = Vec::new();
            for nth in 0..stage.suspects.len() {
                let suspect = stage.suspects[nth];
                let less = stage.less(self.base, nth, self.readings);
                let Some(before) = less.map(|less| less.settled(self.base)) else {
                    continue;
                };
                let step = if before.suspects.is_empty() {
                    self.step(&before, plain)
                } else {
                    self.step(&before, &before.view(self.base, self.test).solution())
                };
                let Some(mut step) = step else {
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
                if let Some(at) = step.members.iter().position(|m| m.hypothesis == suspect) {
                    step.members[..=at].rotate_right(1);
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

    fn reading(&self, hypothesis: usize) -> Option<Measured> {
        let observation = self.base.hypotheses()[hypothesis].observation();
        observation.and_then(|i| self.readings[i])
    }
}
