//! Region 5 of IAPWS-IF97: steam from 1073.15 K to 2273.15 K, up to 50 MPa.
//!
//! `gamma(pi, tau) = ln pi + sum n0 tau^J0 + sum n pi^I tau^J`, with `pi = p / 1 MPa`,
//! `tau = 1000 K / T` (R7-97(2012), Eqs. 32 to 34, Tables 37 and 38). Coefficients carried over from the release.

use super::gibbs::{Gibbs, Reduced};
use super::polynomial::{Term, powers, sums, terms};

const TEMPERATURE: f64 = 1000.0;

/// Properties of steam at `p` MPa and `t` K.
#[inline]
pub(super) fn gibbs(p: f64, t: f64) -> Gibbs {
    let tau = TEMPERATURE / t;
    let y = powers::<13, 3>(tau);
    let ideal = sums(&IDEAL, &[1.0], &y);
    let residual = sums(&RESIDUAL, &powers::<4, 0>(p), &y);
    let (pi, tau) = (p.recip(), t / TEMPERATURE);
    let reduced = Reduced {
        g: p.ln() + ideal.f + residual.f,
        g_pi: (1.0 + residual.x) * pi,
        g_pi_pi: (residual.xx - 1.0) * pi * pi,
        g_tau: (ideal.y + residual.y) * tau,
        g_tau_tau: (ideal.yy + residual.yy) * tau * tau,
        g_pi_tau: residual.xy * pi * tau,
    };
    Gibbs::new(p, t, 1.0, TEMPERATURE, &reduced)
}

/// Table 37, rows (0, J0, n0).
static IDEAL: [Term; 6] = terms(
    [
        (0, 0, -0.13179983674201e2),
        (0, 1, 0.68540841634434e1),
        (0, -3, -0.24805148933466e-1),
        (0, -2, 0.36901534980333),
        (0, -1, -0.31161318213925e1),
        (0, 2, -0.32961626538917),
    ],
    0,
    3,
);

/// Table 38, rows (I, J, n).
static RESIDUAL: [Term; 6] = terms(
    [
        (1, 1, 1.5736404855259e-3),
        (1, 2, 9.0153761673944e-4),
        (1, 3, -5.0270077677648e-3),
        (2, 3, 2.2440037409485e-6),
        (2, 9, -4.1163275453471e-6),
        (3, 7, 3.7919454822955e-8),
    ],
    0,
    3,
);
