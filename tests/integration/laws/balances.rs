//! Balances: recomputed from the numbers of a report, and imbalances against
//! leaks and losses that are really there.

use super::workbench::{
    Distance, HEATER, batch, demo_truth, everyday, near_truth, read, run, statistic, without,
};
use counterpoise::fluid;
use counterpoise::plant::{
    Assumption, COVERAGE_FACTOR, EquipmentId, Kind, Plant, PressureReference, Quantity, Stream,
    StreamId, Uncertainty, Unit,
};
use counterpoise::report::{EquipmentReport, QuantityReport, Report};

/// Agreement of an imbalance with a solution without that balance, in
/// uncertainties; readings are 0.05 sigma from exact.
const LET_GO: f64 = 2e-3;
/// Accuracy promised for uncertainties.
const UNCERTAINTIES: f64 = 5e-3;

/// Signed terms that have to add up to zero; `None` where a report leaves one
/// of them open.
type Terms = Option<Vec<f64>>;

struct Books<'a> {
    plant: &'a Plant,
    report: &'a Report,
    id: EquipmentId,
}

impl Books<'_> {
    fn flow(&self, id: StreamId) -> Option<f64> {
        self.report.streams[&self.plant.streams[id.0].name]
            .mass_flow
            .value
    }

    fn heat_flow(&self, id: StreamId) -> Option<f64> {
        let stream = &self.report.streams[&self.plant.streams[id.0].name];
        Some(stream.mass_flow.value? * stream.enthalpy.value?)
    }

    /// An own state of `of`; a state that the kind does not have is zero.
    fn own(
        &self,
        of: EquipmentId,
        pick: impl Fn(&EquipmentReport) -> &Option<QuantityReport>,
    ) -> Option<f64> {
        let entry = &self.report.equipment[&self.plant.equipment[of.0].name];
        pick(entry)
            .as_ref()
            .map_or(Some(0.0), |quantity| quantity.value)
    }

    fn mass(&self, inlets: &[StreamId], outlets: &[StreamId], holdup: bool) -> Terms {
        let inlets = inlets.iter().map(|&s| self.flow(s));
        let outlets = outlets.iter().map(|&s| Some(-self.flow(s)?));
        let stored = holdup.then(|| Some(-self.own(self.id, |e| &e.holdup_change)?));
        inlets.chain(outlets).chain(stored).collect()
    }

    /// In less out of enthalpy, less what is stored, less heat and loss out,
    /// plus heat in, less the work of turbines, plus that of pumps.
    fn energy(
        &self,
        inlets: &[StreamId],
        outlets: &[StreamId],
        heat: f64,
        work: f64,
        holdup_of: Option<f64>,
    ) -> Terms {
        let inlets = inlets.iter().map(|&s| self.heat_flow(s));
        let outlets = outlets.iter().map(|&s| Some(-self.heat_flow(s)?));
        let own = [
            self.own(self.id, |e| &e.heat).map(|q| heat * q),
            self.own(self.id, |e| &e.work).map(|w| work * w),
            self.own(self.id, |e| &e.loss).map(|l| -l),
            self.own(self.id, |e| &e.holdup_change)
                .map(|m| -m * holdup_of.unwrap_or(0.0)),
        ];
        inlets.chain(outlets).chain(own).collect()
    }

    fn power(&self, drivers: &[EquipmentId], driven: &[EquipmentId], sign_of_power: f64) -> Terms {
        let drivers = drivers.iter().map(|&e| self.own(e, |e| &e.work));
        let driven = driven.iter().map(|&e| Some(-self.own(e, |e| &e.work)?));
        let own = [
            self.own(self.id, |e| &e.power).map(|p| sign_of_power * p),
            self.own(self.id, |e| &e.loss).map(|l| -l),
        ];
        drivers.chain(driven).chain(own).collect()
    }

    fn enthalpy(&self, id: StreamId) -> Option<f64> {
        self.report.streams[&self.plant.streams[id.0].name]
            .enthalpy
            .value
    }

    /// Every balance of the piece of equipment, straight from the design's table.
    fn balances(&self) -> Vec<Terms> {
        let with = |id: StreamId, vent: Option<StreamId>| -> Vec<StreamId> {
            std::iter::once(id).chain(vent).collect()
        };
        let join = |parts: &[&[StreamId]]| parts.concat();
        match &self.plant.equipment[self.id.0].kind {
            Kind::Mixer { inlets, outlet } => {
                vec![
                    self.mass(inlets, &[*outlet], false),
                    self.energy(inlets, &[*outlet], 0.0, 0.0, None),
                ]
            }
            Kind::Splitter { inlet, outlets } => {
                let equal = outlets
                    .iter()
                    .map(|&s| Some(vec![self.enthalpy(*inlet)?, -self.enthalpy(s)?]));
                equal
                    .chain([self.mass(&[*inlet], outlets, false)])
                    .collect()
            }
            Kind::Header {
                inlets, outlets, ..
            } => {
                vec![
                    self.mass(inlets, outlets, false),
                    self.energy(inlets, outlets, 0.0, 0.0, None),
                ]
            }
            Kind::Valve { inlet, outlet } => {
                let equal = || Some(vec![self.enthalpy(*inlet)?, -self.enthalpy(*outlet)?]);
                vec![self.mass(&[*inlet], &[*outlet], false), equal()]
            }
            Kind::Pump { inlet, outlet } => {
                vec![
                    self.mass(&[*inlet], &[*outlet], false),
                    self.energy(&[*inlet], &[*outlet], 0.0, 1.0, None),
                ]
            }
            Kind::Turbine { inlets, outlets } => {
                vec![
                    self.mass(inlets, outlets, false),
                    self.energy(inlets, outlets, 0.0, -1.0, None),
                ]
            }
            Kind::ClosedHeater {
                steam,
                drains_in,
                drain_out,
                tube_in,
                tube_out,
                vent,
                ..
            } => {
                let (shell_in, shell_out) =
                    (join(&[&[*steam], drains_in]), with(*drain_out, *vent));
                vec![
                    self.mass(&shell_in, &shell_out, false),
                    self.mass(&[*tube_in], &[*tube_out], false),
                    self.energy(
                        &join(&[&shell_in, &[*tube_in]]),
                        &join(&[&shell_out, &[*tube_out]]),
                        0.0,
                        0.0,
                        None,
                    ),
                ]
            }
            Kind::OpenHeater {
                inlets,
                outlet,
                vent,
                ..
            } => {
                let outlets = with(*outlet, *vent);
                vec![
                    self.mass(inlets, &outlets, true),
                    self.energy(inlets, &outlets, 0.0, 0.0, self.enthalpy(*outlet)),
                ]
            }
            Kind::Condenser {
                steam,
                condensate,
                cooling,
                vent,
                ..
            } => {
                let (mut inlets, mut outlets) = (steam.clone(), with(*condensate, *vent));
                let mut balances = vec![self.mass(&inlets, &outlets, true)];
                if let Some((into, out)) = cooling {
                    balances.push(self.mass(&[*into], &[*out], false));
                    inlets.push(*into);
                    outlets.push(*out);
                }
                balances.push(self.energy(
                    &inlets,
                    &outlets,
                    -1.0,
                    0.0,
                    self.enthalpy(*condensate),
                ));
                balances
            }
            Kind::Exchanger { hot, cold } => {
                let sides: Vec<(StreamId, StreamId)> = hot.iter().chain(cold).copied().collect();
                let (inlets, outlets): (Vec<_>, Vec<_>) = sides.iter().copied().unzip();
                let heat = if hot.is_some() { -1.0 } else { 1.0 };
                let masses = sides
                    .iter()
                    .map(|&(into, out)| self.mass(&[into], &[out], false));
                masses
                    .chain([self.energy(&inlets, &outlets, heat, 0.0, None)])
                    .collect()
            }
            Kind::Boiler {
                water_in,
                water_out,
                reheats,
            } => {
                // No plant here states a boiler's holdup.
                let mut balances = vec![self.mass(water_in, water_out, true)];
                let (mut inlets, mut outlets) = (water_in.clone(), water_out.clone());
                for (into, out) in reheats {
                    balances.push(self.mass(into, &[*out], false));
                    inlets.extend(into);
                    outlets.push(*out);
                }
                balances.push(self.energy(&inlets, &outlets, 1.0, 0.0, None));
                balances
            }
            Kind::Generator { driven_by } => vec![self.power(driven_by, &[], -1.0)],
            Kind::Shaft { drivers, driven } => vec![self.power(drivers, driven, 0.0)],
            Kind::Motor { drives } => vec![self.power(&[], &[*drives], 1.0)],
        }
    }
}

#[test]
fn reports_conserve_mass_and_energy() {
    let (mut checked, mut open, mut worst) = (0, 0, 0.0);
    for (plant, batch) in everyday() {
        let report = run(&plant, &batch);
        for id in (0..plant.equipment.len()).map(EquipmentId) {
            for terms in (Books {
                plant: &plant,
                report: &report,
                id,
            })
            .balances()
            {
                let Some(terms) = terms else {
                    open += 1;
                    continue;
                };
                checked += 1;
                let sum: f64 = terms.iter().sum();
                let largest = terms.iter().fold(0.0, |m: f64, t| m.max(t.abs()));
                worst = f64::max(
                    worst,
                    if largest > 0.0 {
                        sum.abs() / largest
                    } else {
                        0.0
                    },
                );
                assert!(
                    sum.abs() <= 1e-8 * largest,
                    "{} {} {}: {terms:?}",
                    plant.name,
                    batch.name,
                    plant.equipment[id.0].name
                );
            }
        }
    }
    println!("{checked} balances hold to {worst:e}; {open} have a term that is unobservable");
    assert!(checked > 400);
}

/// Readings of a heater that really loses `loss` kW and `leak` kg/s of feed
/// water behind its tubes, in the order of the plant file.
fn leaky_heater(loss: f64, leak: f64) -> [(&'static str, f64); 11] {
    let (steam, cold, drain) = (
        fluid::from_pt(0.2, 273.15 + 150.0).expect("steam"),
        fluid::from_pt(1.5, 273.15 + 60.0).expect("water"),
        fluid::saturation(0.2).expect("saturation"),
    );
    let (flow, feed) = (10.0, 110.0);
    let warm = cold.h + (flow * (steam.h - drain.liquid.h) - loss) / feed;
    let warm = fluid::from_ph(1.4, warm).expect("water");
    [
        ("F-STEAM", 3.6 * flow),
        ("P-STEAM", 2.0),
        ("T-STEAM", 150.0),
        ("F-DRAIN", 3.6 * flow),
        ("T-DRAIN", drain.t - 273.15),
        ("F-COLD", 3.6 * feed),
        ("P-COLD", 15.0),
        ("T-COLD", 60.0),
        ("F-WARM", 3.6 * (feed - leak)),
        ("P-WARM", 14.0),
        ("T-WARM", warm.t - 273.15),
    ]
}

#[test]
fn a_loss_comes_back_as_the_imbalance_of_energy() {
    let plant = read(HEATER);
    assert!(statistic(&run(&plant, &batch(leaky_heater(0.0, 0.0)))) < 1e-9);
    for loss in [-20.0, 5.0, 40.0] {
        let report = run(&plant, &batch(leaky_heater(loss, 0.0)));
        let energy = report.equipment["heater"]
            .imbalance
            .energy
            .as_ref()
            .expect("a balance");
        let (value, uncertainty) = (
            energy.value.expect("checked"),
            energy.uncertainty.expect("checked"),
        );
        // First order: the loss moves the point of linearisation.
        assert!((value / loss - 1.0).abs() < 2e-3, "{value}, really {loss}");
        let standardised = energy.standardised.expect("checked");
        assert!(
            (standardised - COVERAGE_FACTOR * value / uncertainty).abs()
                < 1e-9 * standardised.abs()
        );
        assert!(
            (standardised.powi(2) / statistic(&report) - 1.0).abs() < 5e-3,
            "nothing else is wrong"
        );
    }
}

#[test]
fn a_leak_comes_back_as_the_imbalance_of_mass() {
    // Heat flow would tell of the leak too; without the temperatures of the
    // shell only flows do, and the answer is exact.
    let plant = read(&without(HEATER, &["T-STEAM", "T-DRAIN"]));
    for leak in [-0.3, 0.2, 4.0] {
        let report = run(&plant, &batch(leaky_heater(0.0, leak)));
        let tube = &report.equipment["heater"].imbalance.mass["tube"];
        let value = tube.value.expect("checked");
        assert!((value / leak - 1.0).abs() < 1e-6, "{value}, really {leak}");
        let shell = report.equipment["heater"].imbalance.mass["steam"]
            .value
            .expect("checked");
        assert!(shell.abs() < 1e-6, "{shell}");
    }
}

fn unit(symbol: &str, factor: f64) -> Unit {
    Unit {
        symbol: symbol.to_owned(),
        factor,
        offset: 0.0,
    }
}

fn assume(plant: &mut Plant, quantity: Quantity, value: f64, half_width: f64) {
    let uncertainty = Uncertainty {
        constant: half_width,
        ..Uncertainty::default()
    };
    let name = format!("let-go-{}", plant.assumptions.len());
    plant.assumptions.push(Assumption {
        name,
        quantity,
        unit: unit("1", 1.0),
        value,
        uncertainty,
        in_service_when: None,
    });
}

/// An imbalance is what a balance would miss if it alone were let go. Here it is
/// let go, by a loss of which next to nothing is known, and the loss that the
/// estimator finds is the imbalance, with its uncertainty.
#[test]
fn imbalances_of_energy_are_losses_let_go() {
    let (plant, truth) = demo_truth(0.85);
    let batch = near_truth(&plant, &truth, 0.05, 21);
    let before = run(&plant, &batch);
    let mut tested = 0;
    let mut found = Distance::default();
    for (e, equipment) in plant.equipment.iter().enumerate() {
        let stated = plant.assumptions.iter().any(
            |a| matches!(a.quantity, Quantity::HeatLoss(of) | Quantity::Loss(of) if of.0 == e),
        );
        let imbalance = before.equipment[&equipment.name].imbalance.energy.as_ref();
        let Some((value, uncertainty)) = imbalance.and_then(|i| Some((i.value?, i.uncertainty?)))
        else {
            continue;
        };
        if stated || !equipment.kind.has_loss() {
            continue;
        }
        tested += 1;
        let mut open = plant.clone();
        assume(
            &mut open,
            Quantity::HeatLoss(EquipmentId(e)),
            0.0,
            1e4 * uncertainty,
        );
        let after = run(&open, &batch);
        let loss = after.equipment[&equipment.name]
            .loss
            .as_ref()
            .expect("it has one");
        found.value(&equipment.name, loss.value, Some(value), uncertainty);
        found.spread(
            &equipment.name,
            loss.uncertainty,
            Some(uncertainty),
            uncertainty,
        );
    }
    assert!(tested >= 5, "{tested}");
    found.assert_below(LET_GO, UNCERTAINTIES, &format!("{tested} energy balances"));
}

/// The same for mass: a leak that carries no energy, of which next to nothing
/// is known; and with a leak of known size the statistic follows the parabola
/// that the multiplier and its variance describe.
#[test]
fn imbalances_of_mass_are_leaks_let_go() {
    let (plant, truth) = demo_truth(0.85);
    let batch = near_truth(&plant, &truth, 0.05, 22);
    let before = run(&plant, &batch);
    for name in ["turbine-hp", "turbine-ip", "boiler", "cold-reheat-tee"] {
        let sides = &before.equipment[name].imbalance.mass;
        let side = &sides[if name == "boiler" { "water" } else { "flow" }];
        let (value, uncertainty) = (
            side.value.expect("checked"),
            side.uncertainty.expect("checked"),
        );
        let leaking =
            |flow: f64, half_width: f64| run(&with_leak(&plant, name, flow, half_width), &batch);
        let after = leaking(0.0, 1e4 * uncertainty);
        let leak = &after.streams["leak"].mass_flow;
        let mut found = Distance::default();
        found.value(name, leak.value, Some(value), uncertainty);
        found.spread(name, leak.uncertainty, Some(uncertainty), uncertainty);
        found.assert_below(LET_GO, UNCERTAINTIES, name);
        let sigma = uncertainty / COVERAGE_FACTOR;
        let step = 0.05 * sigma;
        let (more, less) = (
            statistic(&leaking(step, 1e-4 * sigma)),
            statistic(&leaking(-step, 1e-4 * sigma)),
        );
        let slope = (more - less) / (2.0 * step);
        let multiplier = -2.0 * value / (sigma * sigma);
        let scale = 2.0 / sigma * 0.05;
        assert!(
            (slope - multiplier).abs() < 2e-2 * scale,
            "{name}: slope {slope}, not {multiplier}"
        );
    }
}

/// The plant with one more outlet of `name` that carries (almost) no energy.
fn with_leak(plant: &Plant, name: &str, flow: f64, half_width: f64) -> Plant {
    let mut plant = plant.clone();
    let id = StreamId(plant.streams.len());
    let from = plant
        .equipment
        .iter()
        .position(|e| e.name == name)
        .map(EquipmentId);
    plant.streams.push(Stream {
        name: "leak".to_owned(),
        from,
        to: None,
        non_negative: false,
        normally_closed: false,
        in_service_when: None,
    });
    let kind = &mut plant.equipment[from.expect("equipment").0].kind;
    match kind {
        Kind::Turbine { outlets, .. } | Kind::Splitter { outlets, .. } => outlets.push(id),
        Kind::Boiler { water_out, .. } => water_out.push(id),
        other => panic!("no outlet to add to {other:?}"),
    }
    assume(&mut plant, Quantity::MassFlow(id), flow, half_width);
    // A tee's outlet has its inlet's state, and takes no energy from any balance.
    if name != "cold-reheat-tee" {
        let quantity = Quantity::Pressure(id, PressureReference::Absolute);
        assume(&mut plant, quantity, 0.1, 1e-3);
        assume(&mut plant, Quantity::Enthalpy(id), 0.2, 1e-3);
    }
    plant
}
