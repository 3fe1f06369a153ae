//! Looking at a batch: what is over the critical value is counted, raised and
//! accused.

use super::{Candidate, Watch};
use crate::alarms::accusation::Accusation;
use crate::alarms::alarm::{Alarm, AlarmKind, Event, EventKind, State, Tally};
use crate::alarms::matching::{Known, claims};
use crate::alarms::sight::{Sight, Sighted, Single, Stand};
use crate::alarms::words::Key;
use crate::plant::AlarmSettings;
use crate::report::{Accused, Hypothesis, Report};
use std::collections::HashMap;
use time::OffsetDateTime;

/// The batch at hand, and what it has come to so far.
struct Look<'a, 'r> {
    settings: &'a AlarmSettings,
    now: OffsetDateTime,
    sight: Sight<'r>,
    suspects: Vec<Sighted<'r>>,
    /// For each suspect what it belongs to: the place of an alarm, or the
    /// number of alarms and the place of a candidate.
    claims: Vec<Option<usize>>,
    events: Vec<Event>,
}

impl Watch {
    /// Looks at the report of a batch. One whose period does not end after the
    /// newest so far came late or again, and is not looked at; one that is not
    /// converged or not redundant counts neither way.
    pub fn look(
        &mut self,
        report: &Report,
        settings: &AlarmSettings,
        now: OffsetDateTime,
    ) -> Vec<Event> {
        let events = self.pass_time(now);
        let Some(sight) = Sight::of(report, settings.dead_band) else {
            return events;
        };
        if self.newest.is_some_and(|newest| report.end <= newest) {
            return events;
        }
        self.newest = Some(report.end);
        for alarm in &mut self.alarms {
            alarm.priority = alarm.kind.priority(&settings.priorities);
        }
        let suspects = sight.suspects();
        let mut look = Look {
            settings,
            now,
            claims: self.claims(&suspects),
            sight,
            suspects,
            events,
        };
        self.look_at_suspects(&mut look);
        self.look_at_singles(&mut look);
        self.forget();
        look.events
    }

    fn claims(&self, suspects: &[Sighted<'_>]) -> Vec<Option<usize>> {
        let alarms = self.alarms.iter().map(|alarm| Known {
            key: &alarm.key,
            members: &alarm.members,
            is_open: alarm.is_live(),
        });
        let candidates = self.candidates.iter().map(|candidate| Known {
            key: &candidate.key,
            members: &candidate.members,
            is_open: true,
        });
        let alarms: Vec<_> = alarms.collect();
        claims(suspects, &alarms, &candidates.collect::<Vec<_>>())
    }

    fn look_at_suspects(&mut self, look: &mut Look<'_, '_>) {
        let alarms = self.alarms.len();
        for at in 0..alarms {
            let alarm = &mut self.alarms[at];
            if alarm.kind != AlarmKind::Suspect || !alarm.is_live() {
                continue;
            }
            let suspect = look.suspect_of(at);
            let stand = match &suspect {
                Some(suspect) => {
                    alarm.title.clone_from(&suspect.title);
                    alarm.members = hypotheses(suspect.group);
                    // Two members that are nearly equal swap places at every batch:
                    // that is no news.
                    if !suspect.has(&alarm.key) {
                        alarm.key.clone_from(&suspect.key);
                        if !alarm.state.is_suppressed() {
                            look.tell(alarm, Some(EventKind::Renamed));
                        }
                    }
                    Stand::Over(suspect.figures.clone())
                }
                None => look.sight.absent(&alarm.members),
            };
            let kind = alarm.step(stand, look.settings, look.now);
            if let Some(suspect) = &suspect {
                self.accuse(at, suspect.group, 1, look);
            }
            look.tell(&self.alarms[at], kind);
        }
        let candidates = std::mem::take(&mut self.candidates);
        for (at, mut candidate) in candidates.into_iter().enumerate() {
            if candidate.kind != AlarmKind::Suspect {
                self.candidates.push(candidate);
                continue;
            }
            match look.suspect_of(alarms + at) {
                Some(suspect) => {
                    candidate.key = suspect.key;
                    candidate.title = suspect.title;
                    candidate.members = hypotheses(suspect.group);
                    let stand = Stand::Over(suspect.figures);
                    self.advance(candidate, stand, suspect.group, look);
                }
                None => {
                    let stand = look.sight.absent(&candidate.members);
                    self.advance(candidate, stand, &[], look);
                }
            }
        }
        let new = look.suspects.iter().zip(&look.claims);
        let new = new.filter(|(_, claim)| claim.is_none());
        let new: Vec<_> = new.map(|(suspect, _)| suspect.clone()).collect();
        for suspect in new {
            let candidate = Candidate {
                key: suspect.key,
                title: suspect.title,
                kind: AlarmKind::Suspect,
                members: hypotheses(suspect.group),
                over: 0,
                since: suspect.figures.end,
                last: suspect.figures.clone(),
            };
            self.advance(candidate, Stand::Over(suspect.figures), suspect.group, look);
        }
    }

    fn look_at_singles(&mut self, look: &mut Look<'_, '_>) {
        let singles = look.sight.singles();
        let order = singles.iter().map(|single| single.key.clone());
        let order: Vec<Key> = order.collect();
        let singles = singles.into_iter().map(|s| (s.key.clone(), s));
        let mut singles: HashMap<Key, Single> = singles.collect();
        let out = look.sight.out_of_service();
        let mut stand = |key: &Key| match singles.remove(key) {
            Some(single) => single.stand,
            // Nothing is known of it while it is out of service; else it is no
            // longer there.
            None if out.iter().any(|of| key.is_balance_of(of)) => Stand::Between,
            None => Stand::Below,
        };
        for alarm in &mut self.alarms {
            if alarm.kind != AlarmKind::Suspect && alarm.is_live() {
                let kind = alarm.step(stand(&alarm.key), look.settings, look.now);
                look.tell(alarm, kind);
            }
        }
        for candidate in std::mem::take(&mut self.candidates) {
            if candidate.kind == AlarmKind::Suspect {
                self.candidates.push(candidate);
            } else {
                let stand = stand(&candidate.key);
                self.advance(candidate, stand, &[], look);
            }
        }
        for single in order.iter().filter_map(|key| singles.remove(key)) {
            let Stand::Over(figures) = single.stand else {
                continue;
            };
            let candidate = Candidate {
                key: single.key,
                title: single.title,
                kind: single.kind,
                members: Vec::new(),
                over: 0,
                since: figures.end,
                last: figures.clone(),
            };
            self.advance(candidate, Stand::Over(figures), &[], look);
        }
    }

    /// Counts a batch for what is no alarm yet.
    fn advance(
        &mut self,
        mut candidate: Candidate,
        stand: Stand,
        group: &[Accused],
        look: &mut Look<'_, '_>,
    ) {
        match stand {
            Stand::Over(figures) => {
                candidate.over += 1;
                candidate.last = figures;
                if candidate.over < look.settings.raise_after {
                    self.candidates.push(candidate);
                } else {
                    self.raise(candidate, group, look);
                }
            }
            Stand::Between => self.candidates.push(candidate),
            Stand::Below => {}
        }
    }

    /// Raises an alarm, the one that it was before where it is remembered.
    fn raise(&mut self, candidate: Candidate, group: &[Accused], look: &mut Look<'_, '_>) {
        let mut alarms = self.alarms.iter();
        let at = alarms.position(|alarm| !alarm.is_live() && alarm.key == candidate.key);
        let at = at.unwrap_or_else(|| {
            self.alarms_made += 1;
            self.alarms.push(Alarm {
                id: self.alarms_made,
                plant: self.plant.clone(),
                key: candidate.key.clone(),
                kind: candidate.kind,
                title: String::new(),
                priority: candidate.kind.priority(&look.settings.priorities),
                state: State::Normal,
                standing: false,
                members: Vec::new(),
                since: candidate.since,
                raised: look.now,
                returned: None,
                acknowledged: None,
                shelved: None,
                out_of_service: None,
                last: candidate.last.clone(),
                batches: 0,
                raises: 0,
                accusation: None,
                tally: Tally::default(),
            });
            self.alarms.len() - 1
        });
        let alarm = &mut self.alarms[at];
        alarm.title = candidate.title;
        alarm.members = candidate.members;
        alarm.last = candidate.last;
        alarm.tally = Tally {
            over: candidate.over,
            below: 0,
            since: Some(candidate.since),
        };
        let kind = alarm.rise(candidate.since, look.now);
        if alarm.kind == AlarmKind::Suspect {
            self.accuse(at, group, candidate.over, look);
        }
        look.tell(&self.alarms[at], kind);
    }

    /// A suspect stands: its open accusation goes on, or one is opened where the
    /// alarm has been raised and told of.
    fn accuse(&mut self, at: usize, group: &[Accused], batches: u32, look: &Look<'_, '_>) {
        let alarm = &mut self.alarms[at];
        let report: &Report = look.sight.report();
        let mut accusations = self.accusations.iter_mut();
        let id = match accusations.find(|accusation| accusation.alarm == alarm.id) {
            Some(open) => {
                open.goes_on(group, report, batches);
                open.id
            }
            None if !alarm.standing
                || alarm.state.is_suppressed()
                || alarm.accusation.is_some() =>
            {
                return;
            }
            None => {
                self.accusations_made += 1;
                let id = self.accusations_made;
                let opened = Accusation::open(id, alarm, group, report, look.now);
                self.accusations.push(opened);
                id
            }
        };
        if alarm.standing {
            alarm.accusation = Some(id);
        }
        self.changed.insert(id);
    }
}

impl<'r> Look<'_, 'r> {
    fn suspect_of(&self, place: usize) -> Option<Sighted<'r>> {
        let mut pairs = self.suspects.iter().zip(&self.claims);
        let (suspect, _) = pairs.find(|(_, claim)| **claim == Some(place))?;
        Some(suspect.clone())
    }

    fn tell(&mut self, alarm: &Alarm, kind: Option<EventKind>) {
        let event = kind.map(|kind| alarm.event(kind, self.now));
        self.events.extend(event);
    }
}

fn hypotheses(group: &[Accused]) -> Vec<Hypothesis> {
    let members = group.iter();
    members.map(|member| member.hypothesis.clone()).collect()
}
