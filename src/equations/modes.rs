//! Sides of the saturation line, one at a time.
//!
//! T(p, h) has a kink at the saturation line, and a Newton method that steps to
//! and fro over it does not converge. A stream near saturation is therefore
//! taken to be on one side: there its temperature is the function of that side,
//! continued beyond the line as a straight line in h, and bounds keep the
//! solution on the side. Each choice of sides is a smooth problem; which choice
//! fits best is decided by the objective.
//!
//! Continued from the line at h_s(p): T = T_s(p) + (h - h_s(p)) (dT/dh)_s. The
//! change of the slope along the line is left out of (dT/dp)_h: beyond the line
//! no solution stands.

use super::relation::Side;
use crate::fluid::{self, Phase, Saturation, State};
use crate::plant::StreamId;

/// Enthalpy beyond the line at which the slope of the single phase is taken,
/// kJ/kg: far enough to be off the line in spite of rounding.
const OFF_THE_LINE: f64 = 1e-3;

/// The side of the saturation line that a stream is taken to be on.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash)]
pub enum Mode {
    /// Subcooled liquid.
    Liquid,
    /// Wet steam.
    Wet,
    /// Superheated steam.
    Vapour,
}

/// The mode of each stream that has one.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Modes(Vec<Option<Mode>>);

impl Modes {
    /// No stream has a mode.
    pub fn none(streams: usize) -> Self {
        Modes(vec![None; streams])
    }

    /// The mode of a stream.
    pub fn get(&self, s: StreamId) -> Option<Mode> {
        self.0[s.0]
    }

    /// Gives a stream a mode.
    pub fn set(&mut self, s: StreamId, mode: Mode) {
        self.0[s.0] = Some(mode);
    }

    /// Sign of the bound h - h_sat at a side of the line: +1 where h must not
    /// fall below it, -1 where it must not rise above it, 0 where it may do
    /// either.
    pub(super) fn sign(&self, s: StreamId, side: Side) -> f64 {
        match (self.0[s.0], side) {
            (Some(Mode::Wet), Side::Liquid) | (Some(Mode::Vapour), Side::Vapour) => 1.0,
            (Some(Mode::Wet), Side::Vapour) | (Some(Mode::Liquid), Side::Liquid) => -1.0,
            _ => 0.0,
        }
    }

    /// The state with its temperature continued from the stream's side, where
    /// it lies beyond.
    pub(super) fn continued(
        &self,
        s: StreamId,
        state: State,
        saturation: Option<&Saturation>,
    ) -> State {
        let (Some(mode), Some(saturation)) = (self.0[s.0], saturation) else {
            return state;
        };
        let (line, off) = match (mode, state.phase) {
            (Mode::Wet, Phase::Wet)
            | (Mode::Vapour, Phase::Vapour)
            | (Mode::Liquid, Phase::Liquid) => return state,
            (Mode::Wet, _) => {
                return State {
                    t: saturation.t,
                    t_p: saturation.t_p,
                    t_h: 0.0,
                    ..state
                };
            }
            (Mode::Vapour, _) => (saturation.vapour, OFF_THE_LINE),
            (Mode::Liquid, _) => (saturation.liquid, -OFF_THE_LINE),
        };
        let Ok(beside) = fluid::from_ph(state.p, line.h + off) else {
            return state;
        };
        State {
            t: saturation.t + (state.h - line.h) * beside.t_h,
            t_p: saturation.t_p - line.h_p * beside.t_h,
            t_h: beside.t_h,
            ..state
        }
    }
}
