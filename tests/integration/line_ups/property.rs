//! Laws of the reduction, over plants with parts out of service at random.

use super::{STATION, plant};
use counterpoise::demo;
use counterpoise::pipeline::{Compiled, reconcile};
use counterpoise::plant::{Kind, Plant, Reduced, Service, Stream, StreamId};
use proptest::prelude::*;
use std::collections::BTreeMap;

/// A plant with parts switched off, as the conditions would.
fn reduced(plant: &Plant, streams: &[usize], equipment: &[usize]) -> (Service, Reduced) {
    let mut service = Service::full(plant);
    streams.iter().for_each(|&s| service.streams[s] = false);
    equipment.iter().for_each(|&e| service.equipment[e] = false);
    let service = service.closed(plant);
    let reduced = Reduced::new(plant, &service);
    (service, reduced)
}

/// Streams on the ports of a kind: those that enter and those that leave.
fn ports(kind: &Kind) -> [Vec<StreamId>; 2] {
    let pairs = |pairs: &[Option<(StreamId, StreamId)>]| {
        let pairs: Vec<(StreamId, StreamId)> = pairs.iter().flatten().copied().collect();
        let (into, out): (Vec<_>, Vec<_>) = pairs.into_iter().unzip();
        [into, out]
    };
    match kind.clone() {
        Kind::Mixer { inlets, outlet } => [inlets, vec![outlet]],
        Kind::Splitter { inlet, outlets } => [vec![inlet], outlets],
        Kind::Header {
            inlets, outlets, ..
        }
        | Kind::Turbine { inlets, outlets } => [inlets, outlets],
        Kind::Valve { inlet, outlet } | Kind::Pump { inlet, outlet } => [vec![inlet], vec![outlet]],
        Kind::ClosedHeater {
            steam,
            drains_in,
            drain_out,
            tube_in,
            tube_out,
            vent,
            ..
        } => [
            [vec![steam, tube_in], drains_in].concat(),
            [vec![drain_out, tube_out], Vec::from_iter(vent)].concat(),
        ],
        Kind::OpenHeater {
            inlets,
            outlet,
            vent,
            ..
        } => [inlets, [vec![outlet], Vec::from_iter(vent)].concat()],
        Kind::Condenser {
            steam,
            condensate,
            cooling,
            vent,
            ..
        } => {
            let [into, out] = pairs(&[cooling]);
            [
                [steam, into].concat(),
                [vec![condensate], out, Vec::from_iter(vent)].concat(),
            ]
        }
        Kind::Exchanger { hot, cold } => pairs(&[hot, cold]),
        Kind::Boiler {
            water_in,
            water_out,
            reheats,
        } => {
            let (into, out): (Vec<_>, Vec<_>) = reheats.into_iter().unzip();
            [
                [water_in, into.concat()].concat(),
                [water_out, out].concat(),
            ]
        }
        Kind::Generator { .. } | Kind::Shaft { .. } | Kind::Motor { .. } => Default::default(),
    }
}

/// Every stream's ends are on ports of their equipment, and every port has a stream
/// whose end it is.
fn check(plant: &Plant) {
    let mut entered: BTreeMap<StreamId, usize> = BTreeMap::new();
    let mut left: BTreeMap<StreamId, usize> = BTreeMap::new();
    for (e, item) in plant.equipment.iter().enumerate() {
        let [inlets, outlets] = ports(&item.kind);
        let has_ports = !inlets.is_empty() && !outlets.is_empty();
        match &item.kind {
            Kind::Generator { driven_by } => assert!(!driven_by.is_empty()),
            Kind::Shaft { drivers, driven } => {
                assert!(!drivers.is_empty() && !driven.is_empty());
            }
            Kind::Motor { drives } => assert!(drives.0 < plant.equipment.len()),
            _ => assert!(has_ports, "{} is joined on both sides", item.name),
        }
        for s in inlets {
            assert_eq!(entered.insert(s, e), None, "{}", plant.streams[s.0].name);
        }
        for s in outlets {
            assert_eq!(left.insert(s, e), None, "{}", plant.streams[s.0].name);
        }
    }
    for (s, stream) in plant.streams.iter().enumerate() {
        let Stream { name, from, to, .. } = stream;
        assert_eq!(left.get(&StreamId(s)).copied(), from.map(|e| e.0), "{name}");
        assert_eq!(
            entered.get(&StreamId(s)).copied(),
            to.map(|e| e.0),
            "{name}"
        );
        assert!(from.is_some() || to.is_some(), "{name} joins something");
    }
}

/// Some places of a list.
fn some(of: usize) -> impl Strategy<Value = Vec<usize>> {
    proptest::collection::vec(0..of, 0..3)
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(256))]

    /// What is left is a plant whose ports are joined as its kinds allow, whatever
    /// is out of service; and what is in service stays so when the same goes again.
    #[test]
    fn what_is_left_is_a_plant(streams in some(69), equipment in some(48), on_demo in any::<bool>()) {
        let plant = if on_demo { demo::plant().unwrap() } else { plant(STATION) };
        let (n, m) = (plant.streams.len(), plant.equipment.len());
        let streams: Vec<usize> = streams.into_iter().map(|s| s % n).collect();
        let equipment: Vec<usize> = equipment.into_iter().map(|e| e % m).collect();
        let (service, left) = reduced(&plant, &streams, &equipment);
        check(&left.plant);
        prop_assert_eq!(service.clone().closed(&plant), service.clone());
        for (s, place) in left.places.streams.iter().enumerate() {
            prop_assert_eq!(place.is_some(), service.streams[s]);
        }
        let (full, nothing_left) = reduced(&left.plant, &[], &[]);
        prop_assert!(full.is_full());
        prop_assert_eq!(nothing_left.plant, left.plant);
    }

    /// Another order of the file gives the same plant, in another order.
    #[test]
    fn the_order_of_the_file_changes_nothing(
        equipment in some(8),
        order in Just((0..10).collect::<Vec<usize>>()).prop_shuffle(),
    ) {
        let text = |order: &[usize]| {
            let (head, rest) = STATION.split_once("[streams]\n").unwrap();
            let (streams, rest) = rest.split_once("[equipment]\n").unwrap();
            let lines: Vec<&str> = streams.lines().collect();
            let shuffled: Vec<&str> = order.iter().map(|&i| lines[i]).collect();
            format!("{head}[streams]\n{}\n[equipment]\n{rest}", shuffled.join("\n"))
        };
        let (_, one) = reduced(&plant(STATION), &[], &equipment);
        let (_, other) = reduced(&plant(&text(&order)), &[], &equipment);
        let told = |plant: &Plant| {
            let ends = |s: &Stream| {
                let of = |e: Option<counterpoise::plant::EquipmentId>| {
                    e.map(|e| plant.equipment[e.0].name.clone())
                };
                (of(s.from), of(s.to))
            };
            let mut streams: Vec<_> = plant.streams.iter().map(ends).collect();
            streams.sort();
            let equipment: Vec<_> = plant.equipment.iter().map(|e| e.name.clone()).collect();
            let tags: Vec<_> = plant.tags.iter().map(|t| t.name.clone()).collect();
            (streams, equipment, tags)
        };
        prop_assert_eq!(told(&one.plant), told(&other.plant));
    }
}

/// The station with pump B running and everything led past a cooler that is shut,
/// against a plant file that never had the other parts.
#[test]
fn a_part_out_of_service_reports_as_if_it_had_never_been_there() {
    let shut = STATION.replace(
        r#"cooler   = { kind = "exchanger" }"#,
        r#"cooler   = { kind = "exchanger", in-service-when = { tag = "F-P", below = "2 t/h" } }"#,
    );
    let without: String = STATION
        .lines()
        .filter(|line| {
            let name = line.split_whitespace().next().unwrap_or_default();
            let gone = [
                "running-when",
                "a",
                "a-out",
                "cooled",
                "cold",
                "pump-a",
                "motor-a",
                "cooler",
                "XS-0",
                "XS-A",
                "F-A",
                "E-A",
                "loss-a",
                "cold-p",
            ];
            !gone.contains(&name)
        })
        .map(|line| format!("{line}\n"))
        .collect();
    let without = without
        .replace(
            r#", in-service-when = { tag = "F-P", above = "2 t/h" }"#,
            "",
        )
        .replace(r#", in-service-when = { tag = "XS-B", is = [1, 2] }"#, "")
        .replace("[assumptions]", "");
    let readings = super::usual_but(&[
        ("XS-A", 0.0),
        ("XS-B", 1.0),
        ("F-A", 0.2),
        ("F-B", 99.5),
        ("E-A", 0.0),
        ("F-P", 49.0),
        ("T-3", 40.0),
    ]);
    let batch = super::batch("b", &readings);
    let whole = reconcile(&Compiled::new(plant(&shut), 1), &batch);
    let alone = reconcile(&Compiled::new(plant(&without), 1), &batch);
    let line_up = whole.line_up.as_ref().expect("told");
    assert_eq!(line_up.streams_out, ["a", "a-out", "cooled", "cold"]);
    assert_eq!(line_up.equipment_out, ["pump-a", "motor-a", "cooler"]);
    // There the tees are equipment with balances that say nothing: the statistic and
    // the values are the same all the same.
    let near = |a: Option<f64>, b: Option<f64>, what: &str| match (a, b) {
        (Some(a), Some(b)) => {
            assert!(
                (a - b).abs() <= 1e-7 * a.abs().max(1.0),
                "{what}: {a} and {b}"
            );
        }
        (a, b) => assert_eq!(a, b, "{what}"),
    };
    let (a, b) = (
        whole.global_test.expect("it"),
        alone.global_test.expect("it"),
    );
    assert_eq!(a.degrees_of_freedom, b.degrees_of_freedom);
    near(Some(a.statistic), Some(b.statistic), "statistic");
    assert_eq!(whole.streams.len(), alone.streams.len());
    for (name, stream) in &alone.streams {
        let other = &whole.streams[name];
        for (a, b) in [
            (&stream.mass_flow, &other.mass_flow),
            (&stream.pressure, &other.pressure),
            (&stream.enthalpy, &other.enthalpy),
        ] {
            near(a.value, b.value, name);
            near(a.uncertainty, b.uncertainty, name);
        }
    }
    for (name, tag) in &alone.tags {
        near(tag.reconciled, whole.tags[name].reconciled, name);
        near(tag.redundancy, whole.tags[name].redundancy, name);
    }
}
