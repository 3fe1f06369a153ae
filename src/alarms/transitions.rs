//! The transitions of an alarm: by its condition, by people, by time.
//!
//! | state | condition comes | condition goes | acknowledged |
//! |---|---|---|---|
//! | normal | active-unacknowledged | | |
//! | active-unacknowledged | | returned-unacknowledged | active-acknowledged |
//! | active-acknowledged | | normal | |
//! | returned-unacknowledged | active-unacknowledged | | normal |
//!
//! From each of these it can be shelved or removed from service; shelved, it can
//! be removed from service too. The condition is followed all the while and says
//! where it comes back to: active where it stands (acknowledged where it was
//! acknowledged and has stood ever since), normal where it does not. Its return
//! meanwhile needs no acknowledgement, because somebody dealt with it.

use super::alarm::{Act, Alarm, Event, EventKind, OutOfService, Shelving, State, Tally};
use super::sight::Stand;
use crate::plant::AlarmSettings;
use serde::{Deserialize, Serialize};
use std::fmt;
use time::OffsetDateTime;
use utoipa::ToSchema;

/// What a person can do to an alarm.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, Serialize, Deserialize, ToSchema)]
#[serde(rename_all = "kebab-case")]
pub enum Action {
    /// Say that they know of it.
    Acknowledge,
    /// Silence it until a time.
    Shelve,
    /// End the silence.
    Unshelve,
    /// Take it out of service, with a reason.
    RemoveFromService,
    /// Put it back.
    ReturnToService,
}

/// Why something was not done to an alarm.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
pub enum Refused {
    /// There is no such alarm, or it has been normal for so long that it was
    /// forgotten.
    #[error("there is no alarm {0}")]
    NoAlarm(u64),
    /// Its state does not allow it.
    #[error("alarm {id} is {}: it cannot {action}; it can {}", state.word(), listed(state.allows()))]
    State {
        /// Alarm.
        id: u64,
        /// State.
        state: State,
        /// What was asked for.
        action: Action,
    },
    /// It is a memory, and another alarm is about the same now.
    #[error("alarm {id} is over, and alarm {other} is about the same now: turn to that one")]
    Succeeded {
        /// Alarm.
        id: u64,
        /// The other.
        other: u64,
    },
    /// The end of a shelving is not ahead.
    #[error("the shelving would end at {until}, which is not ahead: give a later time")]
    Over {
        /// The end.
        until: OffsetDateTime,
    },
    /// Nobody's name is given.
    #[error("no name is given: say who does it")]
    Nameless,
    /// No reason is given.
    #[error("no reason is given: say why the alarm is taken out of service")]
    NoReason,
}

impl State {
    /// What a person can do in this state.
    pub fn allows(self) -> &'static [Action] {
        use Action::{Acknowledge, RemoveFromService, ReturnToService, Shelve, Unshelve};
        match self {
            State::ActiveUnacknowledged | State::ReturnedUnacknowledged => {
                &[Acknowledge, Shelve, RemoveFromService]
            }
            State::Normal | State::ActiveAcknowledged => &[Shelve, RemoveFromService],
            State::Shelved => &[Unshelve, RemoveFromService],
            State::OutOfService => &[ReturnToService],
        }
    }
}

impl fmt::Display for Action {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(match self {
            Action::Acknowledge => "be acknowledged",
            Action::Shelve => "be shelved",
            Action::Unshelve => "be unshelved",
            Action::RemoveFromService => "be removed from service",
            Action::ReturnToService => "be returned to service",
        })
    }
}

fn listed(actions: &[Action]) -> String {
    let words: Vec<String> = actions.iter().map(Action::to_string).collect();
    words.join(" or ")
}

/// By its condition.
impl Alarm {
    /// Counts a batch, and says what there is to tell.
    pub(super) fn step(
        &mut self,
        stand: Stand,
        settings: &AlarmSettings,
        now: OffsetDateTime,
    ) -> Option<EventKind> {
        match stand {
            Stand::Over(figures) => {
                let since = *self.tally.since.get_or_insert(figures.end);
                self.tally.over = self.tally.over.saturating_add(1);
                self.tally.below = 0;
                self.last = figures;
                if self.standing {
                    self.batches = self.batches.saturating_add(1);
                    return None;
                }
                (self.tally.over >= settings.raise_after).then(|| self.rise(since, now))?
            }
            Stand::Between => None,
            Stand::Below => {
                self.tally.over = 0;
                self.tally.since = None;
                self.tally.below = self.tally.below.saturating_add(1);
                let is_over = self.standing && self.tally.below >= settings.clear_after;
                is_over.then(|| self.fall(now))?
            }
        }
    }

    /// Its condition has come; `tally` and `last` are those of the batch with
    /// which it came.
    pub(super) fn rise(&mut self, since: OffsetDateTime, now: OffsetDateTime) -> Option<EventKind> {
        self.standing = true;
        self.since = since;
        self.raised = now;
        self.returned = None;
        self.acknowledged = None;
        self.accusation = None;
        self.batches = self.tally.over;
        self.raises = self.raises.saturating_add(1);
        if self.state.is_suppressed() {
            return None;
        }
        self.state = State::ActiveUnacknowledged;
        Some(EventKind::Raised)
    }

    fn fall(&mut self, now: OffsetDateTime) -> Option<EventKind> {
        self.standing = false;
        self.returned = Some(now);
        self.tally = Tally::default();
        if self.state.is_suppressed() {
            return None;
        }
        self.state = match self.acknowledged {
            Some(_) => State::Normal,
            None => State::ReturnedUnacknowledged,
        };
        Some(EventKind::Returned)
    }

    /// Where it comes back to from a shelf or from outside service.
    fn come_back(&mut self) {
        self.shelved = None;
        self.out_of_service = None;
        self.state = match (self.standing, &self.acknowledged) {
            (true, Some(_)) => State::ActiveAcknowledged,
            (true, None) => State::ActiveUnacknowledged,
            (false, _) => State::Normal,
        };
    }
}

/// By people and time.
impl Alarm {
    pub(super) fn acknowledge(&mut self, act: Act) -> Result<Event, Refused> {
        self.check(Action::Acknowledge, &act)?;
        self.state = match self.state {
            State::ActiveUnacknowledged => State::ActiveAcknowledged,
            _ => State::Normal,
        };
        self.acknowledged = Some(act.clone());
        Ok(self.done(EventKind::Acknowledged, act))
    }

    pub(super) fn shelve(&mut self, until: OffsetDateTime, act: Act) -> Result<Event, Refused> {
        self.check(Action::Shelve, &act)?;
        if until <= act.at {
            return Err(Refused::Over { until });
        }
        self.state = State::Shelved;
        self.shelved = Some(Shelving {
            until,
            act: act.clone(),
        });
        Ok(self.done(EventKind::Shelved, act))
    }

    pub(super) fn unshelve(&mut self, act: Act) -> Result<Event, Refused> {
        self.check(Action::Unshelve, &act)?;
        self.come_back();
        Ok(self.done(EventKind::Unshelved, act))
    }

    pub(super) fn remove_from_service(&mut self, reason: &str, act: Act) -> Result<Event, Refused> {
        self.check(Action::RemoveFromService, &act)?;
        if reason.trim().is_empty() {
            return Err(Refused::NoReason);
        }
        self.shelved = None;
        self.state = State::OutOfService;
        self.out_of_service = Some(OutOfService {
            reason: reason.to_owned(),
            by: act.by.clone(),
            at: act.at,
        });
        Ok(self.done(EventKind::RemovedFromService, act))
    }

    pub(super) fn return_to_service(&mut self, act: Act) -> Result<Event, Refused> {
        self.check(Action::ReturnToService, &act)?;
        self.come_back();
        Ok(self.done(EventKind::ReturnedToService, act))
    }

    /// Ends a shelving whose time is up, at that time.
    pub(super) fn pass_time(&mut self, now: OffsetDateTime) -> Option<Event> {
        let until = self.shelved.as_ref()?.until;
        if now < until {
            return None;
        }
        self.come_back();
        Some(self.event(EventKind::Unshelved, until))
    }

    fn check(&self, action: Action, act: &Act) -> Result<(), Refused> {
        if act.by.trim().is_empty() {
            return Err(Refused::Nameless);
        }
        if !self.state.allows().contains(&action) {
            return Err(Refused::State {
                id: self.id,
                state: self.state,
                action,
            });
        }
        Ok(())
    }

    fn done(&self, kind: EventKind, act: Act) -> Event {
        Event {
            by: Some(act.by),
            note: act.note,
            ..self.event(kind, act.at)
        }
    }
}
