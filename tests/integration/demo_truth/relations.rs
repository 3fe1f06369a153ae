//! The relations of the design's table of equipment, written a second time for
//! the tests: from the parsed plant and a truth, as lists of signed terms that
//! have to add up to zero.

use counterpoise::demo::{Flow, Truth};
use counterpoise::fluid;
use counterpoise::plant::{EquipmentId, Kind, Plant, StreamId};

/// One relation: signed terms that add up to zero.
pub struct Relation {
    pub name: String,
    terms: Vec<f64>,
    /// What the terms are held against where all of them are nothing.
    least_scale: f64,
}

impl Relation {
    /// Absolute sum over the largest term.
    pub fn relative_residual(&self) -> f64 {
        let terms = self.terms.iter();
        let scale = terms.fold(self.least_scale, |m, t| m.max(t.abs()));
        let sum: f64 = self.terms.iter().sum();
        if sum == 0.0 { 0.0 } else { sum.abs() / scale }
    }
}

/// What a plant does beside what its plant file says.
#[derive(Default)]
pub struct Departures {
    /// Mass that leaves a side by no stream.
    pub away: Vec<Away>,
    /// Heat or power that leaves, kW.
    pub lost: Vec<(EquipmentId, f64)>,
    /// Streams below the saturation that is declared, K.
    pub subcooled: Vec<(StreamId, f64)>,
    /// What flows through streams that are normally closed, kg/s.
    pub passing: Vec<(StreamId, f64)>,
}

/// Mass that leaves a side by no stream, or enters it where it is negative.
pub struct Away {
    pub of: EquipmentId,
    pub side: String,
    /// kg/s.
    pub flow: f64,
    /// kJ/kg; as the single inlet, failing that the first outlet, where it is `None`.
    pub enthalpy: Option<f64>,
}

/// Collects the relations of one piece of equipment.
struct Balance<'a> {
    plant: &'a Plant,
    truth: &'a Truth,
    id: EquipmentId,
    departures: &'a Departures,
    /// Energy that leaves with the mass that leaves by no stream, kW.
    energy_away: f64,
    relations: Vec<Relation>,
}

impl Balance<'_> {
    fn flow(&self, id: StreamId) -> Flow {
        self.truth.stream(self.plant, id).expect("a known stream")
    }

    fn add(&mut self, what: &str, terms: Vec<f64>) {
        let name = format!("{}: {what}", self.plant.equipment[self.id.0].name);
        self.relations.push(Relation {
            name,
            terms,
            least_scale: 0.0,
        });
    }

    fn equal(&mut self, what: &str, a: f64, b: f64) {
        self.add(what, vec![a, -b]);
    }

    fn loss(&self) -> f64 {
        self.truth.machine(self.plant, self.id).loss.unwrap_or(0.0)
    }

    fn holdup_change(&self) -> f64 {
        self.truth
            .machine(self.plant, self.id)
            .holdup_change
            .unwrap_or(0.0)
    }

    /// Inlets minus outlets minus what else takes mass away.
    fn mass(&mut self, side: &str, inlets: &[StreamId], outlets: &[StreamId], away: f64) {
        let mut terms = self.signed(inlets, outlets, |flow| flow.mass_flow, away);
        let here = |a: &&Away| a.of == self.id && a.side == side;
        for departure in self.departures.away.iter().filter(here) {
            let carrier = match inlets {
                [single] => *single,
                _ => *outlets.iter().min().expect("a side has an outlet"),
            };
            let enthalpy = departure.enthalpy;
            let enthalpy = enthalpy.unwrap_or_else(|| self.flow(carrier).enthalpy);
            self.energy_away += departure.flow * enthalpy;
            terms.push(-departure.flow);
        }
        self.add("mass", terms);
    }

    /// Inlets minus outlets minus what else takes energy away.
    fn energy(&mut self, inlets: &[StreamId], outlets: &[StreamId], away: &[f64]) {
        let mut terms = self.signed(inlets, outlets, |flow| flow.mass_flow * flow.enthalpy, 0.0);
        terms.extend(away.iter().map(|x| -x));
        terms.extend([-self.energy_away, -self.lost()]);
        self.add("energy", terms);
    }

    /// Heat or power that leaves unstated.
    fn lost(&self) -> f64 {
        let here = self.departures.lost.iter().filter(|(of, _)| *of == self.id);
        here.map(|(_, lost)| lost).sum()
    }

    fn signed(
        &self,
        inlets: &[StreamId],
        outlets: &[StreamId],
        term: impl Fn(Flow) -> f64,
        away: f64,
    ) -> Vec<f64> {
        let of = |ids: &[StreamId]| {
            ids.iter()
                .map(|id| term(self.flow(*id)))
                .collect::<Vec<_>>()
        };
        let mut terms = of(inlets);
        terms.extend(of(outlets).into_iter().map(|x| -x));
        terms.push(-away);
        terms
    }

    fn same_pressure(&mut self, ids: &[StreamId]) {
        for pair in ids.windows(2) {
            let [a, b] = [self.flow(pair[0]), self.flow(pair[1])];
            self.equal("pressure", a.pressure, b.pressure);
        }
    }

    fn same_enthalpy(&mut self, ids: &[StreamId]) {
        for pair in ids.windows(2) {
            let [a, b] = [self.flow(pair[0]), self.flow(pair[1])];
            self.equal("enthalpy", a.enthalpy, b.enthalpy);
        }
    }

    fn saturated_liquid(&mut self, id: StreamId) {
        let flow = self.flow(id);
        let line = fluid::saturation(flow.pressure).expect("below critical");
        let mut departures = self.departures.subcooled.iter();
        let h = match departures.find(|(stream, _)| *stream == id) {
            None => line.liquid.h,
            Some((_, kelvin)) => {
                let cooler = fluid::from_pt(flow.pressure, line.t - kelvin);
                cooler.expect("in range").h
            }
        };
        self.equal("saturated liquid", flow.enthalpy, h);
    }

    /// Dry saturated steam at the pressure of its vessel.
    fn vent(&mut self, vent: Option<StreamId>, vessel: StreamId) {
        if let Some(id) = vent {
            self.same_pressure(&[vessel, id]);
            let flow = self.flow(id);
            let h = fluid::saturation(flow.pressure)
                .expect("below critical")
                .vapour
                .h;
            self.equal("dry saturated vent", flow.enthalpy, h);
        }
    }

    fn work_of(&self, id: EquipmentId) -> f64 {
        self.truth
            .machine(self.plant, id)
            .work
            .expect("a turbine or pump has work")
    }
}

fn join(lists: &[&[StreamId]]) -> Vec<StreamId> {
    lists.concat()
}

/// Every relation of the design's table for one piece of equipment.
pub fn relations(plant: &Plant, truth: &Truth, id: EquipmentId) -> Vec<Relation> {
    relations_with(plant, truth, id, &Departures::default())
}

/// The same for a plant that is not quite what its plant file says.
pub fn relations_with(
    plant: &Plant,
    truth: &Truth,
    id: EquipmentId,
    departures: &Departures,
) -> Vec<Relation> {
    let mut b = Balance {
        plant,
        truth,
        id,
        departures,
        energy_away: 0.0,
        relations: Vec::new(),
    };
    let own = truth.machine(plant, id);
    let (loss, holdup) = (b.loss(), b.holdup_change());
    match &plant.equipment[id.0].kind {
        Kind::Mixer { inlets, outlet } => {
            b.mass("flow", inlets, &[*outlet], 0.0);
            b.energy(inlets, &[*outlet], &[loss]);
        }
        Kind::Splitter { inlet, outlets } => {
            b.mass("flow", &[*inlet], outlets, 0.0);
            b.same_enthalpy(&join(&[&[*inlet], outlets]));
            b.same_pressure(&join(&[&[*inlet], outlets]));
        }
        Kind::Header {
            inlets,
            outlets,
            well_mixed,
        } => {
            b.mass("flow", inlets, outlets, 0.0);
            b.energy(inlets, outlets, &[loss]);
            b.same_pressure(&join(&[inlets, outlets]));
            if *well_mixed {
                b.same_enthalpy(outlets);
            }
        }
        Kind::Valve { inlet, outlet } => {
            b.mass("flow", &[*inlet], &[*outlet], 0.0);
            b.same_enthalpy(&[*inlet, *outlet]);
        }
        Kind::Pump { inlet, outlet } => {
            b.mass("flow", &[*inlet], &[*outlet], 0.0);
            b.energy(&[*inlet], &[*outlet], &[-b.work_of(id), loss]);
        }
        Kind::Turbine { inlets, outlets } => {
            b.mass("flow", inlets, outlets, 0.0);
            b.energy(inlets, outlets, &[b.work_of(id), loss]);
        }
        Kind::ClosedHeater {
            steam,
            drains_in,
            drain_out,
            tube_in,
            tube_out,
            vent,
            drain_saturated,
        } => {
            let shell_in = join(&[&[*steam], drains_in]);
            let shell_out = join(&[&[*drain_out], vent.as_slice()]);
            b.mass("steam", &shell_in, &shell_out, 0.0);
            b.mass("tube", &[*tube_in], &[*tube_out], 0.0);
            let (inlets, outlets) = (
                join(&[&shell_in, &[*tube_in]]),
                join(&[&shell_out, &[*tube_out]]),
            );
            b.energy(&inlets, &outlets, &[loss]);
            b.same_pressure(&[*steam, *drain_out]);
            if *drain_saturated {
                b.saturated_liquid(*drain_out);
            }
            b.vent(*vent, *steam);
        }
        Kind::OpenHeater {
            inlets,
            outlet,
            vent,
            outlet_saturated,
        } => {
            let outlets = join(&[&[*outlet], vent.as_slice()]);
            let stored = holdup * b.flow(*outlet).enthalpy;
            b.mass("flow", inlets, &outlets, holdup);
            b.energy(inlets, &outlets, &[loss, stored]);
            if *outlet_saturated {
                b.saturated_liquid(*outlet);
            }
            b.vent(*vent, *outlet);
        }
        Kind::Condenser {
            steam,
            condensate,
            cooling,
            vent,
            condensate_saturated,
        } => {
            let shell_out = join(&[&[*condensate], vent.as_slice()]);
            b.mass("steam", steam, &shell_out, holdup);
            let (mut inlets, mut outlets) = (steam.clone(), shell_out);
            let mut away = vec![loss, holdup * b.flow(*condensate).enthalpy];
            match cooling {
                Some((cold, warm)) => {
                    b.mass("cooling", &[*cold], &[*warm], 0.0);
                    inlets.push(*cold);
                    outlets.push(*warm);
                }
                None => away.push(own.heat.expect("heat rejected")),
            }
            b.energy(&inlets, &outlets, &away);
            if *condensate_saturated {
                b.saturated_liquid(*condensate);
            }
            b.vent(*vent, *condensate);
        }
        Kind::Exchanger { hot, cold } => {
            for (side, ends) in [("hot", hot), ("cold", cold)] {
                if let Some((inlet, outlet)) = ends {
                    b.mass(side, &[*inlet], &[*outlet], 0.0);
                }
            }
            let sides = hot.iter().chain(cold).copied();
            let (inlets, outlets): (Vec<_>, Vec<_>) = sides.unzip();
            let away = match (hot, cold) {
                (Some(_), Some(_)) => loss,
                // With one side alone the heat is that which this side gains or gives.
                (None, _) => -own.heat.expect("heat taken up"),
                (_, None) => own.heat.expect("heat given"),
            };
            b.energy(&inlets, &outlets, &[away]);
        }
        Kind::Boiler {
            water_in,
            water_out,
            reheats,
        } => {
            b.mass("water", water_in, water_out, holdup);
            let (mut inlets, mut outlets) = (water_in.clone(), water_out.clone());
            for (n, (reheat_in, reheat_out)) in reheats.iter().enumerate() {
                b.mass(&format!("reheat-{}", n + 1), reheat_in, &[*reheat_out], 0.0);
                inlets.extend(reheat_in);
                outlets.push(*reheat_out);
            }
            b.energy(&inlets, &outlets, &[-own.heat.expect("a boiler has heat")]);
        }
        Kind::Generator { driven_by } => {
            let mut terms: Vec<f64> = driven_by.iter().map(|t| b.work_of(*t)).collect();
            terms.extend([-loss, -b.lost(), -own.power.expect("a generator has power")]);
            b.add("power", terms);
        }
        Kind::Shaft { drivers, driven } => {
            let mut terms: Vec<f64> = drivers.iter().map(|t| b.work_of(*t)).collect();
            terms.extend(driven.iter().map(|p| -b.work_of(*p)));
            terms.extend([-loss, -b.lost()]);
            b.add("power", terms);
        }
        Kind::Motor { drives } => {
            let power = own.power.expect("a motor has power");
            b.add("power", vec![power, -b.work_of(*drives), -loss, -b.lost()]);
        }
    }
    b.relations
}

/// Flow of every stream that is normally closed: none, or what passes.
pub fn closed(plant: &Plant, truth: &Truth, departures: &Departures) -> Vec<Relation> {
    let streams = plant.streams.iter().enumerate();
    let closed = streams.filter(|(_, stream)| stream.normally_closed);
    let relations = closed.map(|(s, stream)| {
        let here = departures.passing.iter().filter(|(of, _)| of.0 == s);
        let mut terms: Vec<f64> = here.map(|(_, flow)| -flow).collect();
        terms.push(truth.streams[&stream.name].mass_flow);
        Relation {
            name: format!("{}: normally closed", stream.name),
            terms,
            least_scale: 1.0,
        }
    });
    relations.collect()
}
