//! Which hypotheses explain a disagreement.
//!
//! One after another, the hypothesis with the largest generalised likelihood
//! ratio above the square of the critical value is taken in as an unknown and
//! the batch solved again, nonlinearly, until none is left above it (Narasimhan
//! and Mah 1987). Each gets its group: every hypothesis whose ratio after
//! solving again lies within the calibrated distance of the best. Linear theory
//! chooses who is solved. Whether each is still needed with the others in is
//! asked in `refine`.

use super::compiled::Compiled;
use super::hypotheses::{Judged, arguable, testable};
use super::solution::Solution;
use super::trial::Trial;
use crate::diagnosis::Evidence;
use crate::equations::Measured;
use crate::report::SingleTest;

/// Most suspects of a batch.
pub const MOST_SUSPECTS: usize = 5;
/// Most hypotheses that are solved to find one suspect and its group.
const MOST_SOLVED: usize = 6;
/// How much further than the group distance linear theory is trusted to err.
const MARGIN: f64 = 1.0;
/// The same as a part of the ratio.
const MARGIN_OF_RATIO: f64 = 0.05;
/// Ratios this near, as a part of the larger, are equal but for rounding: the
/// order of the hypotheses then decides.
pub(super) const EQUAL: f64 = 1e-6;

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
    /// The same by linear theory.
    pub linear_ratio: f64,
    /// Size and ratio are of a solve and not of linear theory.
    pub solved: bool,
    /// It can be tested by itself; what cannot does not lead a group.
    pub leads: bool,
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
    /// The batch without suspects.
    pub nothing: Trial,
}

/// One step: the members of a group, the best first, and the best one solved.
pub(super) struct Step {
    pub(super) members: Vec<Member>,
    pub(super) best: Option<Trial>,
}

impl Search<'_> {
    /// Searches from the batch as it was solved, whose solution is `plain`, or
    /// from suspects that were chosen otherwise.
    pub fn run(&self, plain: &Solution, chosen: &[usize]) -> Findings {
        let mut more = false;
        let mut unsolved = None;
        let mut kept: Vec<Group> = Vec::new();
        let mut stage = self.take_in(chosen);
        while let Some(Step { members, best }) = self.step_from(&stage, plain) {
            if stage.suspects.len() == MOST_SUSPECTS {
                more = true;
                break;
            }
            let Some(best) = best else {
                // Linear figures are all there is, and there is nowhere to go on from.
                unsolved = Some(Group {
                    statistic_after: stage.outcome.objective - members[0].ratio,
                    members,
                    before: stage.clone(),
                });
                break;
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
            let last = kept.pop();
            (kept, stage) = self.refined(stage, last, plain);
        }
        kept.extend(unsolved);
        Findings {
            suspects: kept,
            explained: (!stage.suspects.is_empty()).then_some(stage),
            more,
        }
    }

    /// The batch with all of these in; those that do not solve stay out.
    pub(super) fn take_in(&self, chosen: &[usize]) -> Trial {
        let mut stage = self.nothing.clone();
        for &suspect in chosen.iter().take(MOST_SUSPECTS) {
            if let Some(next) = stage.with(self.base, suspect, 0.0) {
                stage = next.settled(self.base);
            }
        }
        stage
    }

    /// The step from a stage; `plain` is the solution without any suspect in.
    pub(super) fn step_from(&self, stage: &Trial, plain: &Solution) -> Option<Step> {
        if stage.suspects.is_empty() {
            self.step(stage, plain)
        } else {
            self.step(stage, &stage.view(self.base, self.test).solution())
        }
    }

    /// What is spoken for most strongly, with the suspects of `stage` in;
    /// `None` where nothing stands above the critical value.
    fn step(&self, stage: &Trial, solution: &Solution) -> Option<Step> {
        let critical = self.test.critical_value.powi(2);
        let scores = self.scores(stage, solution);
        let leads = |h: usize| testable(solution, &self.base.hypotheses()[h]).is_ok();
        if !scores
            .iter()
            .any(|&(h, _, ratio)| ratio > critical && leads(h))
        {
            return None;
        }
        let (_, _, largest) = *scores.first()?;
        let reach = self.test.group_distance + MARGIN + MARGIN_OF_RATIO * largest;
        let within = scores
            .iter()
            .filter(|&&(_, _, ratio)| ratio >= largest - reach);
        let mut best: Option<Trial> = None;
        let mut members = Vec::new();
        for (nth, &(hypothesis, evidence, ratio)) in within.enumerate() {
            let linear = Member {
                hypothesis,
                size: evidence.size,
                sigma: evidence.sigma,
                ratio,
                linear_ratio: ratio,
                solved: false,
                leads: leads(hypothesis),
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
            members.push(member);
            let objective = trial.outcome.objective;
            let lower = |best: &Trial| objective < best.outcome.objective * (1.0 - EQUAL);
            if member.leads && best.as_ref().is_none_or(lower) {
                best = Some(trial);
            }
        }
        let best = best.map(|best| best.settled(self.base));
        let lead = self.rank(&mut members, best.as_ref())?;
        (lead.ratio > critical).then_some(Step { members, best })
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

    /// The best first, which is answered, and only what lies within the group
    /// distance of it; `None` where none can lead.
    fn rank(&self, members: &mut Vec<Member>, best: Option<&Trial>) -> Option<Member> {
        let first = best.and_then(|trial| trial.suspects.last().copied());
        let leads = |member: &Member| match first {
            Some(first) => member.hypothesis == first,
            None => member.leads,
        };
        let lead = members.remove(members.iter().position(leads)?);
        // What linear theory errs by for the best it errs by for those like it.
        let error = lead.ratio - lead.linear_ratio;
        for member in members.iter_mut().filter(|member| !member.solved) {
            member.ratio += error;
        }
        members.retain(|member| member.ratio >= lead.ratio - self.test.group_distance);
        // Stable: what is equal but for rounding stays in the order it has.
        let whole = |member: &Member| (member.ratio / (EQUAL * lead.ratio)).round();
        members.sort_by(|a, b| {
            whole(b)
                .total_cmp(&whole(a))
                .then(a.hypothesis.cmp(&b.hypothesis))
        });
        members.insert(0, lead);
        Some(lead)
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

    pub(super) fn reading(&self, hypothesis: usize) -> Option<Measured> {
        let observation = self.base.hypotheses()[hypothesis].observation();
        observation.and_then(|i| self.readings[i])
    }
}
