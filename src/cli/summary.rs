//! What a day of reports comes to, for people.

use super::found::Found;
use super::table::{Table, decimals, fixed, number};
use super::text::{class_name, minute, verdict_name};
use super::{CAUTION, DECIDE};
use crate::report::{Assessment, Class, Report, Verdict};
use std::collections::BTreeMap;
use std::fmt;
use time::{Duration, OffsetDateTime};

/// Tags and quantities that are listed at most.
const LISTED: usize = 10;

/// The tag's largest disagreement in a day.
struct Disagreement {
    standardised: f64,
    adjustment: Option<f64>,
    unit: String,
    time: OffsetDateTime,
    /// Batches in which it was beyond the critical value, and the first.
    beyond: usize,
    first: Option<OffsetDateTime>,
}

/// A summary of reports in the order of their time.
pub(super) struct Summary<'r> {
    reports: &'r [Report],
    assessment: &'r Assessment,
}

impl<'r> Summary<'r> {
    pub fn new(reports: &'r [Report], assessment: &'r Assessment) -> Self {
        Summary {
            reports,
            assessment,
        }
    }

    fn disagreements(&self) -> Vec<(&'r str, Disagreement)> {
        let mut worst: BTreeMap<&str, Disagreement> = BTreeMap::new();
        for report in self.reports {
            let critical = report.single_test.as_ref().map(|test| test.critical_value);
            for (name, tag) in report.tags.iter().chain(&report.assumptions) {
                let Some(standardised) = tag.standardised_adjustment else {
                    continue;
                };
                let is_beyond = critical.is_some_and(|critical| standardised.abs() > critical);
                let entry = worst.entry(name).or_insert_with(|| Disagreement {
                    standardised: 0.0,
                    adjustment: None,
                    unit: tag.unit.clone(),
                    time: report.start,
                    beyond: 0,
                    first: None,
                });
                if is_beyond {
                    entry.beyond += 1;
                    entry.first.get_or_insert(report.start);
                }
                if standardised.abs() > entry.standardised.abs() {
                    entry.standardised = standardised;
                    entry.adjustment = tag.adjustment;
                    entry.time = report.start;
                }
            }
        }
        let mut worst: Vec<_> = worst.into_iter().collect();
        worst.sort_by(|a, b| b.1.standardised.abs().total_cmp(&a.1.standardised.abs()));
        worst
    }

    fn verdicts(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let all = [
            Verdict::Consistent,
            Verdict::Inconsistent,
            Verdict::NotRedundant,
            Verdict::NotConverged,
            Verdict::NotRunning,
        ];
        let count = |reports: &[&Report], verdict| {
            reports
                .iter()
                .filter(|report| report.verdict == verdict)
                .count()
                .to_string()
        };
        let mut hours: BTreeMap<OffsetDateTime, Vec<&Report>> = BTreeMap::new();
        for report in self.reports {
            let into_hour = report.start.unix_timestamp().rem_euclid(3600);
            let hour = report.start - Duration::seconds(into_hour);
            let hour = hour.replace_nanosecond(0).unwrap_or(hour);
            hours.entry(hour).or_default().push(report);
        }
        let mut table = Table::new(&[
            "<hour (UTC)",
            "consistent",
            "inconsistent",
            "not redundant",
            "not converged",
            "statistic / degrees of freedom, mean",
        ]);
        let all_reports: Vec<&Report> = self.reports.iter().collect();
        let rows = hours.iter().map(|(hour, reports)| (minute(*hour), reports));
        let total = ("all".to_owned(), &all_reports);
        for (name, reports) in rows.chain([total]) {
            let mut row = vec![name];
            row.extend(all.map(|verdict| count(reports, verdict)));
            row.push(fixed(mean_ratio(reports), 2));
            table.row(row);
        }
        writeln!(f, "\nVerdicts by hour\n{table}")
    }

    fn worst(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let mut table = Table::new(&[
            "<tag or assumption",
            "standardised",
            "<at (UTC)",
            "adjustment",
            "<unit",
            "batches beyond critical",
            "<first",
        ]);
        for (name, worst) in self.disagreements().into_iter().take(LISTED) {
            table.row(vec![
                name.to_owned(),
                format!("{:+.1}", worst.standardised),
                minute(worst.time),
                worst
                    .adjustment
                    .map_or_else(String::new, |a| format!("{a:+.*}", decimals(a.abs()))),
                worst.unit,
                worst.beyond.to_string(),
                worst.first.map_or_else(|| "-".to_owned(), minute),
            ]);
        }
        writeln!(
            f,
            "Largest adjustments of the day, reconciled minus measured\n{table}"
        )
    }

    fn uncertain(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let Some(report) = self
            .reports
            .iter()
            .rev()
            .find(|r| r.verdict != Verdict::NotConverged)
        else {
            return writeln!(f, "No batch converged.\n");
        };
        let mut flows: Vec<(&str, f64, f64, f64)> = Vec::new();
        for (name, stream) in &report.streams {
            let flow = &stream.mass_flow;
            if let (Some(value), Some(uncertainty)) = (flow.value, flow.uncertainty) {
                let relative = 100.0 * uncertainty / value.abs().max(f64::MIN_POSITIVE);
                flows.push((name, value, uncertainty, relative));
            }
        }
        flows.sort_by(|a, b| b.3.total_cmp(&a.3));
        let mut table = Table::new(&["<stream", "kg/s", "±", "± %"]);
        for (name, value, uncertainty, relative) in flows.into_iter().take(LISTED) {
            table.row(vec![
                name.to_owned(),
                number(value),
                number(uncertainty),
                fixed(Some(relative), 1),
            ]);
        }
        writeln!(
            f,
            "Least certain mass flows at {} UTC\n{table}",
            minute(report.start)
        )
    }

    fn unchecked(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        for class in [Class::NotRedundant, Class::HardlyRedundant] {
            let tags = self
                .assessment
                .tags
                .iter()
                .filter(|(_, tag)| tag.class == class);
            let names: Vec<&str> = tags.map(|(name, _)| name.as_str()).collect();
            if !names.is_empty() {
                writeln!(
                    f,
                    "Tags that are {}: {}",
                    class_name(class),
                    names.join(", ")
                )?;
            }
        }
        // Without tags in it nothing could be assessed.
        if self.assessment.unobservable.is_empty() && !self.assessment.tags.is_empty() {
            writeln!(f, "Every quantity is observable.")?;
        }
        for quantity in &self.assessment.unobservable {
            writeln!(
                f,
                "Unobservable: {} of {}: {}",
                quantity.quantity, quantity.of, quantity.why
            )?;
        }
        Ok(())
    }

    /// Remarks of the reports, each once with the number of batches that have it.
    fn remarks(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let mut counts: BTreeMap<&str, usize> = BTreeMap::new();
        for remark in self.reports.iter().flat_map(|report| &report.remarks) {
            *counts.entry(remark).or_default() += 1;
        }
        let mut counts: Vec<_> = counts.into_iter().collect();
        counts.sort_by_key(|(_, count)| std::cmp::Reverse(*count));
        for (remark, count) in counts.iter().take(LISTED) {
            writeln!(f, "Note ({count} batches): {remark}")?;
        }
        Ok(())
    }
}

impl fmt::Display for Summary<'_> {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        self.verdicts(f)?;
        write!(f, "{}", Found::new(self.reports))?;
        self.worst(f)?;
        self.uncertain(f)?;
        self.unchecked(f)?;
        self.remarks(f)?;
        for report in self
            .reports
            .iter()
            .filter(|r| r.verdict == Verdict::NotConverged)
        {
            let reason = report.reason.as_deref().unwrap_or("no reason given");
            writeln!(
                f,
                "{}: {}: {reason}",
                report.batch,
                verdict_name(report.verdict)
            )?;
        }
        writeln!(f, "\n{CAUTION} {DECIDE}\n")
    }
}

/// Mean of the statistic over its degrees of freedom: near one where the
/// uncertainties of the plant file are true.
fn mean_ratio(reports: &[&Report]) -> Option<f64> {
    let ratios: Vec<f64> = reports
        .iter()
        .filter_map(|report| report.global_test.as_ref())
        .filter(|test| test.degrees_of_freedom > 0)
        .map(|test| test.statistic / test.degrees_of_freedom as f64)
        .collect();
    (!ratios.is_empty()).then(|| ratios.iter().sum::<f64>() / ratios.len() as f64)
}
