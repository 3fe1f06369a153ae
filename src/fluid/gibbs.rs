//! States given by a Gibbs equation g(p, T): regions 1, 2 and 5.
//!
//! One pass over the coefficients gives v, h, s, cp and the two derivatives of v; all else follows.
//! With `K` = 1000 kJ/(MPa m3), at constant temperature and pressure
//!
//! - `(dh/dp)_T = K (v - T v_T)`, `(dh/dT)_p = cp`, `(ds/dp)_T = -K v_T`, `(ds/dT)_p = cp / T`,
//!
//! and in the variables (p, h) of a [`State`]
//!
//! - `(dT/dh)_p = 1 / cp`, `(dT/dp)_h = -(dh/dp)_T / cp`,
//! - `(dv/dh)_p = v_T (dT/dh)_p`, `(dv/dp)_h = v_p + v_T (dT/dp)_h`,
//! - `(ds/dh)_p = 1 / T`, `(ds/dp)_h = -K v / T`.

use super::{Branch, KJ_PER_MPA_M3, Phase, SPECIFIC_GAS_CONSTANT, State};

/// A single-phase state in the variables (p, T).
#[derive(Clone, Copy, Debug)]
pub(super) struct Gibbs {
    pub p: f64,
    pub t: f64,
    pub v: f64,
    pub h: f64,
    pub s: f64,
    pub cp: f64,
    /// `(dv/dT)_p` in m3/(kg K)
    pub v_t: f64,
    /// `(dv/dp)_T` in m3/(kg MPa)
    pub v_p: f64,
}

/// A dimensionless Gibbs energy `gamma(pi, tau)` with its derivatives, as the release tabulates them.
pub(super) struct Reduced {
    pub g: f64,
    pub g_pi: f64,
    pub g_pi_pi: f64,
    pub g_tau: f64,
    pub g_tau_tau: f64,
    pub g_pi_tau: f64,
}

/// What an isobaric search is to meet.
#[derive(Clone, Copy, Debug)]
pub(super) enum Target {
    /// Specific enthalpy in kJ/kg.
    Enthalpy(f64),
    /// Specific entropy in kJ/(kg K).
    Entropy(f64),
}

impl Gibbs {
    /// From the reduced derivatives at `pi = p / p_star`, `tau = t_star / t`
    /// (R7-97(2012), Tables 3, 12 and 40).
    #[inline]
    pub fn new(p: f64, t: f64, p_star: f64, t_star: f64, r: &Reduced) -> Self {
        const R: f64 = SPECIFIC_GAS_CONSTANT;
        let tau = t_star / t;
        let volume = R / (KJ_PER_MPA_M3 * p_star);
        Self {
            p,
            t,
            v: volume * t * r.g_pi,
            h: R * t_star * r.g_tau,
            s: R * (tau * r.g_tau - r.g),
            cp: -R * tau * tau * r.g_tau_tau,
            v_t: volume * (r.g_pi - tau * r.g_pi_tau),
            v_p: volume * t * r.g_pi_pi / p_star,
        }
    }

    /// `(dh/dp)_T` in kJ/(kg MPa).
    #[inline]
    pub fn h_p(&self) -> f64 {
        KJ_PER_MPA_M3 * (self.v - self.t * self.v_t)
    }

    #[inline]
    pub fn state(&self, phase: Phase) -> State {
        let t_h = self.cp.recip();
        let t_p = -self.h_p() * t_h;
        State {
            p: self.p,
            h: self.h,
            t: self.t,
            v: self.v,
            s: self.s,
            cp: Some(self.cp),
            x: None,
            phase,
            t_p,
            t_h,
            v_p: self.v_p + self.v_t * t_p,
            v_h: self.v_t * t_h,
            s_p: -KJ_PER_MPA_M3 * self.v / self.t,
            s_h: self.t.recip(),
        }
    }

    /// The saturated branch through this state, where `t_p` is dT/dp along the saturation line.
    #[inline]
    pub fn branch(&self, t_p: f64) -> Branch {
        Branch {
            h: self.h,
            s: self.s,
            v: self.v,
            h_p: self.h_p() + self.cp * t_p,
            s_p: -KJ_PER_MPA_M3 * self.v_t + self.cp / self.t * t_p,
            v_p: self.v_p + self.v_t * t_p,
        }
    }

    /// The temperature step of Newton's method towards the target, in K.
    #[inline]
    pub fn step(&self, target: Target) -> f64 {
        match target {
            Target::Enthalpy(h) => (h - self.h) / self.cp,
            Target::Entropy(s) => (s - self.s) * self.t / self.cp,
        }
    }

    /// The state a very small temperature step away, to first order; the target is met exactly.
    #[inline]
    fn shifted(&self, dt: f64, target: Target) -> Self {
        let (h, s) = match target {
            Target::Enthalpy(h) => (h, self.s + (h - self.h) / self.t),
            Target::Entropy(s) => (self.h + (s - self.s) * self.t, s),
        };
        Self {
            t: self.t + dt,
            v: self.v + self.v_t * dt,
            h,
            s,
            ..*self
        }
    }
}

/// Below this step, in K, what a first-order correction leaves out is under 1e-13 K.
const LAST_STEP: f64 = 1e-6;

/// The state at pressure `p` that meets the target, by Newton's method in the temperature, kept
/// between `low` and `high`. Enthalpy and entropy rise with the temperature, so every state tried
/// narrows the interval, and a step that leaves it becomes a bisection.
///
/// `equation` must be defined a little beyond both ends: at a region's edge the target may lie there.
#[inline]
pub(super) fn isobaric(
    equation: impl Fn(f64, f64) -> Gibbs,
    p: f64,
    target: Target,
    start: f64,
    (mut low, mut high): (f64, f64),
) -> Gibbs {
    let mut t = start.clamp(low, high);
    let mut state = equation(p, t);
    // Bisection alone would need 50 halvings; Newton steps take two to six.
    for _ in 0..100 {
        let dt = state.step(target);
        if dt.abs() < LAST_STEP {
            return state.shifted(dt, target);
        }
        if dt > 0.0 {
            low = t;
        } else {
            high = t;
        }
        let next = t + dt;
        t = if (low..=high).contains(&next) {
            next
        } else {
            0.5 * (low + high)
        };
        state = equation(p, t);
    }
    state
}
