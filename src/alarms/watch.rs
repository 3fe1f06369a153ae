//! Everything that is watched of one plant.

mod looking;

use super::accusation::{Accusation, Closing, NotClosed};
use super::alarm::{Act, Alarm, AlarmKind, Event, Figures, State, Tally};
use super::transitions::Refused;
use super::words::Key;
use crate::report::Hypothesis;
use serde::{Deserialize, Serialize};
use std::collections::BTreeSet;
use time::OffsetDateTime;

/// Alarms that are normal and still remembered, the newest.
pub const KEPT_NORMAL: usize = 200;

/// Alarms of one plant, and what may become one.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Watch {
    plant: String,
    /// By number.
    alarms: Vec<Alarm>,
    candidates: Vec<Candidate>,
    /// Open accusations of the alarms above.
    accusations: Vec<Accusation>,
    /// Those that have changed since they were last asked for.
    #[serde(default, skip_serializing_if = "BTreeSet::is_empty")]
    changed: BTreeSet<u64>,
    /// End of the period of the newest batch that counted.
    #[serde(with = "time::serde::rfc3339::option")]
    newest: Option<OffsetDateTime>,
    alarms_made: u64,
    accusations_made: u64,
}

/// Something over the critical value that is no alarm yet.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
struct Candidate {
    key: Key,
    title: String,
    kind: AlarmKind,
    members: Vec<Hypothesis>,
    over: u32,
    #[serde(with = "time::serde::rfc3339")]
    since: OffsetDateTime,
    last: Figures,
}

impl Watch {
    /// Nothing has been looked at.
    pub fn new(plant: &str) -> Self {
        Watch {
            plant: plant.to_owned(),
            alarms: Vec::new(),
            candidates: Vec::new(),
            accusations: Vec::new(),
            changed: BTreeSet::new(),
            newest: None,
            alarms_made: 0,
            accusations_made: 0,
        }
    }

    /// Every alarm, by number; of those that are normal the newest
    /// [`KEPT_NORMAL`].
    pub fn alarms(&self) -> &[Alarm] {
        &self.alarms
    }

    /// One alarm.
    pub fn alarm(&self, id: u64) -> Option<&Alarm> {
        self.alarms.iter().find(|alarm| alarm.id == id)
    }

    /// End of the period of the newest batch that counted.
    pub fn newest(&self) -> Option<OffsetDateTime> {
        self.newest
    }

    /// When the next shelving ends: [`Watch::pass_time`] has nothing to do before.
    pub fn next_time(&self) -> Option<OffsetDateTime> {
        let shelved = self.alarms.iter().filter_map(|a| a.shelved.as_ref());
        shelved.map(|shelving| shelving.until).min()
    }

    /// Ends the shelvings whose time is up; to be called before a person's act
    /// too.
    pub fn pass_time(&mut self, now: OffsetDateTime) -> Vec<Event> {
        let mut events: Vec<Event> = self
            .alarms
            .iter_mut()
            .filter_map(|alarm| alarm.pass_time(now))
            .collect();
        events.sort_by_key(|event| event.at);
        for event in &events {
            self.rest(event.alarm.id);
        }
        self.forget();
        events
    }

    /// Somebody knows of an alarm.
    ///
    /// # Errors
    ///
    /// Where its state does not allow it: every act of a person is refused so,
    /// and then nothing changes.
    pub fn acknowledge(&mut self, id: u64, act: Act) -> Result<Event, Refused> {
        self.act(id, |alarm| alarm.acknowledge(act))
    }

    /// Silences an alarm until a time.
    ///
    /// # Errors
    ///
    /// As [`Watch::acknowledge`], and where the time is not ahead.
    pub fn shelve(&mut self, id: u64, until: OffsetDateTime, act: Act) -> Result<Event, Refused> {
        self.act(id, |alarm| alarm.shelve(until, act))
    }

    /// Ends the silence before its time.
    ///
    /// # Errors
    ///
    /// As [`Watch::acknowledge`].
    pub fn unshelve(&mut self, id: u64, act: Act) -> Result<Event, Refused> {
        self.act(id, |alarm| alarm.unshelve(act))
    }

    /// Takes an alarm out of service.
    ///
    /// # Errors
    ///
    /// As [`Watch::acknowledge`], and where no reason is given.
    pub fn remove_from_service(
        &mut self,
        id: u64,
        reason: &str,
        act: Act,
    ) -> Result<Event, Refused> {
        self.act(id, |alarm| alarm.remove_from_service(reason, act))
    }

    /// Puts an alarm back into service.
    ///
    /// # Errors
    ///
    /// As [`Watch::acknowledge`].
    pub fn return_to_service(&mut self, id: u64, act: Act) -> Result<Event, Refused> {
        self.act(id, |alarm| alarm.return_to_service(act))
    }

    /// The accusations that were opened or went on since this was last asked,
    /// by number: to be stored with the watch.
    pub fn changed_accusations(&mut self) -> Vec<Accusation> {
        let changed = std::mem::take(&mut self.changed);
        let accusations = self.accusations.iter();
        let accusations = accusations.filter(|accusation| changed.contains(&accusation.id));
        let accusations = accusations.cloned().collect();
        self.forget_accusations();
        accusations
    }

    /// Closes an accusation, which is then for the caller to store.
    ///
    /// # Errors
    ///
    /// As [`Accusation::close`]; then nothing changes.
    pub fn close(
        &mut self,
        accusation: &Accusation,
        closing: Closing,
    ) -> Result<Accusation, NotClosed> {
        let id = accusation.id;
        let followed = self.accusations.iter().find(|a| a.id == id);
        let closed = followed.unwrap_or(accusation).close(closing)?;
        self.accusations.retain(|a| a.id != id);
        self.changed.remove(&id);
        Ok(closed)
    }

    fn act(
        &mut self,
        id: u64,
        act: impl FnOnce(&mut Alarm) -> Result<Event, Refused>,
    ) -> Result<Event, Refused> {
        let alarm = self.alarm(id).ok_or(Refused::NoAlarm(id))?;
        let was_live = alarm.is_live();
        let mut others = self.alarms.iter().filter(|other| other.is_live());
        // A suspect's alarm may have come to the name of one that is over.
        if let Some(other) = others.find(|other| !was_live && other.key == alarm.key) {
            let other = other.id;
            return Err(Refused::Succeeded { id, other });
        }
        let alarm = self.alarms.iter_mut().find(|alarm| alarm.id == id);
        let alarm = alarm.ok_or(Refused::NoAlarm(id))?;
        let mut event = act(alarm)?;
        if !was_live {
            self.wake(id);
        }
        self.rest(id);
        // Counts may have moved.
        if let Some(alarm) = self.alarm(id) {
            event.alarm = alarm.clone();
        }
        self.forget();
        Ok(event)
    }

    /// An alarm that was normal counts for itself again.
    fn wake(&mut self, id: u64) {
        let Some(alarm) = self.alarms.iter_mut().find(|alarm| alarm.id == id) else {
            return;
        };
        let same = |candidate: &Candidate| candidate.key == alarm.key;
        if let Some(at) = self.candidates.iter().position(same) {
            let candidate = self.candidates.remove(at);
            alarm.members = candidate.members;
            alarm.last = candidate.last;
            alarm.tally = Tally {
                over: candidate.over,
                below: 0,
                since: Some(candidate.since),
            };
        }
    }

    /// An alarm that has become normal no longer counts; what it has counted
    /// goes on as a candidate.
    fn rest(&mut self, id: u64) {
        let mut alarms = self.alarms.iter_mut();
        let Some(alarm) = alarms.find(|a| a.id == id && a.state == State::Normal) else {
            return;
        };
        let tally = std::mem::take(&mut alarm.tally);
        if let (Some(since), 1..) = (tally.since, tally.over) {
            self.candidates.push(Candidate {
                key: alarm.key.clone(),
                title: alarm.title.clone(),
                kind: alarm.kind,
                members: alarm.members.clone(),
                over: tally.over,
                since,
                last: alarm.last.clone(),
            });
        }
    }

    /// Forgets the oldest of too many alarms that are normal.
    fn forget(&mut self) {
        let normal = self.alarms.iter().filter(|alarm| !alarm.is_live());
        let mut normal: Vec<_> = normal.map(|alarm| (alarm.returned, alarm.id)).collect();
        if normal.len() <= KEPT_NORMAL {
            return;
        }
        normal.sort_unstable();
        normal.truncate(normal.len() - KEPT_NORMAL);
        let is_forgotten = |id: u64| normal.iter().any(|(_, forgotten)| *forgotten == id);
        self.alarms.retain(|alarm| !is_forgotten(alarm.id));
        self.forget_accusations();
    }

    /// Forgets the accusations of forgotten alarms, once they have been told of.
    fn forget_accusations(&mut self) {
        let (alarms, changed) = (&self.alarms, &self.changed);
        self.accusations.retain(|accusation| {
            changed.contains(&accusation.id) || alarms.iter().any(|a| a.id == accusation.alarm)
        });
    }
}
