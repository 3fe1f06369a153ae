//! Steam through the turbine: pressures from flows, enthalpies from efficiencies.
//!
//! A section with isentropic efficiency e ends at h = h_in - e (h_in - h(p, s_in)).

use super::balance::Guess;
use super::design::{self, Conditions};
use super::{Assumed, Error};
use crate::fluid::{self, State};

/// Mass flows along the turbine for a guess of the bleeds, kg/s.
pub(super) struct SteamFlows {
    pub(super) live: f64,
    pub(super) hp_leakoff: f64,
    pub(super) hp_exhaust: f64,
    pub(super) site: f64,
    pub(super) cold_reheat: f64,
    pub(super) reheat_spray: f64,
    pub(super) hot_reheat: f64,
    pub(super) ip_leakoff: f64,
    pub(super) after_bleed_5: f64,
    pub(super) ip_exhaust: f64,
    pub(super) crossover: f64,
    pub(super) after_bleed_2: f64,
    pub(super) lp_exhaust: f64,
}

impl SteamFlows {
    pub(super) fn new(at: &Conditions, assumed: &Assumed, guess: &Guess) -> Result<Self, Error> {
        let load = at.load;
        let live = design::RATED_FLOW * load;
        let hp_leakoff = design::hp_leakoff(load);
        let hp_exhaust = live - hp_leakoff - guess.bleed_7;
        let site = design::site_steam(load);
        let cold_reheat = hp_exhaust - guess.bleed_6 - site;
        let reheat_spray = design::reheat_spray(load);
        let hot_reheat = cold_reheat + reheat_spray;
        let ip_leakoff = assumed.get("ip-leakoff-flow")?;
        let after_bleed_5 = hot_reheat - ip_leakoff - guess.bleed_5;
        let ip_exhaust = after_bleed_5 - guess.deaerator_steam - guess.bfpt_steam;
        let crossover = ip_exhaust - guess.bleed_3;
        let after_bleed_2 = crossover - guess.bleed_2;
        Ok(SteamFlows {
            live,
            hp_leakoff,
            hp_exhaust,
            site,
            cold_reheat,
            reheat_spray,
            hot_reheat,
            ip_leakoff,
            after_bleed_5,
            ip_exhaust,
            crossover,
            after_bleed_2,
            lp_exhaust: after_bleed_2 - guess.bleed_1,
        })
    }
}

/// Steam states along the turbine.
pub(super) struct Expansion {
    pub(super) live: State,
    pub(super) chest: State,
    pub(super) bleed_7: State,
    pub(super) hp_exhaust: State,
    pub(super) hot_reheat: State,
    pub(super) bleed_5: State,
    pub(super) bleed_5_shell: State,
    pub(super) bleed_4: State,
    pub(super) deaerator_steam: State,
    pub(super) bfpt_exhaust: State,
    /// IP exhaust, crossover and the line of bleed 3 alike.
    pub(super) crossover: State,
    pub(super) bleed_3_shell: State,
    pub(super) bleed_2: State,
    pub(super) bleed_1: State,
    pub(super) lp_exhaust: State,
    pub(super) hp_leakoff: State,
    pub(super) ip_leakoff: State,
    pub(super) gland: State,
    pub(super) gland_spill_low: State,
}

impl Expansion {
    pub(super) fn new(
        at: &Conditions,
        assumed: &Assumed,
        guess: &Guess,
        flows: &SteamFlows,
    ) -> Result<Self, Error> {
        let load = at.load;
        let efficiency = design::efficiencies(load);

        let live = fluid::from_pt(design::live_pressure(load), design::live_temperature(load))?;
        let chest = fluid::from_ph(design::AFTER_CHEST.pressure(flows.live), live.h)?;
        let bleed_7 = expand(
            chest,
            design::AFTER_BLEED_7.pressure(flows.hp_exhaust),
            efficiency.chest_to_bleed_7,
        )?;
        let reheat_pressure = design::AFTER_REHEAT.pressure(flows.hot_reheat);
        let hp_exhaust = expand(
            bleed_7,
            reheat_pressure / design::REHEATER_PRESSURE_RATIO,
            efficiency.bleed_7_to_hp_exhaust,
        )?;

        let hot_reheat = fluid::from_pt(reheat_pressure, design::reheat_temperature(load))?;
        let bleed_5 = expand(
            hot_reheat,
            design::AFTER_BLEED_5.pressure(flows.after_bleed_5),
            efficiency.reheat_to_bleed_5,
        )?;
        let bleed_4 = expand(
            bleed_5,
            design::AFTER_BLEED_4.pressure(flows.ip_exhaust),
            efficiency.bleed_5_to_bleed_4,
        )?;
        let crossover = expand(
            bleed_4,
            design::AFTER_CROSSOVER.pressure(flows.crossover),
            efficiency.bleed_4_to_ip_exhaust,
        )?;

        let exhaust_pressure = guess.condenser_pressure + assumed.get("exhaust-hood-drop")?;
        let bleed_2 = expand(
            crossover,
            design::AFTER_BLEED_2.pressure(flows.after_bleed_2),
            efficiency.crossover_to_bleed_2,
        )?;
        let bleed_1 = expand(
            crossover,
            design::bleed_1_pressure(flows.lp_exhaust, exhaust_pressure),
            assumed.get("lp-front")?,
        )?;
        let lp_exhaust = expand(bleed_1, exhaust_pressure, assumed.get("lp-last-stage")?)?;
        let bfpt_exhaust = expand(
            bleed_4,
            guess.condenser_pressure + design::BFPT_EXHAUST_DROP,
            assumed.get("bfpt-efficiency")?,
        )?;

        let hp_leakoff = fluid::from_ph(
            design::GLAND_PRESSURE,
            chest.h - design::HP_LEAKOFF_ENTHALPY_DROP,
        )?;
        let ip_leakoff = fluid::from_ph(design::GLAND_PRESSURE, assumed.get("ip-leakoff-state")?)?;
        let gland = fluid::from_ph(
            design::GLAND_PRESSURE,
            (flows.hp_leakoff * hp_leakoff.h + flows.ip_leakoff * ip_leakoff.h)
                / (flows.hp_leakoff + flows.ip_leakoff),
        )?;
        Ok(Expansion {
            bleed_5_shell: throttle(bleed_5, assumed.get("bleed-5-drop")?)?,
            deaerator_steam: throttle(bleed_4, assumed.get("deaerator-drop")?)?,
            bleed_3_shell: throttle(crossover, assumed.get("bleed-3-drop")?)?,
            gland_spill_low: fluid::from_ph(guess.condenser_pressure, gland.h)?,
            live,
            chest,
            bleed_7,
            hp_exhaust,
            hot_reheat,
            bleed_5,
            bleed_4,
            bfpt_exhaust,
            crossover,
            bleed_2,
            bleed_1,
            lp_exhaust,
            hp_leakoff,
            ip_leakoff,
            gland,
        })
    }
}

/// The end of an expansion from `inlet` to a pressure.
fn expand(inlet: State, pressure: f64, efficiency: f64) -> Result<State, Error> {
    let ideal = fluid::from_ps(pressure, inlet.s)?;
    Ok(fluid::from_ph(
        pressure,
        inlet.h - efficiency * (inlet.h - ideal.h),
    )?)
}

/// A valve with a pressure drop.
fn throttle(inlet: State, drop: f64) -> Result<State, Error> {
    Ok(fluid::from_ph(inlet.p - drop, inlet.h)?)
}
