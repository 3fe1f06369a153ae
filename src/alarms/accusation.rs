//! Accusations: what a suspect's alarm said, and what a person found.

use super::alarm::Alarm;
use crate::report::{Accused, Hypothesis, Report};
use serde::{Deserialize, Serialize};
use time::OffsetDateTime;
use utoipa::ToSchema;

/// A suspect that stood long enough to raise an alarm.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct Accusation {
    /// Number, of its plant.
    pub id: u64,
    /// Plant.
    pub plant: String,
    /// The alarm that it belongs to.
    pub alarm: u64,
    /// The group when it was raised, the likeliest first.
    pub members: Vec<Accused>,
    /// The group in the newest batch in which it stood.
    pub newest: Vec<Accused>,
    /// The batch that raised it.
    pub opened_batch: String,
    /// When it was raised.
    #[serde(with = "time::serde::rfc3339")]
    pub opened: OffsetDateTime,
    /// The newest batch in which it stood.
    pub last_batch: String,
    /// End of that batch's period.
    #[serde(with = "time::serde::rfc3339")]
    pub last: OffsetDateTime,
    /// Batches in which it stood, those that raised it among them.
    pub batches: u32,
    /// What a person found; absent while it is open.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub closing: Option<Closing>,
}

/// What a person found.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct Closing {
    /// What it came to.
    pub outcome: Outcome,
    /// Which member of the group it was.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub cause: Option<Hypothesis>,
    /// What was found, in words: an as-found calibration, an inspection.
    pub found: String,
    /// The size that was found, with the sign and in the unit of the report.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub as_found: Option<AsFound>,
    /// When it was found.
    #[serde(with = "time::serde::rfc3339")]
    pub at: OffsetDateTime,
    /// Who closed it.
    pub by: String,
    /// When it was closed.
    #[serde(with = "time::serde::rfc3339")]
    pub entered: OffsetDateTime,
}

/// What an accusation came to.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, Serialize, Deserialize, ToSchema)]
#[serde(rename_all = "kebab-case")]
pub enum Outcome {
    /// A member of the group was at fault.
    Confirmed,
    /// None of them was.
    Refuted,
    /// It was not found out.
    Unknown,
}

/// A size that was measured.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct AsFound {
    /// Size.
    pub size: f64,
    /// Its uncertainty.
    pub uncertainty: f64,
    /// Unit of both.
    pub unit: String,
}

/// Why an accusation is not closed.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum NotClosed {
    /// It was closed before.
    #[error("accusation {id} was closed by {by} at {at}: a closing is not changed")]
    Already {
        /// Accusation.
        id: u64,
        /// Who closed it.
        by: String,
        /// When.
        at: OffsetDateTime,
    },
    /// It was no member of the group.
    #[error(
        "`{}` is not in the group: name one of its members, or close it as refuted",
        cause.of
    )]
    NotMember {
        /// What was named.
        cause: Box<Hypothesis>,
    },
    /// None of the members was at fault, and one of them is named.
    #[error("`{}` is named and the accusation refuted: leave the cause out, or confirm it", cause.of)]
    RefutedMember {
        /// What was named.
        cause: Box<Hypothesis>,
    },
    /// A size without what it is the size of.
    #[error("a size was found, of one of {members} members: name the cause")]
    WhichMember {
        /// Members of the group.
        members: usize,
    },
    /// The unit is not the report's.
    #[error("the size is in {given:?}: give it in {stated:?}, as the report does")]
    Unit {
        /// The report's.
        stated: String,
        /// What was given.
        given: String,
    },
    /// A size that is no number, or a negative uncertainty.
    #[error("the size that was found needs finite numbers and an uncertainty of 0 or more")]
    Size,
    /// Nobody's name, or nothing in words.
    #[error("{0} is missing: say who closes it and what was found")]
    Missing(&'static str),
}

impl Accusation {
    /// A copy that is closed.
    ///
    /// # Errors
    ///
    /// Where the closing does not fit what was accused, or there is one.
    pub fn close(&self, closing: Closing) -> Result<Accusation, NotClosed> {
        if let Some(before) = &self.closing {
            return Err(NotClosed::Already {
                id: self.id,
                by: before.by.clone(),
                at: before.entered,
            });
        }
        for (text, name) in [(&closing.by, "`by`"), (&closing.found, "`found`")] {
            if text.trim().is_empty() {
                return Err(NotClosed::Missing(name));
            }
        }
        if let Some(cause) = &closing.cause {
            let cause = Box::new(cause.clone());
            if closing.outcome == Outcome::Refuted {
                return Err(NotClosed::RefutedMember { cause });
            }
            if self.stated(&cause).is_none() {
                return Err(NotClosed::NotMember { cause });
            }
        }
        if let Some(as_found) = &closing.as_found {
            self.check_size(as_found, &closing)?;
        }
        Ok(Accusation {
            closing: Some(closing),
            ..self.clone()
        })
    }

    /// What the newest report that names this member said of it.
    pub fn stated(&self, member: &Hypothesis) -> Option<&Accused> {
        let mut groups = self.newest.iter().chain(&self.members);
        groups.find(|accused| accused.hypothesis == *member)
    }

    /// The member that a closing is about: the one it names, or the only one
    /// there is.
    pub(super) fn subject(&self, closing: &Closing) -> Option<&Accused> {
        match (&closing.cause, self.newest.as_slice()) {
            (Some(cause), _) => self.stated(cause),
            (None, [only]) => Some(only),
            (None, _) => None,
        }
    }

    pub(super) fn open(
        id: u64,
        alarm: &Alarm,
        group: &[Accused],
        report: &Report,
        now: OffsetDateTime,
    ) -> Self {
        Accusation {
            id,
            plant: alarm.plant.clone(),
            alarm: alarm.id,
            members: group.to_vec(),
            newest: group.to_vec(),
            opened_batch: report.batch.clone(),
            opened: now,
            last_batch: report.batch.clone(),
            last: report.end,
            batches: alarm.batches,
            closing: None,
        }
    }

    pub(super) fn goes_on(&mut self, group: &[Accused], report: &Report, batches: u32) {
        self.newest = group.to_vec();
        self.last_batch.clone_from(&report.batch);
        self.last = report.end;
        self.batches = self.batches.saturating_add(batches);
    }

    fn check_size(&self, as_found: &AsFound, closing: &Closing) -> Result<(), NotClosed> {
        if !as_found.size.is_finite()
            || !as_found.uncertainty.is_finite()
            || as_found.uncertainty < 0.0
        {
            return Err(NotClosed::Size);
        }
        if closing.outcome != Outcome::Confirmed {
            return Ok(());
        }
        let stated = self.subject(closing).ok_or(NotClosed::WhichMember {
            members: self.newest.len(),
        })?;
        if stated.unit != as_found.unit {
            return Err(NotClosed::Unit {
                stated: stated.unit.clone(),
                given: as_found.unit.clone(),
            });
        }
        Ok(())
    }
}
