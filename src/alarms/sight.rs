//! What a report says of the things that are watched.
//!
//! A batch counts where it has a critical value: neither `not-converged` nor
//! `not-redundant`. With the critical value c and the dead band d a statistic is
//! over where it exceeds c, below where it is less than (1 - d) c, and counts
//! neither way between them. What is out of service counts neither way: an alarm
//! about it stands as it stood. What a report names without a statistic (a tag that
//! is missing or that nothing checks) counts neither way either; what it does not
//! name is no longer in the plant file, and is below. A suspect that the report
//! does not name is below where all its members are: a leak, a loss or a tag that
//! is hardly checked has no statistic of its own and is below then.

use super::alarm::{AlarmKind, Figures};
use super::words::{self, Key};
use crate::report::{
    Accused, Cause, Class, EquipmentReport, Hypothesis, Imbalance, Report, TagReport, Verdict,
};
use indexmap::IndexMap;
use std::collections::HashSet;

/// How one thing stands in one batch.
#[derive(Clone, Debug, PartialEq)]
pub(super) enum Stand {
    /// Over the critical value.
    Over(Figures),
    /// Neither here nor there, or nothing is known.
    Between,
    /// Below the dead band.
    Below,
}

/// A report that counts.
pub(super) struct Sight<'r> {
    report: &'r Report,
    critical: f64,
    low: f64,
    /// Reconciled with the suspects taken out; `None` where that is not known.
    rest: Option<Rest<'r>>,
    accused: HashSet<&'r Hypothesis>,
}

/// A suspect of a report.
#[derive(Clone, Debug)]
pub(super) struct Sighted<'r> {
    /// Of its likeliest member.
    pub key: Key,
    pub title: String,
    /// The likeliest first; never empty.
    pub group: &'r [Accused],
    pub figures: Figures,
}

/// A balance, tag or assumption of a report.
#[derive(Clone, Debug)]
pub(super) struct Single {
    pub key: Key,
    pub title: String,
    pub kind: AlarmKind,
    pub stand: Stand,
}

/// What is judged once the suspects are out of the way.
#[derive(Clone, Copy)]
struct Rest<'r> {
    tags: &'r IndexMap<String, TagReport>,
    assumptions: &'r IndexMap<String, TagReport>,
    equipment: &'r IndexMap<String, EquipmentReport>,
}

impl Sighted<'_> {
    /// Whether the member of this key is in the group.
    pub fn has(&self, key: &Key) -> bool {
        let mut group = self.group.iter();
        group.any(|accused| Key::suspect(&accused.hypothesis) == *key)
    }
}

impl<'r> Sight<'r> {
    /// A report, if it counts.
    pub fn of(report: &'r Report, dead_band: f64) -> Option<Self> {
        if matches!(
            report.verdict,
            Verdict::NotConverged | Verdict::NotRedundant | Verdict::NotRunning
        ) {
            return None;
        }
        let critical = report.single_test.as_ref()?.critical_value;
        let rest = match &report.after_suspects {
            Some(after) => Some(Rest {
                tags: &after.tags,
                assumptions: &after.assumptions,
                equipment: &after.equipment,
            }),
            None if report.suspects.is_empty() => Some(Rest {
                tags: &report.tags,
                assumptions: &report.assumptions,
                equipment: &report.equipment,
            }),
            None => None,
        };
        let members = report.suspects.iter().flat_map(|s| &s.group);
        Some(Sight {
            report,
            critical,
            low: (1.0 - dead_band) * critical,
            rest,
            accused: members.map(|m| &m.hypothesis).collect(),
        })
    }

    /// The report.
    pub fn report(&self) -> &'r Report {
        self.report
    }

    /// Its suspects, in its order; each likeliest member once.
    pub fn suspects(&self) -> Vec<Sighted<'r>> {
        let mut seen = HashSet::new();
        let groups = self.report.suspects.iter().map(|s| s.group.as_slice());
        let suspects = groups.filter_map(|group| {
            let first = group.first()?;
            seen.insert(&first.hypothesis).then(|| Sighted {
                key: Key::suspect(&first.hypothesis),
                title: words::suspect_title(group.iter().map(|accused| &accused.hypothesis)),
                group,
                figures: Figures {
                    value: Some(first.size),
                    uncertainty: Some(first.uncertainty),
                    unit: first.unit.clone(),
                    ..self.figures(first.ratio.max(0.0).sqrt())
                },
            })
        });
        suspects.collect()
    }

    /// Whether a suspect of this report has a member in common with these.
    pub fn accuses(&self, members: &[Hypothesis]) -> bool {
        members.iter().any(|member| self.accused.contains(member))
    }

    /// How a suspect stands that is none of this report's.
    pub fn absent(&self, members: &[Hypothesis]) -> Stand {
        let out = self.out_of_service();
        let is_between = |member: &Hypothesis| {
            if out.contains(&&member.of) {
                return true;
            }
            let adjustment = match member.cause {
                Cause::Bias => self.rest.map(|rest| rest.tags.get(&member.of)),
                Cause::Departure => self.rest.map(|rest| rest.assumptions.get(&member.of)),
                _ => return false,
            };
            match adjustment {
                // It never shows anything, and would hold the others up for ever.
                Some(Some(tag)) if tag.class == Class::HardlyRedundant => false,
                Some(Some(tag)) => !tag
                    .standardised_adjustment
                    .is_some_and(|s| s.abs() < self.low),
                Some(None) => false,
                None => true,
            }
        };
        if self.accuses(members) || members.iter().any(is_between) {
            Stand::Between
        } else {
            Stand::Below
        }
    }

    /// Streams and equipment that are out of service, or have no balance while
    /// others are.
    pub fn out_of_service(&self) -> Vec<&'r String> {
        let Some(line_up) = &self.report.line_up else {
            return Vec::new();
        };
        let equipment = line_up.equipment_out.iter().chain(&line_up.pipes);
        line_up.streams_out.iter().chain(equipment).collect()
    }

    /// Every balance, tag and assumption, in the report's order.
    pub fn singles(&self) -> Vec<Single> {
        let equipment = self.report.equipment.iter();
        let balances = equipment.flat_map(|(name, equipment)| {
            let mass = equipment.imbalance.mass.keys();
            let mass = mass.map(|side| self.mass(name, side));
            let energy = equipment.imbalance.energy.as_ref();
            mass.chain(energy.map(|_| self.energy(name)))
        });
        let tags = self.report.tags.keys().map(|name| {
            let tag = self.rest.and_then(|rest| rest.tags.get(name));
            self.adjustment(name, Cause::Bias, tag)
        });
        let assumptions = self.report.assumptions.keys().map(|name| {
            let assumption = self.rest.and_then(|rest| rest.assumptions.get(name));
            self.adjustment(name, Cause::Departure, assumption)
        });
        balances.chain(tags).chain(assumptions).collect()
    }

    fn mass(&self, equipment: &str, side: &str) -> Single {
        let balance = format!("mass {side}");
        let is_blamed = self.blames(equipment, |blamed| match blamed.cause {
            Cause::Leak => blamed.side.as_deref() == Some(side),
            Cause::LeakBetween => true,
            _ => false,
        });
        let rest = self.rest.and_then(|rest| rest.equipment.get(equipment));
        let imbalance = rest.and_then(|rest| rest.imbalance.mass.get(side));
        self.balance(equipment, &balance, is_blamed, imbalance)
    }

    fn energy(&self, equipment: &str) -> Single {
        let is_blamed = self.blames(equipment, |blamed| {
            matches!(blamed.cause, Cause::Leak | Cause::HeatLoss)
        });
        let rest = self.rest.and_then(|rest| rest.equipment.get(equipment));
        let imbalance = rest.and_then(|rest| rest.imbalance.energy.as_ref());
        self.balance(equipment, "energy", is_blamed, imbalance)
    }

    fn balance(
        &self,
        equipment: &str,
        balance: &str,
        is_blamed: bool,
        imbalance: Option<&Imbalance>,
    ) -> Single {
        let stand = match imbalance {
            _ if is_blamed => Stand::Below,
            Some(imbalance) => self.judge(imbalance.standardised, |figures| Figures {
                value: imbalance.value,
                uncertainty: imbalance.uncertainty,
                unit: imbalance.unit.clone(),
                ..figures
            }),
            None => Stand::Between,
        };
        Single {
            key: Key::imbalance(equipment, balance),
            title: words::imbalance_title(equipment, balance),
            kind: AlarmKind::Imbalance,
            stand,
        }
    }

    fn adjustment(&self, name: &str, cause: Cause, tag: Option<&TagReport>) -> Single {
        let is_blamed = self.blames(name, |blamed| blamed.cause == cause);
        let stand = match tag {
            _ if is_blamed => Stand::Below,
            Some(tag) => self.judge(tag.standardised_adjustment, |figures| Figures {
                value: tag.adjustment,
                unit: tag.unit.clone(),
                ..figures
            }),
            None => Stand::Between,
        };
        Single {
            key: Key::adjustment(name),
            title: words::adjustment_title(name),
            kind: AlarmKind::Adjustment,
            stand,
        }
    }

    /// Whether a suspect's group has such a member about this.
    fn blames(&self, of: &str, is_it: impl Fn(&Hypothesis) -> bool) -> bool {
        let mut accused = self.accused.iter();
        accused.any(|blamed| blamed.of == of && is_it(blamed))
    }

    fn judge(&self, standardised: Option<f64>, fill: impl FnOnce(Figures) -> Figures) -> Stand {
        match standardised.map(f64::abs) {
            Some(s) if s > self.critical => Stand::Over(fill(self.figures(s))),
            Some(s) if s < self.low => Stand::Below,
            _ => Stand::Between,
        }
    }

    fn figures(&self, statistic: f64) -> Figures {
        Figures {
            batch: self.report.batch.clone(),
            end: self.report.end,
            value: None,
            uncertainty: None,
            unit: String::new(),
            statistic,
            critical_value: self.critical,
        }
    }
}
