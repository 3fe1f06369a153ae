//! The condenser: what enters it, what the cooling water takes away, and the
//! pressure that follows.

use super::balance::Guess;
use super::design::{self, Conditions};
use super::expansion::{Expansion, SteamFlows};
use super::feed::FeedTrain;
use super::{Assumed, Error};
use crate::fluid::{self, State};

/// States and flows of the condenser.
pub(super) struct ColdEnd {
    /// Make-up water, which closes the mass balance of the unit, kg/s.
    pub(super) make_up_flow: f64,
    pub(super) gland_spill: f64,
    pub(super) make_up: State,
    pub(super) cooling_in: State,
    pub(super) cooling_out: State,
    /// Saturation pressure at which the condenser settles, MPa.
    pub(super) pressure: f64,
}

impl ColdEnd {
    pub(super) fn new(
        at: &Conditions,
        assumed: &Assumed,
        guess: &Guess,
        flows: &SteamFlows,
        steam: &Expansion,
        feed: &FeedTrain,
    ) -> Result<Self, Error> {
        let make_up = fluid::from_pt(assumed.get("make-up-pressure")?, at.make_up)?;
        let cooling_in = fluid::from_pt(assumed.get("cooling-pressure")?, at.cooling_inlet)?;
        let gland_spill = flows.hp_leakoff + flows.ip_leakoff - feed.gland_steam;
        let inlets = [
            (flows.lp_exhaust, steam.lp_exhaust.h),
            (guess.bfpt_steam, steam.bfpt_exhaust.h),
            (guess.bleed_1, feed.drain_1.h),
            (feed.gland_steam, feed.gland_drain.h),
            (gland_spill, steam.gland.h),
        ];
        let mass: f64 = inlets.iter().map(|(m, _)| m).sum();
        let energy: f64 = inlets.iter().map(|(m, h)| m * h).sum();
        let make_up_flow = feed.condensate_flow - mass;
        let rejected = energy + make_up_flow * make_up.h - feed.condensate_flow * feed.condensate.h;
        let cooling_out = fluid::from_ph(
            cooling_in.p - assumed.get("cooling-drop")?,
            cooling_in.h + rejected / design::COOLING_FLOW,
        )?;
        let saturation = fluid::saturation_t(cooling_out.t + design::condenser_terminal(at.load))?;
        Ok(ColdEnd {
            make_up_flow,
            gland_spill,
            make_up,
            cooling_in,
            cooling_out,
            pressure: saturation.p,
        })
    }
}
