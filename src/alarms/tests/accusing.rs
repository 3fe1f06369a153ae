//! Accusations, from the alarm that makes them to the record.

use super::*;
use crate::alarms::{Accusation, AsFound, Closing, NotClosed, Outcome, record};

fn closing(outcome: Outcome) -> Closing {
    Closing {
        outcome,
        cause: None,
        found: "as-found calibration".to_owned(),
        as_found: None,
        at: at(50),
        by: "R. Hale".to_owned(),
        entered: at(51),
    }
}

fn as_found(size: f64) -> Option<AsFound> {
    Some(AsFound {
        size,
        uncertainty: 0.1,
        unit: "t/h".to_owned(),
    })
}

#[test]
fn one_is_opened_goes_on_and_is_closed() {
    let mut watch = raised();
    let opened = watch.changed_accusations();
    assert_eq!(opened.len(), 1);
    let accusation = &opened[0];
    assert_eq!((accusation.id, accusation.alarm), (1, 1));
    assert_eq!(accusation.opened_batch, "b3");
    assert_eq!((accusation.opened, accusation.batches), (at(3), 3));
    assert_eq!(accusation.members, [accused(bias("FT-101"), 3.1)]);
    assert_eq!(only(&watch).accusation, Some(1));
    assert_eq!(watch.changed_accusations(), []);

    let group = [leak(), bias("FT-101")];
    look(&mut watch, &batch(4).suspect(&group));
    look(&mut watch, &batch(5));
    let changed = watch.changed_accusations();
    assert_eq!(changed.len(), 1);
    assert_eq!(changed[0].members, accusation.members);
    assert_eq!(changed[0].newest.len(), 2);
    assert_eq!((changed[0].batches, changed[0].last), (4, at(4)));

    // It stands, returns and comes again: it is still the same, unless it has
    // been closed.
    for n in 6..=8 {
        look(&mut watch, &batch(n));
    }
    for n in 9..=11 {
        look(&mut watch, &batch(n).suspect(&group));
    }
    let changed = watch.changed_accusations();
    assert_eq!((changed[0].id, changed[0].batches), (1, 7));
    let closed = watch.close(&opened[0], closing(Outcome::Refuted)).unwrap();
    // What the watch has followed since, not the copy that was asked for.
    assert_eq!(closed.batches, 7);
    assert_eq!(closed.closing, Some(closing(Outcome::Refuted)));
    // Closed while it stands: nothing more is said before it comes again.
    for n in 12..=14 {
        look(&mut watch, &batch(n).suspect(&group));
    }
    assert_eq!(watch.changed_accusations(), []);
    for n in 15..=17 {
        look(&mut watch, &batch(n));
    }
    for n in 18..=20 {
        look(&mut watch, &batch(n).suspect(&group));
    }
    let changed = watch.changed_accusations();
    assert_eq!((changed[0].id, changed[0].alarm), (2, 1));
    assert_eq!(
        watch.close(&closed, closing(Outcome::Unknown)),
        Err(NotClosed::Already {
            id: 1,
            by: "R. Hale".to_owned(),
            at: at(51)
        })
    );
}

#[test]
fn nobody_is_accused_in_silence() {
    let mut watch = raised();
    let first = watch.changed_accusations().remove(0);
    watch.close(&first, closing(Outcome::Confirmed)).unwrap();
    watch.shelve(1, at(90), act(3)).unwrap();
    for n in 4..=6 {
        look(&mut watch, &batch(n));
    }
    for n in 7..=10 {
        look(&mut watch, &batch(n).suspect(&[bias("FT-101")]));
    }
    assert_eq!(watch.changed_accusations(), []);
    // Back from the shelf and still there: now it is said.
    watch.unshelve(1, act(10)).unwrap();
    look(&mut watch, &batch(11).suspect(&[bias("FT-101")]));
    let changed = watch.changed_accusations();
    assert_eq!((changed[0].id, changed[0].batches), (2, 5));
}

/// An accusation of a group.
fn of(group: &[Hypothesis]) -> Accusation {
    let mut watch = Watch::new("tarn-mill");
    for n in 1..=3 {
        look(&mut watch, &batch(n).suspect(group));
    }
    watch.changed_accusations().remove(0)
}

#[test]
fn a_closing_has_to_fit() {
    let (one, two) = (of(&[bias("FT-101")]), of(&[bias("FT-101"), leak()]));
    let confirmed = |cause: Option<Hypothesis>, as_found| Closing {
        cause,
        as_found,
        ..closing(Outcome::Confirmed)
    };
    assert!(one.close(confirmed(None, as_found(3.0))).is_ok());
    assert!(two.close(confirmed(None, None)).is_ok());
    assert!(two.close(confirmed(Some(leak()), as_found(3.0))).is_ok());
    assert_eq!(
        two.close(confirmed(None, as_found(3.0))),
        Err(NotClosed::WhichMember { members: 2 })
    );
    assert_eq!(
        one.close(confirmed(Some(leak()), None)),
        Err(NotClosed::NotMember {
            cause: Box::new(leak())
        })
    );
    let refuted = Closing {
        cause: Some(leak()),
        ..closing(Outcome::Refuted)
    };
    assert!(matches!(
        two.close(refuted),
        Err(NotClosed::RefutedMember { .. })
    ));
    let kilograms = AsFound {
        size: 0.8,
        uncertainty: 0.1,
        unit: "kg/s".to_owned(),
    };
    assert!(matches!(
        one.close(confirmed(None, Some(kilograms))),
        Err(NotClosed::Unit { .. })
    ));
    for size in [f64::NAN, f64::INFINITY] {
        assert_eq!(
            one.close(confirmed(None, as_found(size))),
            Err(NotClosed::Size)
        );
    }
    let silent = Closing {
        found: String::new(),
        ..closing(Outcome::Unknown)
    };
    assert_eq!(one.close(silent), Err(NotClosed::Missing("`found`")));
}

#[test]
fn the_record() {
    assert_eq!(record(&[]).all, Default::default());
    let (one, two) = (of(&[bias("FT-101")]), of(&[bias("FT-101"), leak()]));
    let close = |accusation: &Accusation, outcome, cause: Option<Hypothesis>, found| {
        accusation
            .close(Closing {
                cause,
                as_found: found,
                ..closing(outcome)
            })
            .unwrap()
    };
    // Stated 3.1 with 0.4 of uncertainty: a sigma of 0.4 / 1.959964.
    let sigma = 0.4 / 1.959_964;
    let accusations = [
        one.clone(),
        close(&one, Outcome::Confirmed, None, as_found(3.1 - sigma)),
        close(&one, Outcome::Confirmed, None, as_found(0.0)),
        close(&one, Outcome::Refuted, None, as_found(0.0)),
        close(
            &two,
            Outcome::Confirmed,
            Some(leak()),
            as_found(3.1 + 2.0 * sigma),
        ),
        close(&two, Outcome::Confirmed, None, None),
        close(&two, Outcome::Unknown, None, None),
    ];
    let record = record(&accusations);
    assert_eq!(record.open, 1);
    let causes: Vec<_> = record.by_cause.iter().map(|c| c.cause).collect();
    assert_eq!(causes, [Cause::Bias, Cause::Leak]);
    let bias = &record.by_cause[0].score;
    let counts = (bias.closed, bias.confirmed, bias.refuted, bias.unknown);
    assert_eq!(counts, (5, 3, 1, 1));
    assert_eq!(bias.hit_rate.unwrap().rate, 0.75);
    assert_eq!(bias.mean_group_size, Some(1.4));
    let error = bias.size_error.unwrap();
    let far = 3.1 / sigma;
    assert_eq!(error.n, 2);
    assert!((error.mean - (1.0 + far) / 2.0).abs() < 1e-9);
    assert!((error.rms - ((1.0 + far * far) / 2.0).sqrt()).abs() < 1e-9);
    assert!((error.mean_relative.unwrap() - sigma / (3.1 - sigma)).abs() < 1e-12);
    let leak = &record.by_cause[1].score;
    assert_eq!((leak.closed, leak.confirmed), (1, 1));
    assert!((leak.size_error.unwrap().mean + 2.0).abs() < 1e-9);
    assert_eq!(record.all.closed, 6);
    assert_eq!(record.all.size_error.unwrap().n, 3);
}
