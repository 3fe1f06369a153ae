//! The heat balance of the whole unit.
//!
//! Bleed flows and condenser pressure set the turbine's pressures, these set
//! the heaters' temperatures, and these the bleed flows: a fixed point x = F(x)
//! of ten unknowns, which F contracts by about ten a turn. It is turned until
//! nothing moves beyond rounding, so that every relation holds to about 1e-12.

use std::collections::BTreeMap;

use super::cold_end::ColdEnd;
use super::design::{self, Conditions};
use super::expansion::{Expansion, SteamFlows};
use super::feed::FeedTrain;
use super::{Assumed, Error, Flow, Machine, Truth};
use crate::fluid::{self, State};

/// The unknowns of the fixed point: flows in kg/s, the enthalpy of the
/// condensate ahead of heater 3 in kJ/kg, the condenser pressure in MPa.
#[derive(Clone, Copy)]
pub(super) struct Guess {
    pub(super) bleed_7: f64,
    pub(super) bleed_6: f64,
    pub(super) bleed_5: f64,
    pub(super) deaerator_steam: f64,
    pub(super) bfpt_steam: f64,
    pub(super) bleed_3: f64,
    pub(super) bleed_2: f64,
    pub(super) bleed_1: f64,
    pub(super) mixed_enthalpy: f64,
    pub(super) condenser_pressure: f64,
}

impl Guess {
    /// Shares of the live-steam flow that any such unit has.
    fn first(load: f64) -> Self {
        let live = design::RATED_FLOW * load;
        Guess {
            bleed_7: 0.06 * live,
            bleed_6: 0.07 * live,
            bleed_5: 0.04 * live,
            deaerator_steam: 0.04 * live,
            bfpt_steam: 0.04 * live,
            bleed_3: 0.04 * live,
            bleed_2: 0.04 * live,
            bleed_1: 0.03 * live,
            mixed_enthalpy: 330.0,
            condenser_pressure: 0.004,
        }
    }

    fn next(feed: &FeedTrain, cold_end: &ColdEnd) -> Self {
        Guess {
            bleed_7: feed.bleed_7,
            bleed_6: feed.bleed_6,
            bleed_5: feed.bleed_5,
            deaerator_steam: feed.deaerator_steam,
            bfpt_steam: feed.bfpt_steam,
            bleed_3: feed.bleed_3,
            bleed_2: feed.bleed_2,
            bleed_1: feed.bleed_1,
            mixed_enthalpy: feed.condensate_mixed.h,
            condenser_pressure: cold_end.pressure,
        }
    }

    fn values(&self) -> [f64; 10] {
        [
            self.bleed_7,
            self.bleed_6,
            self.bleed_5,
            self.deaerator_steam,
            self.bfpt_steam,
            self.bleed_3,
            self.bleed_2,
            self.bleed_1,
            self.mixed_enthalpy,
            self.condenser_pressure,
        ]
    }

    /// The largest relative difference.
    fn distance(&self, other: &Self) -> f64 {
        self.values()
            .iter()
            .zip(other.values())
            .map(|(a, b)| if *a == b { 0.0 } else { ((a - b) / b).abs() })
            .fold(0.0, f64::max)
    }
}

/// The exact heat balance of the unit at some conditions, with the assumptions
/// at their true values.
///
/// # Errors
/// [`Error::OutOfRange`] or [`Error::NotSettled`] where the unit cannot run
/// like that; loads from 0.5 to 1 with draws within five sigma are safe.
pub fn truth(at: &Conditions, assumed: &Assumed) -> Result<Truth, Error> {
    const SETTLED: f64 = 1e-13;
    const MOST_TURNS: usize = 200;

    let mut guess = Guess::first(at.load);
    for _ in 0..MOST_TURNS {
        let flows = SteamFlows::new(at, assumed, &guess)?;
        let steam = Expansion::new(at, assumed, &guess, &flows)?;
        let feed = FeedTrain::new(at, assumed, &guess, &flows, &steam)?;
        let cold_end = ColdEnd::new(at, assumed, &guess, &flows, &steam, &feed)?;
        let next = Guess::next(&feed, &cold_end);
        if next.distance(&guess) < SETTLED {
            return assemble(at, assumed, &flows, &steam, &feed, &cold_end);
        }
        guess = next;
    }
    Err(Error::NotSettled(at.load))
}

/// Names every stream and works out what the machines do.
fn assemble(
    at: &Conditions,
    assumed: &Assumed,
    flows: &SteamFlows,
    steam: &Expansion,
    feed: &FeedTrain,
    cold_end: &ColdEnd,
) -> Result<Truth, Error> {
    let drain_6 = feed.bleed_7 + feed.bleed_6 - feed.vent_6_flow;
    let drain_2 = feed.bleed_3 + feed.bleed_2;
    let middle = feed.suction_flow - flows.reheat_spray;
    let drum_pressure = design::live_pressure(at.load) + design::superheater_drop(at.load);
    let blowdown = fluid::from_pt(
        drum_pressure,
        fluid::saturation(drum_pressure)?.t - assumed.get("drum-subcooling")?,
    )?;
    let streams: [(&str, f64, State); 61] = [
        ("live-steam", flows.live, steam.live),
        ("chest-steam", flows.live, steam.chest),
        ("hp-exhaust", flows.hp_exhaust, steam.hp_exhaust),
        ("cold-reheat", flows.cold_reheat, steam.hp_exhaust),
        ("reheat-spray", flows.reheat_spray, feed.feed_tap),
        ("hot-reheat", flows.hot_reheat, steam.hot_reheat),
        ("superheat-spray", feed.superheat_spray, feed.feed_discharge),
        ("blowdown", design::blowdown(at.load), blowdown),
        ("site-steam", flows.site, steam.hp_exhaust),
        ("bleed-7", feed.bleed_7, steam.bleed_7),
        ("bleed-6", feed.bleed_6, steam.hp_exhaust),
        ("bleed-5", feed.bleed_5, steam.bleed_5),
        ("bleed-5-shell", feed.bleed_5, steam.bleed_5_shell),
        (
            "bleed-4",
            feed.deaerator_steam + feed.bfpt_steam,
            steam.bleed_4,
        ),
        ("deaerator-line", feed.deaerator_steam, steam.bleed_4),
        (
            "deaerator-steam",
            feed.deaerator_steam,
            steam.deaerator_steam,
        ),
        ("bfpt-steam", feed.bfpt_steam, steam.bleed_4),
        ("ip-exhaust", flows.ip_exhaust, steam.crossover),
        ("crossover", flows.crossover, steam.crossover),
        ("bleed-3", feed.bleed_3, steam.crossover),
        ("bleed-3-shell", feed.bleed_3, steam.bleed_3_shell),
        ("bleed-2", feed.bleed_2, steam.bleed_2),
        ("bleed-1", feed.bleed_1, steam.bleed_1),
        ("lp-exhaust", flows.lp_exhaust, steam.lp_exhaust),
        ("bfpt-exhaust", feed.bfpt_steam, steam.bfpt_exhaust),
        ("hp-leakoff", flows.hp_leakoff, steam.hp_leakoff),
        ("ip-leakoff", flows.ip_leakoff, steam.ip_leakoff),
        ("gland-steam", feed.gland_steam, steam.gland),
        ("gland-drain", feed.gland_steam, feed.gland_drain),
        ("gland-spill", cold_end.gland_spill, steam.gland),
        (
            "gland-spill-low",
            cold_end.gland_spill,
            steam.gland_spill_low,
        ),
        ("condensate", feed.condensate_flow, feed.condensate),
        (
            "condensate-pumped",
            feed.condensate_flow,
            feed.condensate_pumped,
        ),
        (
            "condensate-cooler",
            feed.condensate_flow,
            feed.condensate_cooler,
        ),
        ("condensate-0", feed.condensate_flow, feed.condensate_0),
        ("condensate-1", feed.condensate_flow, feed.condensate_1),
        ("condensate-2", feed.condensate_flow, feed.condensate_2),
        ("condensate-mixed", feed.mixed_flow, feed.condensate_mixed),
        ("condensate-3", feed.mixed_flow, feed.condensate_3),
        ("deaerator-outlet", feed.suction_flow, feed.deaerator_outlet),
        ("feed-tap", feed.suction_flow, feed.feed_tap),
        ("feed-middle", middle, feed.feed_tap),
        ("feed-discharge", middle, feed.feed_discharge),
        ("feed-4", feed.feed_flow, feed.feed_discharge),
        ("feed-5", feed.feed_flow, feed.feed_5),
        ("feed-6", feed.feed_flow, feed.feed_6),
        ("final-feed", feed.feed_flow, feed.final_feed),
        ("drain-7", feed.bleed_7, feed.drain_7),
        ("drain-6", drain_6, feed.drain_6),
        ("drain-6-cascade", drain_6, feed.drain_6),
        ("drain-6-dump", 0.0, feed.drain_6),
        ("drain-5", drain_6 + feed.bleed_5, feed.drain_5),
        ("drain-3", feed.bleed_3, feed.drain_3),
        ("drain-2", drain_2, feed.drain_2),
        ("drain-2-pumped", drain_2, feed.drain_2_pumped),
        ("drain-1", feed.bleed_1, feed.drain_1),
        ("vent-6", feed.vent_6_flow, feed.vent_6),
        (
            "deaerator-vent",
            feed.deaerator_vent_flow,
            feed.deaerator_vent,
        ),
        ("make-up", cold_end.make_up_flow, cold_end.make_up),
        ("cooling-in", design::COOLING_FLOW, cold_end.cooling_in),
        ("cooling-out", design::COOLING_FLOW, cold_end.cooling_out),
    ];
    let bypassed = at.line_up.heater_7_bypassed;
    let ways = [
        in_line(feed, bypassed).to_vec(),
        pumped(feed, at.line_up.second_pump).to_vec(),
    ];
    let gone: &[&str] = if bypassed {
        &["bleed-7", "drain-7"]
    } else {
        &[]
    };
    let streams: BTreeMap<String, Flow> = streams
        .into_iter()
        .chain(ways.concat())
        .filter(|(name, ..)| !gone.contains(name))
        .map(|(name, mass_flow, state)| (name.to_owned(), flow(mass_flow, state)))
        .collect();
    let mut equipment = machines(&streams, assumed)?;
    if bypassed {
        equipment.remove("heater-7");
    }
    if at.line_up.second_pump {
        for name in ["condensate-pump", "condensate-motor"] {
            if let Some(machine) = equipment.remove(name) {
                equipment.insert(format!("{name}-b"), machine);
            }
        }
    }
    Ok(Truth {
        streams,
        equipment,
        barometer: assumed.get("barometer")?,
        assumptions: assumed.clone(),
        line_up: at.line_up,
    })
}

/// The streams on the way through heater 7, or past it.
fn in_line(feed: &FeedTrain, bypassed: bool) -> [(&'static str, f64, State); 2] {
    let names = match bypassed {
        false => ["feed-7", "feed-7-out"],
        true => ["feed-past-7", "feed-past-7-low"],
    };
    let flow = feed.feed_flow;
    [
        (names[0], flow, feed.feed_6),
        (names[1], flow, feed.final_feed),
    ]
}

/// The streams through the condensate pump that runs.
fn pumped(feed: &FeedTrain, second: bool) -> [(&'static str, f64, State); 2] {
    let names = match second {
        false => ["condensate-a", "condensate-a-out"],
        true => ["condensate-b", "condensate-b-out"],
    };
    let flow = feed.condensate_flow;
    [
        (names[0], flow, feed.condensate),
        (names[1], flow, feed.condensate_pumped),
    ]
}

/// Own states of the equipment, from the energy of its streams.
fn machines(
    streams: &BTreeMap<String, Flow>,
    assumed: &Assumed,
) -> Result<BTreeMap<String, Machine>, Error> {
    let energy = |names: &[&str]| -> f64 {
        names
            .iter()
            .filter_map(|name| streams.get(*name))
            .map(|flow| flow.mass_flow * flow.enthalpy)
            .sum()
    };
    let surplus = |inlets: &[&str], outlets: &[&str]| energy(inlets) - energy(outlets);
    let work = |work| Machine {
        work: Some(work),
        ..Machine::default()
    };
    let loss = |loss| Machine {
        loss: Some(loss),
        ..Machine::default()
    };
    let heat = |heat| Machine {
        heat: Some(heat),
        ..Machine::default()
    };

    let hp = surplus(&["chest-steam"], &["bleed-7", "hp-leakoff", "hp-exhaust"]);
    let ip = surplus(
        &["hot-reheat"],
        &["ip-leakoff", "bleed-5", "bleed-4", "ip-exhaust"],
    );
    let lp = surplus(&["crossover"], &["bleed-2", "bleed-1", "lp-exhaust"]);
    let condensate_pump = surplus(&["condensate-pumped"], &["condensate"]);
    let generator_loss = assumed.get("generator-loss")?;
    let motor_loss = assumed.get("condensate-motor-loss")?;
    let boiler = surplus(
        &["live-steam", "blowdown", "hot-reheat"],
        &[
            "final-feed",
            "superheat-spray",
            "cold-reheat",
            "reheat-spray",
        ],
    );

    let machines = [
        ("boiler", heat(boiler)),
        ("turbine-hp", work(hp)),
        ("turbine-ip", work(ip)),
        ("turbine-lp", work(lp)),
        (
            "generator",
            Machine {
                power: Some(hp + ip + lp - generator_loss),
                ..loss(generator_loss)
            },
        ),
        (
            "turbine-bfp",
            work(surplus(&["bfpt-steam"], &["bfpt-exhaust"])),
        ),
        ("bfp-shaft", loss(assumed.get("bfp-shaft-loss")?)),
        (
            "feed-pump-low",
            work(surplus(&["feed-tap"], &["deaerator-outlet"])),
        ),
        (
            "feed-pump-high",
            work(surplus(&["feed-discharge"], &["feed-middle"])),
        ),
        (
            "drain-pump",
            work(surplus(&["drain-2-pumped"], &["drain-2"])),
        ),
        ("condensate-pump", work(condensate_pump)),
        (
            "condensate-motor",
            Machine {
                power: Some(condensate_pump + motor_loss),
                ..loss(motor_loss)
            },
        ),
        (
            "generator-cooler",
            heat(surplus(&["condensate-cooler"], &["condensate-pumped"])),
        ),
        ("heater-7", loss(assumed.get("heater-7-loss")?)),
        ("heater-6", loss(assumed.get("heater-6-loss")?)),
        ("heater-5", loss(assumed.get("heater-5-loss")?)),
        ("heater-3", loss(assumed.get("heater-3-loss")?)),
        ("heater-2", loss(assumed.get("heater-2-loss")?)),
        ("heater-1", loss(assumed.get("heater-1-loss")?)),
        (
            "deaerator",
            Machine {
                holdup_change: Some(assumed.get("deaerator-level")?),
                ..loss(assumed.get("deaerator-loss")?)
            },
        ),
    ];
    Ok(machines
        .into_iter()
        .map(|(name, machine)| (name.to_owned(), machine))
        .collect())
}

fn flow(mass_flow: f64, state: State) -> Flow {
    Flow {
        mass_flow,
        pressure: state.p,
        enthalpy: state.h,
        temperature: state.t,
    }
}
