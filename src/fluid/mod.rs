//! Water and steam by the industrial formulation IAPWS-IF97, release R7-97(2012): regions 1 to 5 and
//! the saturation line.
//!
//! The natural state of a stream is (p, h), which is continuous where (p, T) is not. [`from_ph`] gives
//! T, v, s, cp, phase and quality with their exact first derivatives by p and h, on either side of the
//! saturation line and inside; [`from_pt`], [`from_ps`], [`from_px`] and [`from_hs`] give the same
//! [`State`] from other pairs. Units everywhere: p in MPa (absolute), T in K, h in kJ/kg, s and cp in
//! kJ/(kg K), v in m3/kg.
//!
//! Every state satisfies the forward equation of its region: g(p, T) in regions 1, 2 and 5,
//! f(rho, T) in region 3, the saturation equation in region 4. The release's backward equations
//! only start Newton's method, which leaves less than a microkelvin of them.
//!
//! The regions meet with small jumps, which are the formulation's own (in h up to 0.03 kJ/kg between 1 and 3,
//! 0.13 between 2 and 3, 0.10 between 2 and 5). By (p, T) a state belongs to the region that contains it; by (p, h), (p, s)
//! or (h, s) to the region whose values at the edge enclose it, so that each pair gives one state and
//! the jump shows in T. A state on the saturation line is liquid by (p, T) and wet by (p, h), (p, s) and (p, x).
//!
//! Within 50 Pa of the critical pressure the region 3 equation and the saturation equation contradict
//! each other (the former has no vapour where the latter puts the line), so saturation ends at
//! [`MAX_SATURATION_PRESSURE`]; from there on (p, h) is one phase, continuous through the critical point.
//!
//! ```
//! use counterpoise::fluid::{Phase, from_ph, from_ps, from_pt};
//!
//! let live_steam = from_pt(16.0, 813.15)?;
//! let exhaust = from_ps(0.005, live_steam.s)?;
//! let actual = from_ph(0.005, live_steam.h - 0.88 * (live_steam.h - exhaust.h))?;
//! assert_eq!(actual.phase, Phase::Wet);
//! assert!(actual.x.is_some_and(|x| (x - 0.826).abs() < 0.001));
//! # Ok::<(), counterpoise::fluid::OutOfRange>(())
//! ```
//!
//! Sources: IAPWS R7-97(2012), *Revised Release on the IAPWS Industrial Formulation 1997 for the
//! Thermodynamic Properties of Water and Steam*; IAPWS SR3-03(2014), backward equations for region 3.

mod gibbs;
mod inverse;
mod place;
mod polynomial;
mod range;
mod region1;
mod region2;
mod region3;
mod region3_backward;
mod region5;
mod saturation;

pub use inverse::{from_hs, from_ph, from_ps, from_pt, from_px};
pub use range::{OutOfRange, Quantity, enthalpy_range};
pub use saturation::{saturation, saturation_t, saturation_temperature};

/// Critical temperature in K.
pub const CRITICAL_TEMPERATURE: f64 = 647.096;

/// Critical pressure in MPa.
pub const CRITICAL_PRESSURE: f64 = 22.064;

/// Critical density in kg/m3.
pub const CRITICAL_DENSITY: f64 = 322.0;

/// Specific gas constant of water in kJ/(kg K), as the formulation uses it.
pub const SPECIFIC_GAS_CONSTANT: f64 = 0.461526;

/// The least pressure of a state in MPa. Up to [`MIN_SATURATION_PRESSURE`] there is vapour alone.
pub const MIN_PRESSURE: f64 = 1e-6;

/// The greatest pressure of a state in MPa.
pub const MAX_PRESSURE: f64 = 100.0;

/// The least pressure of saturation in MPa, that at 273.15 K.
pub const MIN_SATURATION_PRESSURE: f64 = 6.112_126_774_444e-4;

/// The greatest pressure of saturation in MPa: 50 Pa below critical, see the module's opening.
pub const MAX_SATURATION_PRESSURE: f64 = 22.06395;

/// The least temperature in K.
pub const MIN_TEMPERATURE: f64 = 273.15;

/// The greatest temperature in K at all pressures.
pub const MAX_TEMPERATURE: f64 = 1073.15;

/// The greatest pressure in MPa at which [`REGION5_MAX_TEMPERATURE`] is allowed.
pub const REGION5_MAX_PRESSURE: f64 = 50.0;

/// The greatest temperature in K up to [`REGION5_MAX_PRESSURE`].
pub const REGION5_MAX_TEMPERATURE: f64 = 2273.15;

/// kJ in one MPa m3.
const KJ_PER_MPA_M3: f64 = 1000.0;

/// How the fluid is present.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash)]
pub enum Phase {
    /// Liquid: colder than saturation or, above the critical pressure, than the critical temperature.
    Liquid,
    /// Liquid and vapour in equilibrium.
    Wet,
    /// Vapour: hotter than saturation, below the critical pressure.
    Vapour,
    /// Above both the critical pressure and the critical temperature.
    Supercritical,
}

/// A thermodynamic state with its derivatives in the variables (p, h).
#[derive(Clone, Copy, Debug)]
pub struct State {
    /// Pressure in MPa.
    pub p: f64,
    /// Specific enthalpy in kJ/kg.
    pub h: f64,
    /// Temperature in K.
    pub t: f64,
    /// Specific volume in m3/kg.
    pub v: f64,
    /// Specific entropy in kJ/(kg K).
    pub s: f64,
    /// Isobaric heat capacity in kJ/(kg K); `None` for wet steam and at the critical point, where it is unbounded.
    pub cp: Option<f64>,
    /// Mass fraction of vapour; only for wet steam, its two edges included.
    pub x: Option<f64>,
    /// How the fluid is present.
    pub phase: Phase,
    /// `(dT/dp)_h` in K/MPa.
    pub t_p: f64,
    /// `(dT/dh)_p` in K kg/kJ.
    pub t_h: f64,
    /// `(dv/dp)_h` in m3/(kg MPa).
    pub v_p: f64,
    /// `(dv/dh)_p` in m3/kJ.
    pub v_h: f64,
    /// `(ds/dp)_h` in kJ/(kg K MPa).
    pub s_p: f64,
    /// `(ds/dh)_p` in 1/K.
    pub s_h: f64,
}

/// One side of the saturation line. The derivatives are total ones along the line.
#[derive(Clone, Copy, Debug)]
pub struct Branch {
    /// Specific enthalpy in kJ/kg.
    pub h: f64,
    /// Specific entropy in kJ/(kg K).
    pub s: f64,
    /// Specific volume in m3/kg.
    pub v: f64,
    /// `dh/dp` in kJ/(kg MPa).
    pub h_p: f64,
    /// `ds/dp` in kJ/(kg K MPa).
    pub s_p: f64,
    /// `dv/dp` in m3/(kg MPa).
    pub v_p: f64,
}

/// Saturated liquid and vapour in equilibrium.
#[derive(Clone, Copy, Debug)]
pub struct Saturation {
    /// Pressure in MPa.
    pub p: f64,
    /// Temperature in K.
    pub t: f64,
    /// `dT/dp` in K/MPa along the line.
    pub t_p: f64,
    /// Saturated liquid.
    pub liquid: Branch,
    /// Saturated vapour.
    pub vapour: Branch,
}
