//! Feedwater from the condensate pump to the boiler, and the bleed flows that
//! its heaters draw.
//!
//! Shell pressures come from the turbine; terminal temperature differences and
//! drain cooler approaches then give every temperature, and what is left is
//! linear in the flows: one equation per closed heater (from the boiler
//! downwards), two equations for the deaerator (mass and energy), two for
//! heaters 3 and 2, which the pumped drain ties together.

use super::balance::Guess;
use super::design::{self, Conditions};
use super::expansion::{Expansion, SteamFlows};
use super::{Assumed, Error};
use crate::fluid::{self, State};

/// States and flows of the feed train.
pub(super) struct FeedTrain {
    /// Feedwater to the boiler through the heaters, kg/s.
    pub(super) feed_flow: f64,
    pub(super) superheat_spray: f64,
    /// Feedwater out of the deaerator, kg/s.
    pub(super) suction_flow: f64,
    /// Condensate into the deaerator, kg/s.
    pub(super) mixed_flow: f64,
    /// Condensate through heaters 1 and 2, kg/s.
    pub(super) condensate_flow: f64,
    pub(super) gland_steam: f64,
    pub(super) bleed_7: f64,
    pub(super) bleed_6: f64,
    pub(super) bleed_5: f64,
    pub(super) deaerator_steam: f64,
    pub(super) bfpt_steam: f64,
    pub(super) bleed_3: f64,
    pub(super) bleed_2: f64,
    pub(super) bleed_1: f64,
    pub(super) vent_6_flow: f64,
    pub(super) deaerator_vent_flow: f64,

    pub(super) condensate: State,
    pub(super) condensate_pumped: State,
    pub(super) condensate_cooler: State,
    pub(super) condensate_0: State,
    pub(super) condensate_1: State,
    pub(super) condensate_2: State,
    pub(super) condensate_mixed: State,
    pub(super) condensate_3: State,
    pub(super) deaerator_outlet: State,
    pub(super) feed_tap: State,
    pub(super) feed_discharge: State,
    pub(super) feed_5: State,
    pub(super) feed_6: State,
    /// Behind the bypass of heater 7, or the heater.
    pub(super) final_feed: State,
    pub(super) drain_7: State,
    pub(super) drain_6: State,
    pub(super) drain_5: State,
    pub(super) drain_3: State,
    pub(super) drain_2: State,
    pub(super) drain_2_pumped: State,
    pub(super) drain_1: State,
    pub(super) gland_drain: State,
    pub(super) vent_6: State,
    pub(super) deaerator_vent: State,
}

impl FeedTrain {
    pub(super) fn new(
        at: &Conditions,
        assumed: &Assumed,
        guess: &Guess,
        flows: &SteamFlows,
        steam: &Expansion,
    ) -> Result<Self, Error> {
        let load = at.load;
        let superheat_spray = design::superheat_spray(load);
        let feed_flow = flows.live + design::blowdown(load) - superheat_spray;
        let suction_flow = feed_flow + superheat_spray + flows.reheat_spray;

        // The boiler sets the pressures, from its drum back to the feed pump.
        let drum = design::live_pressure(load) + design::superheater_drop(load);
        let final_pressure = drum + design::economiser_drop(load);
        let past_7 = at.line_up.heater_7_bypassed;
        let drop_7 = if past_7 {
            design::HEATER_7_BYPASS_DROP
        } else {
            assumed.get("heater-7-drop")?
        };
        let pressure_6 = final_pressure + drop_7;
        let pressure_5 = pressure_6 + assumed.get("heater-6-drop")?;
        let discharge_pressure = pressure_5 + assumed.get("heater-5-drop")?;

        let tank = steam.deaerator_steam.p - design::DEAERATOR_SPARGER_DROP;
        let deaerator_outlet = fluid::from_px(tank, 0.0)?;
        let deaerator_vent = fluid::from_px(tank, 1.0)?;
        let tap_pressure = tank + design::FEED_TAP_SHARE * (discharge_pressure - tank);
        let feed_tap = compress(
            deaerator_outlet,
            tap_pressure,
            assumed.get("feed-pump-low-eff")?,
        )?;
        let feed_discharge = compress(
            feed_tap,
            discharge_pressure,
            assumed.get("feed-pump-high-eff")?,
        )?;
        let pump_work = suction_flow * (feed_tap.h - deaerator_outlet.h)
            + (suction_flow - flows.reheat_spray) * (feed_discharge.h - feed_tap.h);
        let bfpt_steam =
            (pump_work + assumed.get("bfp-shaft-loss")?) / (steam.bleed_4.h - steam.bfpt_exhaust.h);

        // High-pressure heaters, from the boiler downwards.
        let feed_5 = fluid::from_pt(
            pressure_5,
            fluid::saturation(steam.bleed_5_shell.p)?.t - design::HEATER_5.terminal(load),
        )?;
        let feed_6 = fluid::from_pt(
            pressure_6,
            fluid::saturation(steam.hp_exhaust.p)?.t - design::HEATER_6.terminal(load) - at.fouling,
        )?;
        let final_feed = if past_7 {
            fluid::from_ph(final_pressure, feed_6.h)?
        } else {
            fluid::from_pt(
                final_pressure,
                fluid::saturation(steam.bleed_7.p)?.t - design::HEATER_7.terminal(load),
            )?
        };
        let drain_7 = fluid::from_pt(steam.bleed_7.p, feed_6.t + design::HEATER_7.drain(load))?;
        let drain_6 = fluid::from_pt(steam.hp_exhaust.p, feed_5.t + design::HEATER_6.drain(load))?;
        let drain_5 = fluid::from_pt(
            steam.bleed_5_shell.p,
            feed_discharge.t + design::HEATER_5.drain(load),
        )?;
        let vent_6 = fluid::from_px(steam.hp_exhaust.p, 1.0)?;
        let vent_6_flow = assumed.get("vent-6-flow")?;

        let duty_7 = feed_flow * (final_feed.h - feed_6.h) + assumed.get("heater-7-loss")?;
        let bleed_7 = if past_7 {
            0.0
        } else {
            duty_7 / (steam.bleed_7.h - drain_7.h)
        };
        let duty_6 = feed_flow * (feed_6.h - feed_5.h) + assumed.get("heater-6-loss")?
            - bleed_7 * (drain_7.h - drain_6.h)
            + vent_6_flow * (vent_6.h - drain_6.h);
        let bleed_6 = duty_6 / (steam.hp_exhaust.h - drain_6.h);
        let drain_6_flow = bleed_6 + bleed_7 - vent_6_flow;
        let duty_5 = feed_flow * (feed_5.h - feed_discharge.h) + assumed.get("heater-5-loss")?
            - drain_6_flow * (drain_6.h - drain_5.h);
        let bleed_5 = duty_5 / (steam.bleed_5_shell.h - drain_5.h);
        let drain_5_flow = bleed_5 + drain_6_flow;

        // Condensate line, from the pump upwards.
        let condensate = fluid::from_px(guess.condenser_pressure, 0.0)?;
        let condensate_pumped = compress(
            condensate,
            design::condensate_pump_pressure(load),
            design::efficiencies(load).condensate_pump,
        )?;
        let cooler_pressure = condensate_pumped.p - assumed.get("cooler-drop")?;
        let pressure_0 = cooler_pressure - assumed.get("gland-condenser-drop")?;
        let pressure_1 = pressure_0 - assumed.get("heater-1-drop")?;
        let pressure_2 = pressure_1 - assumed.get("heater-2-drop")?;
        let pressure_3 = pressure_2 - assumed.get("heater-3-drop")?;
        let condensate_1 = fluid::from_pt(
            pressure_1,
            fluid::saturation(steam.bleed_1.p)?.t - design::HEATER_1.terminal(load),
        )?;
        let condensate_2 = fluid::from_pt(
            pressure_2,
            fluid::saturation(steam.bleed_2.p)?.t - design::HEATER_2.terminal(load),
        )?;
        let condensate_3 = fluid::from_pt(
            pressure_3,
            fluid::saturation(steam.bleed_3_shell.p)?.t - design::HEATER_3.terminal(load),
        )?;

        // Deaerator: mass and energy in the steam and the condensate.
        let holdup_change = assumed.get("deaerator-level")?;
        let deaerator_vent_flow = assumed.get("deaerator-vent-flow")?;
        let missing_mass =
            suction_flow + holdup_change + deaerator_vent_flow - drain_5_flow - vent_6_flow;
        let missing_energy = (suction_flow + holdup_change) * deaerator_outlet.h
            + deaerator_vent_flow * deaerator_vent.h
            + assumed.get("deaerator-loss")?
            - drain_5_flow * drain_5.h
            - vent_6_flow * vent_6.h;
        let [deaerator_steam, mixed_flow] = solve_two(
            [[1.0, 1.0], [steam.deaerator_steam.h, condensate_3.h]],
            [missing_mass, missing_energy],
        );

        // Heaters 3 and 2; of the drain cooler of heater 3 the inlet temperature is guessed.
        let mixed_guess = fluid::from_ph(pressure_2, guess.mixed_enthalpy)?;
        let drain_3 = fluid::from_pt(
            steam.bleed_3_shell.p,
            mixed_guess.t + design::HEATER_3.drain(load),
        )?;
        let drain_2 = fluid::from_px(steam.bleed_2.p, 0.0)?;
        let drain_2_pumped = compress(
            drain_2,
            pressure_2 + design::DRAIN_PUMP_MARGIN,
            assumed.get("drain-pump-eff")?,
        )?;
        let excess = drain_2_pumped.h - condensate_2.h;
        let rise = condensate_2.h - condensate_1.h;
        let [bleed_3, bleed_2] = solve_two(
            [
                [steam.bleed_3_shell.h - drain_3.h + excess, excess],
                [
                    drain_3.h - drain_2.h + rise,
                    steam.bleed_2.h - drain_2.h + rise,
                ],
            ],
            [
                mixed_flow * (condensate_3.h - condensate_2.h) + assumed.get("heater-3-loss")?,
                mixed_flow * rise + assumed.get("heater-2-loss")?,
            ],
        );
        let drain_2_flow = bleed_3 + bleed_2;
        let condensate_flow = mixed_flow - drain_2_flow;
        let condensate_mixed = fluid::from_ph(
            pressure_2,
            (condensate_flow * condensate_2.h + drain_2_flow * drain_2_pumped.h) / mixed_flow,
        )?;

        // Coolers ahead of heater 1, and heater 1.
        let gland_steam = assumed.get("gland-steam-flow")?;
        let gland_drain = fluid::from_px(steam.gland.p, 0.0)?;
        let condensate_cooler = fluid::from_ph(
            cooler_pressure,
            condensate_pumped.h + design::generator_cooler_heat(load) / condensate_flow,
        )?;
        let condensate_0 = fluid::from_ph(
            pressure_0,
            condensate_cooler.h + gland_steam * (steam.gland.h - gland_drain.h) / condensate_flow,
        )?;
        let drain_1 = fluid::from_px(steam.bleed_1.p, 0.0)?;
        let bleed_1 = (condensate_flow * (condensate_1.h - condensate_0.h)
            + assumed.get("heater-1-loss")?)
            / (steam.bleed_1.h - drain_1.h);

        Ok(FeedTrain {
            feed_flow,
            superheat_spray,
            suction_flow,
            mixed_flow,
            condensate_flow,
            gland_steam,
            bleed_7,
            bleed_6,
            bleed_5,
            deaerator_steam,
            bfpt_steam,
            bleed_3,
            bleed_2,
            bleed_1,
            vent_6_flow,
            deaerator_vent_flow,
            condensate,
            condensate_pumped,
            condensate_cooler,
            condensate_0,
            condensate_1,
            condensate_2,
            condensate_mixed,
            condensate_3,
            deaerator_outlet,
            feed_tap,
            feed_discharge,
            feed_5,
            feed_6,
            final_feed,
            drain_7,
            drain_6,
            drain_5,
            drain_3,
            drain_2,
            drain_2_pumped,
            drain_1,
            gland_drain,
            vent_6,
            deaerator_vent,
        })
    }
}

/// The end of a compression from `inlet` to a pressure.
fn compress(inlet: State, pressure: f64, efficiency: f64) -> Result<State, Error> {
    let ideal = fluid::from_ps(pressure, inlet.s)?;
    Ok(fluid::from_ph(
        pressure,
        inlet.h + (ideal.h - inlet.h) / efficiency,
    )?)
}

/// Solves two linear equations by Cramer's rule.
fn solve_two(matrix: [[f64; 2]; 2], right: [f64; 2]) -> [f64; 2] {
    let [[a, b], [c, d]] = matrix;
    let determinant = a * d - b * c;
    [
        (right[0] * d - b * right[1]) / determinant,
        (a * right[1] - c * right[0]) / determinant,
    ]
}
