//! Truths of the demo plant with faults of the plant in them, for the studies
//! of what is found, and the proof that they are what they say: held to the
//! equations of `demo_truth`, which are written from the design a second time
//! and share nothing with the program's own, from which they are solved.

mod disturb;
mod nearest;
mod wrong_models;

use counterpoise::demo::{self, Assumed, Conditions, Fault, Flow, LineUp, Truth};
use counterpoise::fluid;
use counterpoise::plant::{EquipmentId, Kind, Plant, StreamId};
use rand::SeedableRng;
use rand_chacha::ChaCha8Rng;

use crate::demo_truth::check_with;
use crate::demo_truth::relations::{Away, Departures, closed, relations_with};
pub use disturb::{Carries, Defect, Disturber, equipment, stream};
pub use wrong_models::{all_together, wrong_models};

/// The truth of a plant with defects, at once; who disturbs many makes one
/// [`Disturber`] for all.
pub fn disturbed(plant: &Plant, truth: &Truth, defects: &[Defect]) -> Truth {
    Disturber::new(plant).disturbed(truth, defects)
}

/// What a defect comes to in the equations of the tests.
fn departures(plant: &Plant, truth: &Truth, defects: &[Defect]) -> Departures {
    let mut all = Departures::default();
    let mut away = |of, side: &str, flow, enthalpy| {
        let side = side.to_owned();
        all.away.push(Away {
            of,
            side,
            flow,
            enthalpy,
        });
    };
    for defect in defects {
        match defect {
            Defect::Leak { of, side, size } => away(*of, side, *size, None),
            Defect::Tubes { of, size } => {
                // Out of one side and into the other with the enthalpy of its inlet.
                let (side, inlet) = match plant.equipment[of.0].kind {
                    Kind::ClosedHeater { tube_in, .. } => ("tube", tube_in),
                    Kind::Condenser {
                        cooling: Some((inlet, _)),
                        ..
                    } => ("cooling", inlet),
                    _ => panic!("equipment without tubes"),
                };
                let enthalpy = truth.stream(plant, inlet).expect("known").enthalpy;
                away(*of, side, *size, Some(enthalpy));
                away(*of, "steam", -size, Some(enthalpy));
            }
            Defect::Line {
                from,
                into,
                size,
                carries,
            } => {
                let flow = |s: &StreamId| truth.stream(plant, *s).expect("known");
                let enthalpy = match carries {
                    Carries::Stream(s) => flow(s).enthalpy,
                    Carries::DrySteam(s) => {
                        let dry = fluid::from_px(flow(s).pressure, 1.0);
                        dry.expect("in range").h
                    }
                };
                away(from.0, from.1, *size, Some(enthalpy));
                away(into.0, into.1, -size, Some(enthalpy));
            }
            Defect::Passing { stream, size } => all.passing.push((*stream, *size)),
            Defect::HeatLoss { of, size } => all.lost.push((*of, *size)),
            Defect::Subcooled { stream, kelvin } => all.subcooled.push((*stream, *kelvin)),
        }
    }
    all
}

/// Holds a disturbed truth to its defects, and shows that without one of them
/// the same relations fail.
fn check(plant: &Plant, truth: &Truth, defects: &[Defect]) {
    check_with(plant, truth, &departures(plant, truth, defects));
    for left_out in 0..defects.len() {
        let mut others = defects.to_vec();
        others.remove(left_out);
        let others = departures(plant, truth, &others);
        let worst = (0..plant.equipment.len())
            .flat_map(|n| relations_with(plant, truth, EquipmentId(n), &others))
            .chain(closed(plant, truth, &others))
            .map(|relation| relation.relative_residual())
            .fold(0.0, f64::max);
        assert!(worst > 1e-6, "{:?} is not there", defects[left_out]);
    }
}

/// A truth with drawn assumptions.
fn undisturbed(plant: &Plant, load: f64) -> Truth {
    let mut rng = ChaCha8Rng::seed_from_u64(71);
    let assumed = Assumed::drawn(plant, &mut rng);
    demo::truth(&Conditions::at_load(load), &assumed).expect("settles")
}

fn setting(load: f64) -> (Disturber, Truth) {
    let plant = demo::lined_up(LineUp::default()).expect("no faults");
    let truth = undisturbed(&plant, load);
    (Disturber::new(&plant), truth)
}

/// A leak that every side of the equipment can bear, kg/s: half a kilogram a
/// second is all that the gland condenser takes.
fn bearable(plant: &Plant, of: EquipmentId) -> f64 {
    if plant.equipment[of.0].name.starts_with("gland") {
        0.2
    } else {
        2.0
    }
}

/// The streams of a plant as it is lined up, with their truth.
fn streams<'a>(plant: &'a Plant, truth: &'a Truth) -> impl Iterator<Item = (&'a str, &'a Flow)> {
    let names = plant.streams.iter().map(|s| s.name.as_str());
    names.map(|name| (name, &truth.streams[name]))
}

#[test]
fn without_defects_the_truth_stays_what_it_is() {
    let (disturber, truth) = setting(0.9);
    let same = disturber.disturbed(&truth, &[]);
    for (name, flow) in streams(disturber.plant(), &truth) {
        let other = same.streams[name];
        let close = |a: f64, b: f64| (a - b).abs() <= 1e-8 * b.abs().max(1e-3);
        assert!(close(other.mass_flow, flow.mass_flow), "flow of {name}");
        assert!(close(other.pressure, flow.pressure), "pressure of {name}");
        assert!(close(other.enthalpy, flow.enthalpy), "enthalpy of {name}");
    }
    assert_eq!(same.equipment.len(), truth.equipment.len());
}

#[test]
fn a_leak_of_every_side_is_a_leak_of_that_side() {
    let (disturber, truth) = setting(0.8);
    let plant = disturber.plant();
    let sides = disturber.sides();
    assert!(sides.len() > plant.equipment.len(), "{sides:?}");
    for (of, side) in sides {
        let size = bearable(plant, of);
        let leak = [Defect::Leak { of, side, size }];
        check(plant, &disturber.disturbed(&truth, &leak), &leak);
    }
}

#[test]
fn tubes_leak_into_their_shells_and_a_closed_valve_passes() {
    let (disturber, truth) = setting(0.95);
    let plant = disturber.plant();
    let tubed = disturber.with_tubes();
    assert_eq!(
        tubed.len(),
        8,
        "seven closed heaters' tubes and the condenser's"
    );
    for of in tubed {
        let leak = [Defect::Tubes { of, size: 1.2 }];
        check(plant, &disturber.disturbed(&truth, &leak), &leak);
    }
    let stream = stream(plant, "drain-6-dump");
    let passing = [Defect::Passing { stream, size: 1.5 }];
    check(plant, &disturber.disturbed(&truth, &passing), &passing);
}

#[test]
fn heat_leaves_every_balance_of_energy() {
    let (disturber, truth) = setting(0.7);
    let plant = disturber.plant();
    let balances = disturber.with_energy();
    assert!(balances.len() > 20, "{balances:?}");
    for of in balances {
        let loss = [Defect::HeatLoss { of, size: 25.0 }];
        check(plant, &disturber.disturbed(&truth, &loss), &loss);
    }
}

#[test]
fn defects_of_several_kinds_stand_side_by_side() {
    let (disturber, truth) = setting(0.85);
    let plant = disturber.plant();
    let of = |name| equipment(plant, name);
    let defects = [
        Defect::Tubes {
            of: of("heater-7"),
            size: 2.0,
        },
        Defect::Leak {
            of: of("boiler"),
            side: "water".to_owned(),
            size: 1.5,
        },
        Defect::HeatLoss {
            of: of("heater-5"),
            size: 800.0,
        },
        Defect::Passing {
            stream: stream(plant, "drain-6-dump"),
            size: 1.0,
        },
    ];
    let together = disturber.disturbed(&truth, &defects);
    check(plant, &together, &defects);
    assert_eq!(together, disturbed(plant, &truth, &defects));
}

#[test]
fn what_no_plant_can_bear_is_refused() {
    let (disturber, truth) = setting(0.9);
    let plant = disturber.plant();
    // Make-up would have to flow backwards.
    let of = equipment(plant, "condenser");
    let flood = [Defect::Tubes { of, size: 10.0 }];
    let refused = disturber.try_disturbed(&truth, &flood);
    let why = refused.expect_err("4 kg/s of make-up");
    assert!(why.contains("make-up"), "{why}");
}

/// Mass and energy that cross the plant's edge, in less out.
fn across_the_edge(plant: &Plant, truth: &Truth) -> (f64, f64) {
    let (mut mass, mut energy) = (0.0, 0.0);
    for stream in &plant.streams {
        let flow = truth.streams[&stream.name];
        let sign = match (stream.from, stream.to) {
            (None, _) => 1.0,
            (_, None) => -1.0,
            _ => continue,
        };
        mass += sign * flow.mass_flow;
        energy += sign * flow.mass_flow * flow.enthalpy;
    }
    let machine = |name: &str| truth.equipment[name];
    // The drain pump has no motor in the plant file: its work comes from outside.
    energy += machine("boiler").heat.expect("heat")
        + machine("generator-cooler").heat.expect("heat")
        + machine("drain-pump").work.expect("work")
        + machine("condensate-motor").power.expect("power")
        - machine("generator").power.expect("power");
    let losses = truth.equipment.values().filter_map(|m| m.loss);
    energy -= losses.sum::<f64>();
    let stored = machine("deaerator").holdup_change.expect("a level");
    mass -= stored;
    energy -= stored * truth.streams["deaerator-outlet"].enthalpy;
    (mass, energy)
}

#[test]
fn the_whole_plant_closes_with_the_leak_counted() {
    let (disturber, truth) = setting(0.9);
    let plant = disturber.plant();
    let boiler = truth.equipment["boiler"].heat.expect("heat");
    let live = truth.streams["live-steam"].mass_flow;
    let closes = |name: &str, truth: &Truth, flow: f64, heat: f64| {
        let (mass, energy) = across_the_edge(plant, truth);
        assert!((mass - flow).abs() < 1e-9 * live, "{name}: {mass} kg/s");
        assert!((energy - heat).abs() < 1e-9 * boiler, "{name}: {energy} kW");
    };
    closes("no leak", &truth, 0.0, 0.0);
    // Side, and the stream whose enthalpy leaks out of it.
    for (name, side, carrier) in [
        ("boiler", "water", "live-steam"),
        ("boiler", "reheat-1", "hot-reheat"),
        ("governing-valve", "flow", "live-steam"),
        ("turbine-hp", "flow", "chest-steam"),
        ("gland-header", "flow", "gland-steam"),
        ("gland-condenser", "steam", "gland-steam"),
        ("condenser", "steam", "condensate"),
        ("condenser", "cooling", "cooling-in"),
        ("deaerator", "flow", "deaerator-outlet"),
        ("feed-tee", "flow", "feed-discharge"),
        ("drain-6-tee", "flow", "drain-6"),
        ("heater-6", "steam", "drain-6"),
        ("heater-6", "tube", "feed-5"),
    ] {
        let of = equipment(plant, name);
        let size = bearable(plant, of);
        let side = side.to_owned();
        let leaky = disturber.disturbed(&truth, &[Defect::Leak { of, side, size }]);
        let heat = size * leaky.streams[carrier].enthalpy;
        closes(name, &leaky, size, heat);
    }
    for of in disturber.with_tubes() {
        let leaky = disturber.disturbed(&truth, &[Defect::Tubes { of, size: 1.0 }]);
        closes(&plant.equipment[of.0].name, &leaky, 0.0, 0.0);
    }
    for name in ["heater-3", "turbine-lp", "generator", "bfp-shaft"] {
        let of = equipment(plant, name);
        let losing = disturber.disturbed(&truth, &[Defect::HeatLoss { of, size: 300.0 }]);
        closes(name, &losing, 0.0, 300.0);
    }
}

#[test]
fn what_operators_set_and_what_was_assumed_stays() {
    let (disturber, truth) = setting(0.9);
    let plant = disturber.plant();
    let of = equipment(plant, "heater-7");
    let leaky = disturber.disturbed(&truth, &[Defect::Tubes { of, size: 2.0 }]);
    for name in ["live-steam", "cooling-in"] {
        let (before, after) = (truth.streams[name], leaky.streams[name]);
        assert!((before.mass_flow - after.mass_flow).abs() < 1e-9 * before.mass_flow);
        assert!((before.enthalpy - after.enthalpy).abs() < 1e-9 * before.enthalpy);
    }
    assert_eq!(truth.assumptions, leaky.assumptions);
    // A truth close by: the disturbance is of the order of the leak.
    for (name, flow) in streams(plant, &truth) {
        let change = (leaky.streams[name].mass_flow - flow.mass_flow).abs();
        assert!(change < 4.0, "{name}: {change} kg/s");
    }
}

#[test]
fn an_assumption_departs_by_its_sigmas() {
    let plant = demo::lined_up(LineUp::default()).expect("no faults");
    let mut assumed = Assumed::stated(&plant);
    assumed.shift(&plant, "heater-7-loss", -2.0);
    let truth = demo::truth(&Conditions::at_load(0.9), &assumed).expect("settles");
    let loss = truth.equipment["heater-7"].loss.expect("a loss");
    // 40 kW with 30 kW at 95 %.
    assert!(
        (loss - (40.0 - 2.0 * 30.0 / 1.959_964)).abs() < 1e-4,
        "{loss}"
    );
    check_with(&plant, &truth, &Departures::default());
}

#[test]
fn wrong_models_are_wrong_in_what_they_say_and_in_nothing_else() {
    let (disturber, truth) = setting(0.9);
    let plant = disturber.plant();
    let mut models = wrong_models(&disturber);
    assert_eq!(models.len(), 4);
    models.push(all_together(&models));
    for model in &models {
        let (wrong, faults) = model.apply(&disturber, &truth);
        check(plant, &wrong, &model.defects);
        assert_eq!(faults.len(), model.water_legs.len(), "{}", model.name);
        if model.defects.is_empty() {
            assert_eq!(wrong, truth, "{}", model.name);
        }
    }
    let (wrong, faults) = models[4].apply(&disturber, &truth);
    let drain = wrong.streams["drain-2"];
    let line = fluid::saturation(drain.pressure).expect("in range");
    assert!((line.t - drain.temperature - 2.0).abs() < 1e-6);

    // 3 m of water at 20 Cel and 998.2 kg/m3 are 0.2937 bar.
    assert!((wrong_models::pressure_of(3.0) - 0.029_37).abs() < 1e-5);
    let [(tag, Fault::Bias(sigmas))] = &faults[..] else {
        panic!("one water leg: {faults:?}");
    };
    let tag = plant.tags.iter().find(|t| t.name == *tag).expect("a tag");
    let sigma = tag.uncertainty.sigma(2330.0).expect("a sigma").get();
    assert!(
        (sigmas * sigma - 293.7).abs() < 0.1,
        "{} mbar",
        sigmas * sigma
    );
}
