//! What stands out before any balance is made.

use super::{STATION, USUAL, batch, plant, usual_but};
use counterpoise::pipeline::{Compiled, influences, reconcile, reconcile_with};
use counterpoise::plant::{Action, Batch, ByHand, Grade};
use counterpoise::report::{Class, Finding, FindingKind, Report, Verdict};
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;
use time::macros::datetime;

fn report(readings: &[(&str, f64)]) -> Report {
    reconcile(&Compiled::new(plant(STATION), 1), &batch("b", readings))
}

fn of_kind(report: &Report, kind: FindingKind) -> Vec<&Finding> {
    report.findings.iter().filter(|f| f.kind == kind).collect()
}

#[test]
fn a_sound_batch_has_no_finding() {
    let report = report(USUAL);
    assert_eq!(report.findings, []);
    assert_eq!(report.verdict, Verdict::Consistent);
    let line_up = report.line_up.expect("told");
    assert_eq!(line_up.name, "without past, pump-b");
    assert_eq!(line_up.streams_out, ["b", "b-out", "past"]);
    assert_eq!(line_up.equipment_out, ["pump-b"]);
    assert_eq!(line_up.pipes, ["suction", "delivery", "tee"]);
    assert_eq!(line_up.decided_by["F-P"], Some(0.1));
    assert_eq!(report.streams["a"], report.streams["draw"]);
}

#[test]
fn a_pump_that_is_off_and_delivers_is_told() {
    let report = report(&usual_but(&[("F-B", 12.0)]));
    let told = of_kind(&report, FindingKind::OutOfServiceAndFlowing);
    assert_eq!(told.len(), 1, "{:?}", report.findings);
    assert_eq!(
        (told[0].of.as_str(), &told[0].tags[..]),
        ("pump-b", &["F-B".to_owned()][..])
    );
    assert_eq!(report.tags["F-B"].class, Class::Unused);
    assert_eq!(report.tags["F-B"].measured, Some(12.0));
    // An idle transmitter's zero error is none, however sure it is of it.
    assert!(
        of_kind(
            &super::findings::report(&usual_but(&[("F-B", 3.9)])),
            FindingKind::OutOfServiceAndFlowing
        )
        .is_empty()
    );
}

#[test]
fn a_pump_that_is_on_and_delivers_nothing_is_told() {
    let report = report(&usual_but(&[("XS-B", 2.0)]));
    let told = of_kind(&report, FindingKind::InServiceAndNotFlowing);
    assert_eq!(told.len(), 1, "{:?}", report.findings);
    assert_eq!(told[0].of, "pump-b");
    assert_eq!(report.line_up.expect("told").name, "without past");
}

#[test]
fn a_status_that_is_missing_or_bad_leaves_its_part_in_service() {
    let compiled = Compiled::new(plant(STATION), 1);
    let mut bad = batch("b", USUAL);
    let signal = |batch: &mut Batch, tag: &str| {
        let at = batch.readings.iter().position(|r| r.tag == tag);
        at.expect("it is read")
    };
    let at = signal(&mut bad, "XS-B");
    bad.readings[at].quality.grade = Grade::Bad;
    let mut missing = batch("b", USUAL);
    let at = signal(&mut missing, "XS-B");
    missing.readings.remove(at);
    let by_hand = ByHand {
        id: 1,
        tag: "XS-B".to_owned(),
        action: Action::OutOfService,
        from: datetime!(2031-01-01 00:00 UTC),
        until: None,
        reason: "the switch is stuck".to_owned(),
        by: "shift".to_owned(),
    };
    let reports = [
        reconcile(&compiled, &bad),
        reconcile(&compiled, &missing),
        reconcile_with(&compiled, &batch("b", USUAL), &[by_hand]),
    ];
    assert_eq!(reports[2].by_hand[0].tag, "XS-B");
    for report in reports {
        let told = of_kind(&report, FindingKind::StatusUnknown);
        assert_eq!(told.len(), 1, "{:?}", report.findings);
        assert!(
            told[0].text.contains("pump-b counts as in service"),
            "{}",
            told[0].text
        );
        let line_up = report.line_up.expect("told");
        assert_eq!(line_up.name, "without past");
        assert_eq!(line_up.decided_by["XS-B"], None);
    }
    // An assumption is left out where nobody knows whether it holds.
    let at = signal(&mut missing, "XS-A");
    missing.readings.remove(at);
    let report = reconcile(&compiled, &missing);
    assert_eq!(
        report.assumptions["cold-p"].reason.as_deref(),
        Some("out of service")
    );
}

#[test]
fn the_odd_one_of_three_transmitters_is_told_before_any_suspect() {
    let report = report(&usual_but(&[("P-3B", 9.4)]));
    let first = &report.findings[0];
    assert_eq!(first.kind, FindingKind::SameQuantityDisagrees);
    assert_eq!(first.tags, ["P-3A", "P-3B", "P-3C"]);
    assert_eq!(first.odd_one_out.as_deref(), Some("P-3B"));
    assert!(
        first.text.contains("P-3B reads 0.405 bar more"),
        "{}",
        first.text
    );
    let json = serde_json::to_string(&report).expect("JSON");
    let place = |key: &str| json.find(key).unwrap_or_else(|| panic!("{key}"));
    assert!(place("\"findings\"") < place("\"suspects\""));
    // Each of the three weighs in, the odd one too.
    for tag in ["P-3A", "P-3B", "P-3C"] {
        assert_eq!(report.tags[tag].class, Class::Redundant, "{tag}");
    }
    // Two that go apart by as much as the third lies between them: nobody is odd.
    let spread =
        super::findings::report(&usual_but(&[("P-3A", 8.6), ("P-3B", 9.4), ("P-3C", 9.0)]));
    assert_eq!(spread.findings[0].odd_one_out, None);
}

#[test]
fn what_is_out_of_service_has_no_influences() {
    let compiled = Compiled::new(plant(STATION), 1);
    let usual = batch("b", USUAL);
    let of = |of: &str, quantity: Option<&str>| influences(&compiled, &usual, &[], of, quantity);
    let refused = of("b-out", Some("mass_flow")).expect_err("out").to_string();
    assert_eq!(refused, "\"b-out\" is out of service in this batch");
    assert!(of("F-B", None).is_err());
    let through = |name| of(name, Some("mass_flow")).expect("in service").value;
    assert_eq!(through("a"), through("draw"));
    let still = batch("b", &usual_but(&[("XS-0", 0.0)]));
    let refused = influences(&compiled, &still, &[], "F-1", None).expect_err("down");
    assert!(
        refused.to_string().contains("not running: XS-0 reads 0"),
        "{refused}"
    );
}

#[test]
fn a_plant_that_is_down_by_its_status_and_flows_is_told() {
    let still = report(&usual_but(&[("XS-0", 0.0)]));
    assert_eq!(still.verdict, Verdict::NotRunning);
    assert_eq!(
        of_kind(&still, FindingKind::OutOfServiceAndFlowing).len(),
        1
    );
    let rest = usual_but(&[
        ("XS-0", 0.0),
        ("F-1", 0.2),
        ("F-2", 0.1),
        ("F-A", 0.0),
        ("E-A", 0.0),
    ]);
    assert_eq!(report(&rest).findings, []);
}

/// Sound batches: the groups of all tags together are told as often as the
/// confidence says, and no status contradicts.
#[test]
fn false_findings_are_as_rare_as_promised() {
    let compiled = Compiled::new(plant(&STATION.replace(
        "T-3  =",
        "T-3B = { measures = \"temperature\", of = \"out\", unit = \"Cel\", uncertainty = { absolute = \"0.5 K\" } }\nT-3  =",
    )), 1);
    const BATCHES: usize = 4000;
    let mut rng = ChaCha8Rng::seed_from_u64(5);
    let mut normal = || (0..12).map(|_| rng.random::<f64>()).sum::<f64>() - 6.0;
    let (mut groups, mut flows) = (0, 0);
    for _ in 0..BATCHES {
        let sigma = |half_width: f64| half_width / 1.959964;
        let p = |z: f64| 9.0 + sigma(0.05) * z;
        let idle = |span: f64, z: f64| sigma(0.01 * span) * z;
        let mut readings = usual_but(&[
            ("P-3A", p(normal())),
            ("P-3B", p(normal())),
            ("P-3C", p(normal())),
            ("T-3", 30.0 + sigma(0.5) * normal()),
            ("F-B", idle(200.0, normal())),
            ("F-P", idle(50.0, normal())),
        ]);
        readings.push(("T-3B", 30.0 + sigma(0.5) * normal()));
        let found = counterpoise::pipeline::findings(&compiled, &batch("b", &readings), &[]);
        let of = |kind| found.iter().filter(|f| f.kind == kind).count();
        groups += usize::from(of(FindingKind::SameQuantityDisagrees) > 0);
        flows += of(FindingKind::OutOfServiceAndFlowing);
    }
    let rate = groups as f64 / BATCHES as f64;
    println!(
        "{:.2} % of {BATCHES} batches have a group that disagrees, {flows} a flow",
        100.0 * rate
    );
    // Four standard errors; sums of twelve have slightly light tails.
    assert!(
        (rate - 0.05).abs() < 4.0 * (0.05 * 0.95 / BATCHES as f64).sqrt(),
        "{rate}"
    );
    assert!(flows as f64 / (BATCHES as f64) < 0.05, "{flows}");
}
