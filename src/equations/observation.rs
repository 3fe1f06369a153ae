//! What tags and assumptions say of the state: measurement functions g(x) with
//! their exact gradients.
//!
//! With u = (h_in - h_out) and d = (h_in - h_s), h_s = h(p_out, s(p_in, h_in)),
//! the isentropic efficiency of an expansion is u / d and that of a compression
//! d / u; the gradient of h_s follows from ds = s_p dp + s_h dh at the inlet and
//! dh = (ds - s_p dp) / s_h at the outlet. Quality is (h - h') / (h'' - h'),
//! continued as a straight line outside 0 to 1, so that a bound and not the
//! function holds it in.

use super::layout::Layout;
use super::relation::{Saturations, Side};
use crate::fluid::{self, State};
use crate::plant::{Barometer, Equipment, Kind, PressureReference, Quantity, StreamId};

/// The measurement function of one tag or assumption.
#[derive(Clone, Debug, PartialEq)]
pub struct Observation {
    /// What is observed.
    pub quantity: Quantity,
    /// The states it depends on: the row of its Jacobian.
    pub row: Vec<usize>,
    function: Function,
}

#[derive(Clone, Copy, Debug, PartialEq)]
enum Function {
    /// Sum of the row's states times these coefficients, plus a constant.
    Linear {
        coefficients: [f64; 2],
        constant: f64,
    },
    Temperature(StreamId),
    /// Temperature of a stream that a relation holds on the saturation line.
    SaturationTemperature(StreamId),
    Quality(StreamId),
    Subcooling(StreamId),
    Efficiency {
        inlet: StreamId,
        outlet: StreamId,
        compression: bool,
    },
}

/// Thermodynamic states at one point, for the streams that asked for one.
pub type States = [Option<State>];

impl Observation {
    /// The measurement function of `quantity`. `on_saturation` tells the
    /// streams that a relation holds on the saturation line. A quantity that
    /// the plant has no state for (an accepted plant file has none) depends on
    /// nothing and reads zero.
    pub fn new(
        quantity: Quantity,
        equipment: &[Equipment],
        barometer: Barometer,
        on_saturation: &[Option<Side>],
        layout: &Layout,
    ) -> Self {
        let row_and_function =
            Self::function_of(quantity, equipment, barometer, on_saturation, layout);
        let (row, function) =
            row_and_function.unwrap_or_else(|| (Vec::new(), linear(0.0, 0.0, 0.0)));
        Observation {
            quantity,
            row,
            function,
        }
    }

    fn function_of(
        quantity: Quantity,
        equipment: &[Equipment],
        barometer: Barometer,
        on_saturation: &[Option<Side>],
        layout: &Layout,
    ) -> Option<(Vec<usize>, Function)> {
        let one = |j: usize| Some((vec![j], linear(1.0, 0.0, 0.0)));
        match quantity {
            Quantity::MassFlow(s) => one(layout.m(s)),
            Quantity::Enthalpy(s) => one(layout.h(s)),
            Quantity::Pressure(s, reference) => {
                let sign = match reference {
                    PressureReference::Absolute => return one(layout.p(s)),
                    PressureReference::Gauge => 1.0,
                    PressureReference::Vacuum => -1.0,
                };
                match barometer {
                    Barometer::Absent => None,
                    Barometer::Exact(p) => Some((vec![layout.p(s)], linear(sign, 0.0, -sign * p))),
                    Barometer::Unknown => Some((
                        vec![layout.p(s), layout.barometer?],
                        linear(sign, -sign, 0.0),
                    )),
                }
            }
            Quantity::Barometer => one(layout.barometer?),
            Quantity::PressureDrop(a, b) => {
                Some((vec![layout.p(a), layout.p(b)], linear(1.0, -1.0, 0.0)))
            }
            Quantity::Temperature(s) => Some(if on_saturation[s.0].is_some() {
                (vec![layout.p(s)], Function::SaturationTemperature(s))
            } else {
                (vec![layout.p(s), layout.h(s)], Function::Temperature(s))
            }),
            Quantity::Quality(s) => Some((vec![layout.p(s), layout.h(s)], Function::Quality(s))),
            Quantity::Subcooling(s) => {
                Some((vec![layout.p(s), layout.h(s)], Function::Subcooling(s)))
            }
            Quantity::IsentropicEfficiency { of, inlet, outlet } => {
                let compression = matches!(equipment[of.0].kind, Kind::Pump { .. });
                let row = vec![
                    layout.p(inlet),
                    layout.h(inlet),
                    layout.p(outlet),
                    layout.h(outlet),
                ];
                let function = Function::Efficiency {
                    inlet,
                    outlet,
                    compression,
                };
                Some((row, function))
            }
            Quantity::Power(e) => {
                let own = layout.own[e.0];
                one(own.power.or(own.work)?)
            }
            Quantity::HeatLoss(e) | Quantity::Loss(e) => one(layout.own[e.0].loss?),
            Quantity::HoldupChange(e) => one(layout.own[e.0].holdup?),
        }
    }

    /// Streams whose thermodynamic state the function needs.
    pub fn needs(&self) -> [Option<StreamId>; 2] {
        match self.function {
            Function::Temperature(s) | Function::Subcooling(s) => [Some(s), None],
            Function::Efficiency { inlet, outlet, .. } => [Some(inlet), Some(outlet)],
            _ => [None, None],
        }
    }

    /// The state that is observed by itself, if it is.
    pub fn state(&self) -> Option<usize> {
        match (&self.function, &self.row[..]) {
            (Function::Linear { .. }, &[j]) => Some(j),
            _ => None,
        }
    }

    /// The stream whose saturated states the function needs.
    pub fn needs_saturation(&self) -> Option<StreamId> {
        match self.function {
            Function::SaturationTemperature(s) | Function::Quality(s) | Function::Subcooling(s) => {
                Some(s)
            }
            _ => None,
        }
    }

    /// Inlet and outlet, where the function is the efficiency of a compression.
    pub fn compression(&self) -> Option<(StreamId, StreamId)> {
        match self.function {
            Function::Efficiency {
                inlet,
                outlet,
                compression: true,
            } => Some((inlet, outlet)),
            _ => None,
        }
    }

    /// g(x) in internal units; its gradient goes into `values`, beside
    /// [`Observation::row`]. `states` and `saturations` hold what the streams
    /// that it needs are at `x`.
    ///
    /// # Errors
    /// The state to blame, where a property has no value.
    pub fn evaluate(
        &self,
        x: &[f64],
        states: &States,
        saturations: &Saturations,
        values: &mut [f64],
    ) -> Result<f64, usize> {
        let blame = self.row.first().copied().unwrap_or_default();
        let state = |s: StreamId| states[s.0].ok_or(blame);
        let saturation = || {
            self.needs_saturation()
                .and_then(|s| saturations[s.0])
                .ok_or(blame)
        };
        match self.function {
            Function::Linear {
                coefficients,
                constant,
            } => {
                let mut sum = constant;
                for (slot, &j) in self.row.iter().enumerate() {
                    sum += coefficients[slot] * x[j];
                    values[slot] = coefficients[slot];
                }
                Ok(sum)
            }
            Function::Temperature(s) => {
                let state = state(s)?;
                values.copy_from_slice(&[state.t_p, state.t_h]);
                Ok(state.t)
            }
            Function::SaturationTemperature(_) => {
                let saturation = saturation()?;
                values[0] = saturation.t_p;
                Ok(saturation.t)
            }
            Function::Quality(_) => {
                let saturation = saturation()?;
                let (liquid, vapour) = (saturation.liquid, saturation.vapour);
                let latent = vapour.h - liquid.h;
                let quality = (x[self.row[1]] - liquid.h) / latent;
                values[0] = -(liquid.h_p + quality * (vapour.h_p - liquid.h_p)) / latent;
                values[1] = 1.0 / latent;
                Ok(quality)
            }
            Function::Subcooling(s) => {
                let saturation = saturation()?;
                let state = state(s)?;
                values.copy_from_slice(&[saturation.t_p - state.t_p, -state.t_h]);
                Ok(saturation.t - state.t)
            }
            Function::Efficiency {
                inlet,
                outlet,
                compression,
            } => {
                let (from, to) = (state(inlet)?, state(outlet)?);
                let ideal = fluid::from_ps(to.p, from.s).map_err(|_| blame)?;
                let (actual, isentropic) = (from.h - to.h, from.h - ideal.h);
                // Order of the row: p_in, h_in, p_out, h_out.
                let actual_slopes = [0.0, 1.0, 0.0, -1.0];
                let isentropic_slopes = [
                    -from.s_p / ideal.s_h,
                    1.0 - from.s_h / ideal.s_h,
                    ideal.s_p / ideal.s_h,
                    0.0,
                ];
                let (u, d, du, dd) = if compression {
                    (isentropic, actual, isentropic_slopes, actual_slopes)
                } else {
                    (actual, isentropic, actual_slopes, isentropic_slopes)
                };
                if d == 0.0 {
                    return Err(blame);
                }
                for (slot, value) in values.iter_mut().enumerate() {
                    *value = (du[slot] - u / d * dd[slot]) / d;
                }
                Ok(u / d)
            }
        }
    }
}

fn linear(first: f64, second: f64, constant: f64) -> Function {
    Function::Linear {
        coefficients: [first, second],
        constant,
    }
}
