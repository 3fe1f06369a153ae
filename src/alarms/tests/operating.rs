//! What people do to alarms, and what time does.

use super::*;
use crate::alarms::{Action, KEPT_NORMAL, Refused};

fn quiet(watch: &mut Watch, batches: std::ops::RangeInclusive<i64>) -> Vec<Event> {
    let batches = batches.flat_map(|n| look(watch, &batch(n)));
    batches.collect()
}

fn biased(watch: &mut Watch, batches: std::ops::RangeInclusive<i64>) -> Vec<Event> {
    let batches = batches.flat_map(|n| look(watch, &batch(n).suspect(&[bias("FT-101")])));
    batches.collect()
}

#[test]
fn acknowledged_and_then_returned() {
    let mut watch = raised();
    let event = watch.acknowledge(1, act(3)).unwrap();
    assert_eq!(event.kind, EventKind::Acknowledged);
    assert_eq!(
        (event.at, event.by.as_deref(), event.note.as_deref()),
        (at(3), Some("R. Hale"), Some("seen"))
    );
    assert_eq!(event.alarm.state, State::ActiveAcknowledged);
    assert_eq!(event.alarm.acknowledged, Some(act(3)));
    let events = quiet(&mut watch, 4..=6);
    assert_eq!(kinds(&events), [(EventKind::Returned, 1)]);
    assert_eq!(only(&watch).state, State::Normal);
    // Again: remembered, and nobody has acknowledged this one.
    let events = biased(&mut watch, 7..=9);
    assert_eq!(kinds(&events), [(EventKind::Raised, 1)]);
    let alarm = only(&watch);
    assert_eq!(alarm.state, State::ActiveUnacknowledged);
    assert_eq!((alarm.raises, &alarm.acknowledged), (2, &None));
}

#[test]
fn returned_and_then_acknowledged() {
    let mut watch = raised();
    quiet(&mut watch, 4..=6);
    // Two of three batches towards the next time are not lost.
    biased(&mut watch, 7..=8);
    let event = watch.acknowledge(1, act(8)).unwrap();
    assert_eq!(event.alarm.state, State::Normal);
    let events = biased(&mut watch, 9..=9);
    assert_eq!(kinds(&events), [(EventKind::Raised, 1)]);
    assert_eq!((only(&watch).since, only(&watch).batches), (at(7), 3));
}

#[test]
fn shelved_until_a_time() {
    let mut watch = raised();
    watch.acknowledge(1, act(3)).unwrap();
    let event = watch.shelve(1, at(6), act(3)).unwrap();
    assert_eq!(event.kind, EventKind::Shelved);
    assert_eq!(event.alarm.state, State::Shelved);
    assert!(event.alarm.standing);
    assert_eq!(watch.next_time(), Some(at(6)));
    assert_eq!(biased(&mut watch, 4..=5), []);
    assert_eq!(watch.pass_time(at(6) - Duration::SECOND), []);
    // The batch that ends with it ends it too; the alarm has stood all the while.
    let events = biased(&mut watch, 6..=6);
    assert_eq!(kinds(&events), [(EventKind::Unshelved, 1)]);
    assert_eq!((events[0].at, &events[0].by), (at(6), &None));
    assert_eq!(only(&watch).state, State::ActiveAcknowledged);
    assert_eq!(only(&watch).batches, 6);
    assert_eq!((watch.next_time(), &only(&watch).shelved), (None, &None));
}

#[test]
fn what_happens_on_the_shelf_is_followed_and_not_told() {
    // It returns.
    let mut watch = raised();
    watch.shelve(1, at(90), act(3)).unwrap();
    assert_eq!(quiet(&mut watch, 4..=6), []);
    assert!(!only(&watch).standing);
    let event = watch.unshelve(1, act(6)).unwrap();
    assert_eq!(event.alarm.state, State::Normal);

    // It returns and comes again: what was acknowledged was another time.
    let mut watch = raised();
    watch.acknowledge(1, act(3)).unwrap();
    watch.shelve(1, at(90), act(3)).unwrap();
    assert_eq!(quiet(&mut watch, 4..=6), []);
    assert_eq!(biased(&mut watch, 7..=9), []);
    assert_eq!(only(&watch).raises, 2);
    let event = watch.unshelve(1, act(9)).unwrap();
    assert_eq!(event.alarm.state, State::ActiveUnacknowledged);

    // A member of its group comes under another name.
    let mut watch = raised();
    watch.shelve(1, at(90), act(3)).unwrap();
    for n in 4..10 {
        let group = [leak(), bias("FT-101")];
        let group = if n < 9 { &group[..] } else { &group[..1] };
        assert_eq!(look(&mut watch, &batch(n).suspect(group)), []);
        assert_eq!(only(&watch).members, group);
    }
    assert_eq!(only(&watch).key, Key::suspect(&leak()));

    // One that is normal is shelved while the next time is on its way.
    let mut watch = raised();
    watch.acknowledge(1, act(3)).unwrap();
    quiet(&mut watch, 4..=6);
    biased(&mut watch, 7..=8);
    watch.shelve(1, at(10), act(8)).unwrap();
    assert_eq!(biased(&mut watch, 9..=9), []);
    let events = watch.pass_time(at(20));
    assert_eq!(kinds(&events), [(EventKind::Unshelved, 1)]);
    assert_eq!(events[0].at, at(10));
    assert_eq!(events[0].alarm.state, State::ActiveUnacknowledged);
    assert_eq!(events[0].alarm.since, at(7));
}

#[test]
fn out_of_service_until_it_is_returned() {
    let mut watch = raised();
    watch.shelve(1, at(5), act(3)).unwrap();
    let event = watch
        .remove_from_service(1, "transmitter is being changed", act(3))
        .unwrap();
    assert_eq!(event.kind, EventKind::RemovedFromService);
    assert_eq!(event.alarm.state, State::OutOfService);
    let removal = event.alarm.out_of_service.as_ref().unwrap();
    assert_eq!(removal.reason, "transmitter is being changed");
    assert_eq!((removal.by.as_str(), removal.at), ("R. Hale", at(3)));
    // The shelf has gone, and its time ends nothing.
    assert_eq!(watch.pass_time(at(99)), []);
    assert_eq!(quiet(&mut watch, 4..=6), []);
    assert_eq!(biased(&mut watch, 7..=9), []);
    let event = watch.return_to_service(1, act(9)).unwrap();
    assert_eq!(event.kind, EventKind::ReturnedToService);
    assert_eq!(event.alarm.state, State::ActiveUnacknowledged);
    assert_eq!(event.alarm.out_of_service, None);
}

#[test]
fn refusals_say_what_can_be_done() {
    let mut watch = raised();
    watch.shelve(1, at(90), act(3)).unwrap();
    let before = watch.clone();
    let refused = watch.acknowledge(1, act(3)).unwrap_err();
    assert_eq!(
        refused,
        Refused::State {
            id: 1,
            state: State::Shelved,
            action: Action::Acknowledge
        }
    );
    assert_eq!(
        refused.to_string(),
        "alarm 1 is shelved: it cannot be acknowledged; \
         it can be unshelved or be removed from service"
    );
    assert_eq!(watch.acknowledge(7, act(3)), Err(Refused::NoAlarm(7)));
    let nobody = Act {
        by: " ".to_owned(),
        ..act(3)
    };
    assert_eq!(watch.unshelve(1, nobody), Err(Refused::Nameless));
    assert_eq!(
        watch.remove_from_service(1, "", act(3)),
        Err(Refused::NoReason)
    );
    assert_eq!(watch, before);
    watch.unshelve(1, act(3)).unwrap();
    assert_eq!(
        watch.shelve(1, at(3), act(3)),
        Err(Refused::Over { until: at(3) })
    );
}

/// An alarm that is over keeps its name, and another may come to it.
#[test]
fn one_that_is_over_is_not_woken_beside_its_successor() {
    let mut watch = Watch::new("tarn-mill");
    for n in 1..=3 {
        let (a, b) = ([bias("FT-101")], [bias("FT-102")]);
        look(&mut watch, &batch(n).suspect(&a).suspect(&b));
    }
    quiet(&mut watch, 4..=6);
    watch.acknowledge(1, act(6)).unwrap();
    // The group loses its first name on the way to the other's.
    for (n, group) in [
        (7, vec![bias("FT-101"), bias("FT-102")]),
        (8, vec![bias("FT-101")]),
    ] {
        let events = look(&mut watch, &batch(n).suspect(&group));
        let renamed = (n == 8).then_some((EventKind::Renamed, 2));
        assert_eq!(kinds(&events), Vec::from_iter(renamed));
    }
    assert_eq!(
        watch.shelve(1, at(90), act(8)),
        Err(Refused::Succeeded { id: 1, other: 2 })
    );
    watch.shelve(2, at(90), act(8)).unwrap();
}

#[test]
fn the_newest_normal_alarms_are_remembered() {
    let settings = AlarmSettings {
        raise_after: 1,
        clear_after: 1,
        ..AlarmSettings::default()
    };
    let mut watch = Watch::new("tarn-mill");
    let many = KEPT_NORMAL as i64 + 20;
    for n in 0..many {
        let suspect = bias(&format!("FT-{n}"));
        let report = batch(2 * n).suspect(&[suspect]);
        assert_eq!(watch.look(&report, &settings, at(2 * n)).len(), 1);
        let id = u64::try_from(n).unwrap() + 1;
        // Every tenth is still on the shelf.
        if n % 10 == 0 {
            watch.shelve(id, at(9999), act(2 * n)).unwrap();
        } else {
            watch.acknowledge(id, act(2 * n)).unwrap();
        }
        watch.look(&batch(2 * n + 1), &settings, at(2 * n + 1));
        watch.changed_accusations();
    }
    let normal = watch.alarms().iter().filter(|a| a.state == State::Normal);
    assert_eq!(normal.count(), 198);
    // All are back to normal; those that returned first are forgotten.
    assert_eq!(watch.pass_time(at(9999)).len(), 22);
    let ids: Vec<u64> = watch.alarms().iter().map(|a| a.id).collect();
    assert_eq!(ids, (21..=220).collect::<Vec<_>>());
    // What comes again after it was forgotten is a new alarm.
    let events = watch.look(&batch(9999).suspect(&[bias("FT-3")]), &settings, at(9999));
    assert_eq!(kinds(&events), [(EventKind::Raised, 221)]);
}
