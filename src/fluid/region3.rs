//! Region 3 of IAPWS-IF97: dense fluid around the critical point, 623.15 K to the boundary B23.
//!
//! `phi(delta, tau) = n1 ln delta + sum n delta^I tau^J`, with `delta = rho / 322 kg/m3`,
//! `tau = 647.096 K / T` (R7-97(2012), Eq. 28 and Table 30; coefficients carried over from the release).
//!
//! The equation's own variables are (rho, T). Whatever is wanted at another pair is solved for:
//!
//! - (p, T): Newton's method in rho along the isotherm, from a density beyond the solution. Away from the
//!   critical isochore the pressure curves such that the steps hardly overshoot; bisection is at hand.
//! - (p, h) and (p, s): Newton's method in (rho, T) from the backward equations or, where that does not
//!   settle, from a bracket in rho. Along an isobar both h and s fall with rho, since
//!   `(dh/drho)_p = -D / p_T` with the determinant `D = p_rho h_T - p_T h_rho > 0` in all stable states, even at
//!   the critical point, where `p_rho = 0` makes cp unbounded. Derivatives by (p, h) therefore use D, never cp.

use std::ops::RangeInclusive;

use super::gibbs::Target;
use super::polynomial::{Term, powers, sums, terms};
use super::region3_backward as backward;
use super::{
    Branch, CRITICAL_DENSITY, CRITICAL_PRESSURE, CRITICAL_TEMPERATURE, KJ_PER_MPA_M3, Phase,
    SPECIFIC_GAS_CONSTANT, State, saturation,
};

/// Densities that enclose the region on every isobar and isotherm through it, in kg/m3.
pub(super) const DENSITY: (f64, f64) = (80.0, 800.0);

/// Temperatures that enclose the region with room for Newton's steps, in K.
const TEMPERATURE: RangeInclusive<f64> = 500.0..=1200.0;

/// A state in the variables (rho, T), with the partial derivatives by rho and by T.
#[derive(Clone, Copy, Debug)]
pub(super) struct Helmholtz {
    pub rho: f64,
    pub t: f64,
    pub p: f64,
    pub h: f64,
    pub s: f64,
    pub p_rho: f64,
    pub p_t: f64,
    pub h_rho: f64,
    pub h_t: f64,
    pub s_rho: f64,
    pub s_t: f64,
}

/// Properties at density `rho` kg/m3 and `t` K.
#[inline]
pub(super) fn helmholtz(rho: f64, t: f64) -> Helmholtz {
    const R: f64 = SPECIFIC_GAS_CONSTANT;
    let delta = rho / CRITICAL_DENSITY;
    let tau = CRITICAL_TEMPERATURE / t;
    let f = sums(&FORWARD, &powers::<12, 0>(delta), &powers::<27, 0>(tau));
    // delta phi_delta and delta^2 phi_delta_delta, with the logarithm's share
    let (d, dd) = (LOGARITHM + f.x, f.xx - LOGARITHM);
    let mpa = R / KJ_PER_MPA_M3;
    Helmholtz {
        rho,
        t,
        p: mpa * t * rho * d,
        h: R * t * (f.y + d),
        s: R * (f.y - LOGARITHM * delta.ln() - f.f),
        p_rho: mpa * t * (2.0 * d + dd),
        p_t: mpa * rho * (d - f.xy),
        h_rho: R * t / rho * (f.xy + d + dd),
        h_t: R * (d - f.yy - f.xy),
        s_rho: R / rho * (f.xy - d),
        s_t: -R / t * f.yy,
    }
}

impl Helmholtz {
    /// `D = p_rho h_T - p_T h_rho`, positive in stable states.
    #[inline]
    fn determinant(&self) -> f64 {
        self.p_rho * self.h_t - self.p_t * self.h_rho
    }

    #[inline]
    pub fn state(&self) -> State {
        let v = self.rho.recip();
        let d = self.determinant().recip();
        let cp = self.determinant() / self.p_rho;
        State {
            p: self.p,
            h: self.h,
            t: self.t,
            v,
            s: self.s,
            // At the critical point itself it has no bound.
            cp: (cp.is_finite() && cp > 0.0).then_some(cp),
            x: None,
            phase: phase(self.p, self.t, self.rho),
            t_p: -self.h_rho * d,
            t_h: self.p_rho * d,
            v_p: -v * v * self.h_t * d,
            v_h: v * v * self.p_t * d,
            s_p: -KJ_PER_MPA_M3 * v / self.t,
            s_h: self.t.recip(),
        }
    }

    /// The saturated branch through this state, where `t_p` is dT/dp along the saturation line.
    #[inline]
    pub fn branch(&self, t_p: f64) -> Branch {
        let rho_p = (1.0 - self.p_t * t_p) / self.p_rho;
        let v = self.rho.recip();
        Branch {
            h: self.h,
            s: self.s,
            v,
            h_p: self.h_rho * rho_p + self.h_t * t_p,
            s_p: self.s_rho * rho_p + self.s_t * t_p,
            v_p: -v * v * rho_p,
        }
    }

    /// The step (drho, dT) of Newton's method towards pressure `p` and the target.
    #[inline]
    fn step(&self, p: f64, target: Target) -> (f64, f64) {
        let (residual, by_rho, by_t) = match target {
            Target::Enthalpy(h) => (h - self.h, self.h_rho, self.h_t),
            Target::Entropy(s) => (s - self.s, self.s_rho, self.s_t),
        };
        let dp = p - self.p;
        let d = (self.p_rho * by_t - self.p_t * by_rho).recip();
        (
            (by_t * dp - self.p_t * residual) * d,
            (self.p_rho * residual - by_rho * dp) * d,
        )
    }

    /// The state a very small step away, to first order.
    #[inline]
    fn shifted(&self, drho: f64, dt: f64) -> Self {
        Self {
            rho: self.rho + drho,
            t: self.t + dt,
            p: self.p + self.p_rho * drho + self.p_t * dt,
            h: self.h + self.h_rho * drho + self.h_t * dt,
            s: self.s + self.s_rho * drho + self.s_t * dt,
            ..*self
        }
    }
}

fn phase(p: f64, t: f64, rho: f64) -> Phase {
    match (p >= CRITICAL_PRESSURE, t >= CRITICAL_TEMPERATURE) {
        (true, true) => Phase::Supercritical,
        (true, false) => Phase::Liquid,
        (false, true) => Phase::Vapour,
        (false, false) if rho > CRITICAL_DENSITY => Phase::Liquid,
        (false, false) => Phase::Vapour,
    }
}

/// The state at `p` MPa and `t` K; below the critical temperature on the side of the saturation
/// line that `p` shows (the line itself counts as liquid).
pub(super) fn isothermal(p: f64, t: f64) -> State {
    let dense = if t < CRITICAL_TEMPERATURE {
        p >= saturation::pressure(t)
    } else {
        p >= helmholtz(CRITICAL_DENSITY, t).p
    };
    let start = if dense { DENSITY.1 } else { DENSITY.0 };
    State {
        p,
        ..from_density(p, t, start).state()
    }
}

/// The state at (p, t) on the start's side of the critical isochore. The start is close to the solution, or
/// farther from the isochore than it.
pub(super) fn from_density(p: f64, t: f64, start: f64) -> Helmholtz {
    let mut rho = start;
    for _ in 0..80 {
        let state = helmholtz(rho, t);
        let step = (p - state.p) / state.p_rho;
        if step.abs() <= 1e-10 * rho {
            return state.shifted(step, 0.0);
        }
        let next = rho + step;
        let crossed = (next - CRITICAL_DENSITY) * (start - CRITICAL_DENSITY) < 0.0;
        if state.p_rho <= 0.0 || crossed {
            break;
        }
        rho = next;
    }
    bisected(p, t, start)
}

/// A root of p(rho, t) = p by bisection, for the few states within some 1e-5 K of the critical
/// point where the steps creep or where the branch ends short of the saturation equation's pressure.
fn bisected(p: f64, t: f64, start: f64) -> Helmholtz {
    let (mut low, mut high) = DENSITY;
    let centre = helmholtz(CRITICAL_DENSITY, t).p;
    if start > CRITICAL_DENSITY && centre < p {
        low = CRITICAL_DENSITY;
    } else if start < CRITICAL_DENSITY && centre > p {
        high = CRITICAL_DENSITY;
    }
    // 2^-60 of the interval is below the spacing of densities.
    for _ in 0..60 {
        let middle = 0.5 * (low + high);
        if helmholtz(middle, t).p < p {
            low = middle;
        } else {
            high = middle;
        }
    }
    helmholtz(0.5 * (low + high), t)
}

/// The single-phase state at `p` MPa that meets the target, its density in kg/m3 within a bracket that
/// leaves out the inside of the saturation line.
pub(super) fn isobaric(p: f64, target: Target, bracket: (f64, f64)) -> State {
    let near = match target {
        Target::Enthalpy(h) => newton(p, target, backward::density_temperature(p, h)),
        Target::Entropy(_) => None,
    };
    // A hair's breadth: on the saturation line rounding may take the density out of the bracket.
    let (low, high) = (bracket.0 * (1.0 - 1e-6), bracket.1 * (1.0 + 1e-6));
    let state = near
        .filter(|state| (low..=high).contains(&state.rho))
        .unwrap_or_else(|| bracketed(p, target, (low, high)))
        .state();
    match target {
        Target::Enthalpy(h) => State { p, h, ..state },
        Target::Entropy(s) => State { p, s, ..state },
    }
}

/// Newton's method in (rho, T); `None` where it does not settle near the region.
#[inline]
fn newton(p: f64, target: Target, (mut rho, mut t): (f64, f64)) -> Option<Helmholtz> {
    for _ in 0..8 {
        let state = helmholtz(rho, t);
        let (drho, dt) = state.step(p, target);
        if drho.abs() < 1e-9 * rho && dt.abs() < 1e-7 {
            return Some(state.shifted(drho, dt));
        }
        rho += drho;
        t += dt;
        if !(DENSITY.0..=DENSITY.1).contains(&rho) || !TEMPERATURE.contains(&t) {
            return None;
        }
    }
    None
}

/// Newton's method in rho along the isobar, kept in a bracket that every state tried narrows; the last
/// steps are taken in (rho, T).
fn bracketed(p: f64, target: Target, (mut low, mut high): (f64, f64)) -> Helmholtz {
    let mut rho = CRITICAL_DENSITY.clamp(low, high);
    let mut state = at_pressure(p, rho, CRITICAL_TEMPERATURE);
    // Bisection alone would need 50 halvings.
    for _ in 0..100 {
        let (residual, slope) = match target {
            Target::Enthalpy(h) => (h - state.h, -state.determinant() / state.p_t),
            Target::Entropy(s) => (s - state.s, -state.determinant() / (state.p_t * state.t)),
        };
        if residual > 0.0 {
            high = rho;
        } else {
            low = rho;
        }
        let step = residual / slope;
        if step.abs() < 1e-6 * rho
            && let Some(settled) = newton(p, target, (rho, state.t))
        {
            return settled;
        }
        let next = rho + step;
        let inside = low <= next && next <= high;
        rho = if inside { next } else { 0.5 * (low + high) };
        state = at_pressure(p, rho, state.t);
    }
    state
}

/// The state at (p, rho) by Newton's method in T, in which the pressure is nearly linear.
fn at_pressure(p: f64, rho: f64, start: f64) -> Helmholtz {
    let mut state = helmholtz(rho, start);
    for _ in 0..20 {
        let dt = (p - state.p) / state.p_t;
        if dt.abs() < 1e-9 {
            break;
        }
        state = helmholtz(
            rho,
            (state.t + dt).clamp(*TEMPERATURE.start(), *TEMPERATURE.end()),
        );
    }
    state
}

/// The coefficient n1, of ln delta.
const LOGARITHM: f64 = 1.0658070028513;

/// Table 30, rows (I, J, n).
static FORWARD: [Term; 39] = terms(
    [
        (0, 0, -1.5732845290239e1),
        (0, 1, 2.0944396974307e1),
        (0, 2, -7.6867707878716e0),
        (0, 7, 2.6185947787954e0),
        (0, 10, -2.808078114862e0),
        (0, 12, 1.2053369696517e0),
        (0, 23, -8.4566812812502e-3),
        (1, 2, -1.2654315477714e0),
        (1, 6, -1.1524407806681e0),
        (1, 15, 8.8521043984318e-1),
        (1, 17, -6.4207765181607e-1),
        (2, 0, 3.8493460186671e-1),
        (2, 2, -8.5214708824206e-1),
        (2, 6, 4.8972281541877e0),
        (2, 7, -3.0502617256965e0),
        (2, 22, 3.9420536879154e-2),
        (2, 26, 1.2558408424308e-1),
        (3, 0, -2.799932969871e-1),
        (3, 2, 1.389979956946e0),
        (3, 4, -2.018991502357e0),
        (3, 16, -8.2147637173963e-3),
        (3, 26, -4.7596035734923e-1),
        (4, 0, 4.39840744735e-2),
        (4, 2, -4.4476435428739e-1),
        (4, 4, 9.0572070719733e-1),
        (4, 26, 7.0522450087967e-1),
        (5, 1, 1.0770512626332e-1),
        (5, 3, -3.2913623258954e-1),
        (5, 26, -5.0871062041158e-1),
        (6, 0, -2.2175400873096e-2),
        (6, 2, 9.4260751665092e-2),
        (6, 26, 1.6436278447961e-1),
        (7, 2, -1.3503372241348e-2),
        (8, 26, -1.4834345352472e-2),
        (9, 2, 5.7922953628084e-4),
        (9, 26, 3.2308904703711e-3),
        (10, 0, 8.0964802996215e-5),
        (10, 1, -1.6557679795037e-4),
        (11, 26, -4.4923899061815e-5),
    ],
    0,
    0,
);

#[cfg(test)]
mod tests {
    use super::*;

    /// R7-97(2012), Table 33: rho, T, then p, h, s, cp.
    #[test]
    fn equation_gives_the_published_digits() {
        for (rho, t, [p, h, s, cp]) in [
            (
                500.0,
                650.0,
                [25.5837018, 1863.43019, 4.05427273, 13.8935717],
            ),
            (
                200.0,
                650.0,
                [22.2930643, 2375.12401, 4.85438792, 44.6579342],
            ),
            (
                500.0,
                750.0,
                [78.3095639, 2258.68845, 4.46971906, 6.34165359],
            ),
        ] {
            let f = helmholtz(rho, t);
            let heat_capacity = f.determinant() / f.p_rho;
            for (computed, published) in [(f.p, p), (f.h, h), (f.s, s), (heat_capacity, cp)] {
                assert!(
                    (computed / published - 1.0).abs() < 5e-9,
                    "{computed} is not {published}"
                );
            }
        }
    }

    /// The equation is made to have its critical point exactly there.
    #[test]
    fn critical_point_is_a_flat_inflection() {
        let f = helmholtz(CRITICAL_DENSITY, CRITICAL_TEMPERATURE);
        assert!((f.p - CRITICAL_PRESSURE).abs() < 1e-9);
        assert!(f.p_rho.abs() < 1e-11);
        assert!(f.determinant() > 1e-3);
    }

    #[test]
    fn partial_derivatives_match_differences() {
        for (rho, t) in [
            (130.0, 640.0),
            (322.0, 647.096),
            (322.0, 660.0),
            (500.0, 650.0),
            (700.0, 630.0),
        ] {
            let f = helmholtz(rho, t);
            let (dr, dt) = (1e-3 * rho, 1e-3 * t);
            let slope = |y: fn(&Helmholtz) -> f64, r: f64, k: f64| {
                let at = |n: f64| y(&helmholtz(rho + n * r, t + n * k));
                (8.0 * (at(1.0) - at(-1.0)) - (at(2.0) - at(-2.0))) / 12.0
            };
            for (exact, by_rho, by_t) in [
                (f.p_rho, slope(|f| f.p, dr, 0.0) / dr, None),
                (f.h_rho, slope(|f| f.h, dr, 0.0) / dr, None),
                (f.s_rho, slope(|f| f.s, dr, 0.0) / dr, None),
                (f.p_t, 0.0, Some(slope(|f| f.p, 0.0, dt) / dt)),
                (f.h_t, 0.0, Some(slope(|f| f.h, 0.0, dt) / dt)),
                (f.s_t, 0.0, Some(slope(|f| f.s, 0.0, dt) / dt)),
            ] {
                let numeric = by_t.unwrap_or(by_rho);
                let error = (exact - numeric).abs();
                assert!(
                    error <= 1e-7 * exact.abs() + 1e-8,
                    "{exact} is not {numeric}"
                );
            }
        }
    }

    /// Every (p, h) around the critical point, the 50 Pa without a saturation line included, must end on the equation.
    #[test]
    fn solutions_lie_on_the_equation() {
        for i in 0..=200 {
            for k in 0..=100 {
                let p = 22.064 + 1e-4 * f64::from(i - 100) / 10.0_f64.powi(i % 4);
                let h = 2000.0 + 1.7 * f64::from(k);
                if p <= crate::fluid::MAX_SATURATION_PRESSURE {
                    continue;
                }
                let state = isobaric(p, Target::Enthalpy(h), DENSITY);
                let f = helmholtz(state.v.recip(), state.t);
                assert!(
                    (f.p - p).abs() < 1e-11 && (f.h - h).abs() < 1e-8,
                    "{p} MPa, {h} kJ/kg"
                );
                let by_s = isobaric(p, Target::Entropy(f.s), DENSITY);
                assert!((by_s.h - h).abs() < 1e-7, "{p} MPa, {} kJ/(kg K)", f.s);
            }
        }
    }

    /// Entropy, which has no backward start, must reach the state that the enthalpy reaches.
    #[test]
    fn both_targets_lead_to_one_state() {
        for (p, rho, t) in [
            (22.064, 322.0, 647.096),
            (22.1, 280.0, 647.3),
            (60.0, 500.0, 700.0),
        ] {
            let f = helmholtz(rho, t);
            let p = if rho == CRITICAL_DENSITY { p } else { f.p };
            let by_h = isobaric(p, Target::Enthalpy(f.h), DENSITY);
            let by_s = isobaric(p, Target::Entropy(f.s), DENSITY);
            assert!((by_h.t - t).abs() < 1e-8 && (by_s.t - t).abs() < 1e-8);
        }
    }
}
