//! The design of the invented unit: how it runs at a given load.
//!
//! Loads are fractions of the rated live-steam flow. Everything here is a free
//! choice of the demonstration, made to look like a common 200 MW class reheat
//! unit; what the plant file states as an assumption is not here but drawn
//! about its stated value ([`Assumed`](super::Assumed)). Units: kg/s, MPa
//! (absolute), K, kJ/kg, kW.

/// What a batch is run at.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Conditions {
    /// Live-steam flow over its rated value, 0.5 to 1.
    pub load: f64,
    /// By how much dirt raises the terminal temperature difference of heater 6, K.
    pub fouling: f64,
    /// Temperature of the cooling water, K.
    pub cooling_inlet: f64,
    /// Temperature of the make-up water, K.
    pub make_up: f64,
    /// What is in line.
    pub line_up: LineUp,
}

/// How the unit is lined up.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct LineUp {
    /// Heater 7 is shut off and the feedwater led past it.
    pub heater_7_bypassed: bool,
    /// The second condensate pump runs in the place of the first.
    pub second_pump: bool,
}

impl LineUp {
    /// What a status of the plant file shows; `None` where there is no such status.
    pub(super) fn status(&self, name: &str) -> Option<f64> {
        let shown = match name {
            "XS-201" => true,
            "XS-401" => !self.second_pump,
            "XS-402" => self.second_pump,
            "ZS-307" => !self.heater_7_bypassed,
            _ => return None,
        };
        Some(f64::from(u8::from(shown)))
    }
}

impl Conditions {
    /// A clean unit in spring at a load.
    pub fn at_load(load: f64) -> Self {
        Conditions {
            load,
            fouling: 0.0,
            cooling_inlet: celsius(13.0),
            make_up: celsius(18.0),
            line_up: LineUp::default(),
        }
    }
}

/// K of a temperature in Cel.
pub(super) fn celsius(t: f64) -> f64 {
    t + 273.15
}

/// A turbine stage group far from the condenser: by Stodola's cone its inlet
/// pressure follows its flow in proportion.
pub(super) struct StageGroup {
    pressure: f64,
    flow: f64,
}

impl StageGroup {
    /// Pressure ahead of the group at a flow, MPa.
    pub(super) fn pressure(&self, flow: f64) -> f64 {
        self.pressure * flow / self.flow
    }
}

pub(super) const RATED_FLOW: f64 = 172.0;

pub(super) const AFTER_CHEST: StageGroup = StageGroup {
    pressure: 12.1,
    flow: 172.0,
};
pub(super) const AFTER_BLEED_7: StageGroup = StageGroup {
    pressure: 3.85,
    flow: 161.0,
};
pub(super) const AFTER_REHEAT: StageGroup = StageGroup {
    pressure: 2.40,
    flow: 149.0,
};
pub(super) const AFTER_BLEED_5: StageGroup = StageGroup {
    pressure: 1.15,
    flow: 142.0,
};
pub(super) const AFTER_BLEED_4: StageGroup = StageGroup {
    pressure: 0.56,
    flow: 128.0,
};
pub(super) const AFTER_CROSSOVER: StageGroup = StageGroup {
    pressure: 0.245,
    flow: 120.0,
};
pub(super) const AFTER_BLEED_2: StageGroup = StageGroup {
    pressure: 0.085,
    flow: 114.0,
};

/// Pressure ahead of the last stages by Stodola's ellipse, MPa: here the
/// condenser's pressure counts.
pub(super) fn bleed_1_pressure(flow: f64, exhaust_pressure: f64) -> f64 {
    const RATED: f64 = 0.0220;
    const RATED_EXHAUST: f64 = 0.0050;
    const RATED_FLOW: f64 = 109.0;
    let cone = (RATED * RATED - RATED_EXHAUST * RATED_EXHAUST) * (flow / RATED_FLOW).powi(2);
    (exhaust_pressure * exhaust_pressure + cone).sqrt()
}

/// Hot reheat pressure over cold reheat pressure.
pub(super) const REHEATER_PRESSURE_RATIO: f64 = 0.905;

/// Modified sliding pressure: the boiler follows the load part of the way.
pub(super) fn live_pressure(load: f64) -> f64 {
    6.0 + 6.6 * load
}

/// Drum over live-steam pressure: the superheater's drop.
pub(super) fn superheater_drop(load: f64) -> f64 {
    0.9 * load * load
}

/// Final feedwater over drum pressure: control valve and economiser.
pub(super) fn economiser_drop(load: f64) -> f64 {
    0.05 + 0.35 * load * load
}

/// The boiler holds its steam temperature down to three quarters of load.
pub(super) fn live_temperature(load: f64) -> f64 {
    celsius(538.0 - 40.0 * (0.75 - load).max(0.0))
}

/// The reheater loses a little more than the superheater.
pub(super) fn reheat_temperature(load: f64) -> f64 {
    celsius(538.0 - 70.0 * (0.75 - load).max(0.0))
}

pub(super) fn superheat_spray(load: f64) -> f64 {
    3.2 + 3.6 * load
}

pub(super) fn reheat_spray(load: f64) -> f64 {
    0.4 + 1.8 * load
}

pub(super) fn blowdown(load: f64) -> f64 {
    0.3 + 1.3 * load
}

/// What the paper mill takes.
pub(super) fn site_steam(load: f64) -> f64 {
    1.5 + 0.8 * load
}

pub(super) fn hp_leakoff(load: f64) -> f64 {
    0.15 + 0.75 * load
}

pub(super) const GLAND_PRESSURE: f64 = 0.1205;

/// The leak-off starts behind the governing stage, this far down the expansion.
pub(super) const HP_LEAKOFF_ENTHALPY_DROP: f64 = 75.0;

/// The tap of the feed pump stands at this share of its head.
pub(super) const FEED_TAP_SHARE: f64 = 0.55;

/// Deaerator steam inlet over storage tank pressure.
pub(super) const DEAERATOR_SPARGER_DROP: f64 = 0.002;

/// The pumped drain over the condensate line that it joins.
pub(super) const DRAIN_PUMP_MARGIN: f64 = 0.05;

/// Condensate pump discharge: the pump's curve.
pub(super) fn condensate_pump_pressure(load: f64) -> f64 {
    2.35 - 0.5 * load * load
}

/// Drop over the bypass of heater 7, MPa.
pub(super) const HEATER_7_BYPASS_DROP: f64 = 0.04;

/// Isentropic efficiencies of the sections that the plant file assumes nothing of.
pub(super) struct Efficiencies {
    pub(super) chest_to_bleed_7: f64,
    pub(super) bleed_7_to_hp_exhaust: f64,
    pub(super) reheat_to_bleed_5: f64,
    pub(super) bleed_5_to_bleed_4: f64,
    pub(super) bleed_4_to_ip_exhaust: f64,
    pub(super) crossover_to_bleed_2: f64,
    pub(super) condensate_pump: f64,
}

/// Efficiencies at a load: the governing stage and the pump suffer from part load.
pub(super) fn efficiencies(load: f64) -> Efficiencies {
    let part = 1.0 - load;
    Efficiencies {
        chest_to_bleed_7: 0.845 - 0.07 * part,
        bleed_7_to_hp_exhaust: 0.870,
        reheat_to_bleed_5: 0.900,
        bleed_5_to_bleed_4: 0.905,
        bleed_4_to_ip_exhaust: 0.910,
        crossover_to_bleed_2: 0.900,
        condensate_pump: 0.80 - 0.25 * part * part,
    }
}

/// Terminal temperature difference and drain cooler approach of a heater, K.
pub(super) struct Approach {
    rated_terminal: f64,
    rated_drain: f64,
}

impl Approach {
    /// Saturation minus outlet temperature. Heaters with a desuperheating zone
    /// can make it negative; it falls with load as the duty does.
    pub(super) fn terminal(&self, load: f64) -> f64 {
        self.rated_terminal - 1.2 * (1.0 - load)
    }

    /// Drain minus inlet temperature.
    pub(super) fn drain(&self, load: f64) -> f64 {
        self.rated_drain * (0.4 + 0.6 * load)
    }
}

pub(super) const HEATER_7: Approach = Approach {
    rated_terminal: 0.8,
    rated_drain: 6.0,
};
pub(super) const HEATER_6: Approach = Approach {
    rated_terminal: 1.2,
    rated_drain: 6.5,
};
pub(super) const HEATER_5: Approach = Approach {
    rated_terminal: 1.6,
    rated_drain: 7.0,
};
pub(super) const HEATER_3: Approach = Approach {
    rated_terminal: 2.8,
    rated_drain: 6.5,
};
/// Heaters 2 and 1 have no drain cooler.
pub(super) const HEATER_2: Approach = Approach {
    rated_terminal: 3.2,
    rated_drain: 0.0,
};
pub(super) const HEATER_1: Approach = Approach {
    rated_terminal: 3.5,
    rated_drain: 0.0,
};

/// Heat that the condensate takes from the generator's hydrogen.
pub(super) fn generator_cooler_heat(load: f64) -> f64 {
    900.0 + 900.0 * load * load
}

pub(super) const COOLING_FLOW: f64 = 5600.0;

/// Saturation minus cooling water outlet temperature of the condenser, K.
pub(super) fn condenser_terminal(load: f64) -> f64 {
    2.2 + 2.3 * load
}

/// Exhaust of the feed pump turbine over condensate pressure.
pub(super) const BFPT_EXHAUST_DROP: f64 = 0.0006;
