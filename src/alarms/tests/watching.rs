//! What raises an alarm, what returns it, and that one cause raises one.

use super::*;
use crate::plant::Priority;
use crate::report::LineUp;
use std::slice::from_ref;

#[test]
fn an_adjustment_rises_and_returns() {
    let mut watch = Watch::new("tarn-mill");
    let over = |n| batch(n).tag("FT-101", Some(-4.5));
    assert_eq!(look(&mut watch, &over(1)), []);
    assert_eq!(look(&mut watch, &over(2)), []);
    // A quiet batch starts the row anew.
    assert_eq!(look(&mut watch, &batch(3)), []);
    assert_eq!(look(&mut watch, &over(4)), []);
    assert_eq!(look(&mut watch, &over(5)), []);
    let events = look(&mut watch, &over(6));
    assert_eq!(kinds(&events), [(EventKind::Raised, 1)]);
    let alarm = &events[0].alarm;
    assert_eq!(alarm, only(&watch));
    assert_eq!(alarm.key.as_str(), "adjustment FT-101");
    assert_eq!(alarm.priority, Priority::Low);
    assert_eq!((alarm.since, alarm.raised), (at(4), at(6)));
    assert_eq!((alarm.batches, alarm.raises), (3, 1));
    assert_eq!((alarm.last.statistic, alarm.last.value), (4.5, Some(-2.25)));
    assert_eq!(alarm.last.critical_value, CRITICAL);
    assert!(alarm.standing && alarm.state == State::ActiveUnacknowledged);

    // Between 3.2 and 4 nothing counts either way; nor does what is not known.
    assert_eq!(look(&mut watch, &batch(7)), []);
    for n in 8..20 {
        let held = [Some(3.2), Some(4.0), Some(f64::NAN), None][n as usize % 4];
        assert_eq!(look(&mut watch, &batch(n).tag("FT-101", held)), []);
    }
    assert_eq!(look(&mut watch, &batch(20).tag("FT-101", Some(-3.19))), []);
    let events = look(&mut watch, &batch(21));
    assert_eq!(kinds(&events), [(EventKind::Returned, 1)]);
    assert_eq!(only(&watch).state, State::ReturnedUnacknowledged);
    assert_eq!(only(&watch).returned, Some(at(21)));

    // The same alarm again.
    for n in 22..24 {
        assert_eq!(look(&mut watch, &over(n)), []);
    }
    let events = look(&mut watch, &over(24));
    assert_eq!(kinds(&events), [(EventKind::Raised, 1)]);
    assert_eq!((only(&watch).raises, only(&watch).returned), (2, None));
    assert_eq!(only(&watch).since, at(22));
}

#[test]
fn a_batch_over_starts_the_return_anew() {
    let mut watch = raised();
    for n in 4..6 {
        assert_eq!(look(&mut watch, &batch(n)), []);
    }
    assert_eq!(look(&mut watch, &batch(6).suspect(&[bias("FT-101")])), []);
    for n in 7..9 {
        assert_eq!(look(&mut watch, &batch(n)), []);
    }
    let events = look(&mut watch, &batch(9));
    assert_eq!(kinds(&events), [(EventKind::Returned, 1)]);
}

#[test]
fn batches_without_a_verdict_late_or_again_do_not_count() {
    let over = |n| batch(n).tag("FT-101", Some(4.5));
    let mut watch = Watch::new("tarn-mill");
    look(&mut watch, &over(1));
    for n in 2..6 {
        for verdict in [
            Verdict::NotConverged,
            Verdict::NotRedundant,
            Verdict::NotRunning,
        ] {
            assert_eq!(
                look(
                    &mut watch,
                    &Report {
                        verdict,
                        ..batch(n)
                    }
                ),
                []
            );
        }
        let single_test = None;
        assert_eq!(
            look(
                &mut watch,
                &Report {
                    single_test,
                    ..over(n)
                }
            ),
            []
        );
    }
    assert_eq!(watch.newest(), Some(at(1)));
    look(&mut watch, &over(6));
    let before = watch.clone();
    for n in [0, 1, 5, 6] {
        assert_eq!(look(&mut watch, &over(n)), []);
        assert_eq!(look(&mut watch, &batch(n)), []);
    }
    assert_eq!(watch, before);
    let events = look(&mut watch, &over(7));
    assert_eq!(kinds(&events), [(EventKind::Raised, 1)]);
}

#[test]
fn settings_decide() {
    let mut watch = Watch::new("tarn-mill");
    let mut settings = AlarmSettings {
        raise_after: 1,
        clear_after: 1,
        dead_band: 0.0,
        ..AlarmSettings::default()
    };
    settings.priorities.imbalance = Priority::High;
    let events = watch.look(&batch(1).energy(Some(4.01)), &settings, at(9));
    assert_eq!(kinds(&events), [(EventKind::Raised, 1)]);
    assert_eq!(events[0].alarm.key.as_str(), "imbalance heater-6 energy");
    assert_eq!(events[0].alarm.priority, Priority::High);
    assert_eq!((events[0].at, events[0].alarm.since), (at(9), at(1)));
    assert_eq!(events[0].alarm.last.uncertainty, Some(19.6));
    settings.priorities.imbalance = Priority::Low;
    let events = watch.look(&batch(2).energy(Some(3.99)), &settings, at(9));
    assert_eq!(kinds(&events), [(EventKind::Returned, 1)]);
    assert_eq!(events[0].alarm.priority, Priority::Low);
}

#[test]
fn what_a_suspect_explains_raises_nothing() {
    let mut watch = Watch::new("tarn-mill");
    let mut all = Vec::new();
    for n in 1..10 {
        // Everything is over before the leak is taken out, and its own balances
        // are after too.
        let mut report = batch(n)
            .tag("FT-101", Some(9.0))
            .tag("TT-103", Some(-8.0))
            .energy(Some(12.0))
            .suspect(&[leak(), bias("FT-101")]);
        report.assumptions[ASSUMPTION] = tag(Some(7.0));
        let report = report.rest(|after| {
            let own = &mut after.equipment[EQUIPMENT].imbalance;
            own.mass["steam"] = imbalance(Some(5.0), "kg/s");
            own.energy = Some(imbalance(Some(5.0), "kW"));
            after.tags["FT-101"] = tag(Some(5.0));
        });
        all.extend(look(&mut watch, &report));
    }
    assert_eq!(kinds(&all), [(EventKind::Raised, 1)]);
    let alarm = only(&watch);
    assert_eq!(alarm.key.as_str(), "suspect leak heater-6 steam");
    assert_eq!(
        alarm.title,
        "leak out of heater-6 (steam) or bias of FT-101"
    );
    assert_eq!(alarm.members, [leak(), bias("FT-101")]);
    assert_eq!(alarm.priority, Priority::High);
    assert_eq!(alarm.batches, 9);
    assert_eq!((alarm.last.value, alarm.last.statistic), (Some(3.1), 6.0));
}

#[test]
fn what_no_suspect_explains_does() {
    let mut watch = Watch::new("tarn-mill");
    let mut all = Vec::new();
    for n in 1..=3 {
        let report = batch(n).suspect(&[leak()]).rest(|after| {
            let own = &mut after.equipment[EQUIPMENT].imbalance;
            own.mass["tube"] = imbalance(Some(5.0), "kg/s");
            after.assumptions[ASSUMPTION] = tag(Some(5.0));
        });
        all.extend(look(&mut watch, &report));
    }
    let keys: Vec<_> = all.iter().map(|e| e.alarm.key.as_str()).collect();
    assert_eq!(
        keys,
        [
            "suspect leak heater-6 steam",
            "imbalance heater-6 mass tube",
            "adjustment drop-6"
        ]
    );
}

#[test]
fn an_adjustment_returns_once_a_suspect_explains_it() {
    let mut watch = Watch::new("tarn-mill");
    for n in 1..=3 {
        look(&mut watch, &batch(n).tag("FT-101", Some(5.0)));
    }
    let mut all = Vec::new();
    for n in 4..=6 {
        let report = batch(n).tag("FT-101", Some(5.0)).suspect(&[bias("FT-101")]);
        all.extend(look(&mut watch, &report));
    }
    assert_eq!(
        kinds(&all),
        [(EventKind::Raised, 2), (EventKind::Returned, 1)]
    );
}

#[test]
fn without_values_after_the_suspects_nothing_else_counts() {
    let mut watch = Watch::new("tarn-mill");
    let mut all = Vec::new();
    for n in 1..10 {
        let mut report = batch(n).tag("TT-103", Some(9.0)).suspect(&[leak()]);
        report.after_suspects = None;
        all.extend(look(&mut watch, &report));
    }
    assert_eq!(kinds(&all), [(EventKind::Raised, 1)]);
}

#[test]
fn groups_that_share_a_member_are_one_alarm() {
    let (a, b, c) = (bias("FT-101"), bias("FT-102"), leak());
    let mut watch = Watch::new("tarn-mill");
    let groups: [&[Hypothesis]; 4] = [
        &[a.clone(), b.clone()],
        &[b.clone(), c.clone()],
        &[c.clone(), b.clone()],
        &[b.clone(), c.clone()],
    ];
    let mut all = Vec::new();
    for (n, group) in (1..).zip(groups) {
        all.extend(look(&mut watch, &batch(n).suspect(group)));
    }
    assert_eq!(kinds(&all), [(EventKind::Raised, 1)]);
    assert_eq!(all[0].alarm.key, Key::suspect(&c));
    assert_eq!(all[0].alarm.since, at(1));
    let title = "leak out of heater-6 (steam) or bias of FT-102";
    assert_eq!(all[0].alarm.title, title);
    assert_eq!(only(&watch).members, [b.clone(), c]);
    // Another cause is another alarm, whatever came before.
    for n in 5..=7 {
        let report = batch(n).suspect(from_ref(&a)).suspect(from_ref(&b));
        all.extend(look(&mut watch, &report));
    }
    assert_eq!(
        kinds(&all[1..]),
        [(EventKind::Renamed, 1), (EventKind::Raised, 2)]
    );
    assert_eq!(watch.alarm(2).unwrap().members, [a]);
    // One suspect for both: one of the alarms takes it, the other cannot return.
    for n in 8..20 {
        let report = batch(n).suspect(&[b.clone(), bias("FT-101")]);
        assert_eq!(look(&mut watch, &report), []);
    }
    assert!(watch.alarm(1).unwrap().standing && watch.alarm(2).unwrap().standing);
    assert_eq!(watch.alarm(2).unwrap().last.end, at(7));
}

/// Members that are nearly equal swap places; a person must know only where the
/// one that they were told of is out of it.
#[test]
fn an_alarm_is_renamed_where_its_member_has_left_the_group() {
    let (a, b, c) = (bias("FT-101"), bias("FT-102"), leak());
    let mut watch = raised();
    for n in 4..20 {
        let mut group = [a.clone(), b.clone(), c.clone()];
        group.rotate_left(n as usize % 3);
        assert_eq!(look(&mut watch, &batch(n).suspect(&group)), []);
        let alarm = only(&watch);
        assert_eq!(alarm.key, Key::suspect(&a));
        assert_eq!(alarm.members, group);
    }
    assert_eq!(
        only(&watch).title,
        "bias of FT-102, leak out of heater-6 (steam) or bias of FT-101"
    );
    let group = [c.clone(), b.clone()];
    let events = look(&mut watch, &batch(20).suspect(&group));
    assert_eq!(kinds(&events), [(EventKind::Renamed, 1)]);
    assert_eq!(events[0].alarm.key, Key::suspect(&c));
    let title = "leak out of heater-6 (steam) or bias of FT-102";
    assert_eq!(events[0].alarm.title, title);
    // On the shelf the name follows and nothing is told.
    watch.shelve(1, at(90), act(20)).unwrap();
    assert_eq!(look(&mut watch, &batch(21).suspect(from_ref(&b))), []);
    assert_eq!(only(&watch).key, Key::suspect(&b));
}

#[test]
fn a_bias_returns_only_when_its_tag_is_quiet() {
    let mut watch = raised();
    for n in 4..10 {
        let held = if n % 2 == 0 { Some(3.5) } else { None };
        assert_eq!(look(&mut watch, &batch(n).tag("FT-101", held)), []);
    }
    // Another tag is not its business, and other suspects are taken out first.
    let report = |n| batch(n).tag("FT-101", Some(3.9)).suspect(&[leak()]);
    assert_eq!(look(&mut watch, &report(10)), []);
    assert_eq!(look(&mut watch, &report(11)), []);
    let events = look(&mut watch, &report(12));
    assert_eq!(
        kinds(&events),
        [(EventKind::Returned, 1), (EventKind::Raised, 2)]
    );
}

/// An assumption that is hardly checked can be a member, and says nothing of its
/// own afterwards: suspects that chance makes hours apart are not one row.
#[test]
fn a_member_that_is_hardly_checked_does_not_hold_a_row_together() {
    let departure = hypothesis(Cause::Departure, ASSUMPTION, None);
    let weak = |n| {
        let mut report = batch(n);
        report.assumptions[ASSUMPTION] = TagReport {
            class: Class::HardlyRedundant,
            ..tag(None)
        };
        report
    };
    let mut watch = Watch::new("tarn-mill");
    for (n, of) in [(1, "FT-101"), (11, "FT-102"), (21, "TT-103")] {
        let group = [bias(of), departure.clone()];
        assert_eq!(look(&mut watch, &weak(n).suspect(&group)), []);
        for quiet in 1..10 {
            assert_eq!(look(&mut watch, &weak(n + quiet)), []);
        }
    }
    assert_eq!(watch.alarms(), []);
}

/// A new revision without the tag, the balance or the assumption.
#[test]
fn what_is_no_longer_in_the_plant_file_returns() {
    let mut watch = raised();
    for n in 4..=6 {
        look(&mut watch, &batch(n).energy(Some(9.0)).tag("FT-101", None));
    }
    assert_eq!(watch.alarms().len(), 2);
    let mut all = Vec::new();
    for n in 7..=9 {
        let mut report = batch(n);
        report.tags.shift_remove("FT-101");
        report.equipment.clear();
        all.extend(look(&mut watch, &report));
    }
    assert_eq!(
        kinds(&all),
        [(EventKind::Returned, 1), (EventKind::Returned, 2)]
    );
}

#[test]
fn a_watch_survives_being_stored() {
    let mut watch = raised();
    look(&mut watch, &batch(4).energy(Some(9.0)));
    watch.shelve(1, at(90), act(4)).unwrap();
    let text = serde_json::to_string(&watch).unwrap();
    let stored: Watch = serde_json::from_str(&text).unwrap();
    assert_eq!(stored, watch);
}

/// While a heater is out of service nothing is known of its balances: its alarm
/// stands, and returns once it is back and sound.
#[test]
fn what_is_out_of_service_counts_neither_way() {
    let mut watch = Watch::new("tarn-mill");
    for n in 1..4 {
        look(&mut watch, &batch(n).energy(Some(4.5)));
    }
    assert!(only(&watch).standing);
    for n in 4..20 {
        let mut out = batch(n);
        let name = out.equipment.keys().next().expect("equipment").clone();
        out.equipment.shift_remove(&name);
        out.line_up = Some(LineUp {
            name: format!("without {name}"),
            streams_out: Vec::new(),
            equipment_out: vec![name],
            pipes: Vec::new(),
            decided_by: Default::default(),
        });
        assert_eq!(look(&mut watch, &out), []);
    }
    assert!(only(&watch).standing);
    for n in 20..22 {
        assert_eq!(look(&mut watch, &batch(n)), []);
    }
    let events = look(&mut watch, &batch(22));
    assert_eq!(kinds(&events), [(EventKind::Returned, 1)]);
}
