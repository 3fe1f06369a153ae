//! Region 1 of IAPWS-IF97: liquid water from 273.15 K to 623.15 K, from saturation to 100 MPa.
//!
//! `gamma(pi, tau) = sum n (7.1 - pi)^I (tau - 1.222)^J`, with `pi = p / 16.53 MPa`,
//! `tau = 1386 K / T` (R7-97(2012), Eq. 7 and Table 2), and the backward equation T(p, h), which is
//! within 25 mK of it and serves as a start (Eq. 11 and Table 6).
//! Coefficients carried over from the release; the exponents are kept as the release prints them.

use super::gibbs::{Gibbs, Reduced};
use super::polynomial::{Term, powers, sums, terms, value};

const PRESSURE: f64 = 16.53;
const TEMPERATURE: f64 = 1386.0;

/// Properties of liquid water at `p` MPa and `t` K.
#[inline]
pub(super) fn gibbs(p: f64, t: f64) -> Gibbs {
    // Inside the region 7.1 - pi >= 1.05 and tau - 1.222 >= 1.0: both may be divided by.
    let x = 7.1 - p / PRESSURE;
    let y = TEMPERATURE / t - 1.222;
    let f = sums(&FORWARD, &powers::<33, 0>(x), &powers::<59, 41>(y));
    let (x, y) = (x.recip(), y.recip());
    let reduced = Reduced {
        g: f.f,
        g_pi: -f.x * x,
        g_pi_pi: f.xx * x * x,
        g_tau: f.y * y,
        g_tau_tau: f.yy * y * y,
        g_pi_tau: -f.xy * x * y,
    };
    Gibbs::new(p, t, PRESSURE, TEMPERATURE, &reduced)
}

/// The backward equation: temperature in K from `p` MPa and `h` kJ/kg, within 25 mK.
#[inline]
pub(super) fn temperature_ph(p: f64, h: f64) -> f64 {
    value(
        &BACKWARD,
        &powers::<7, 0>(p),
        &powers::<33, 0>(h / 2500.0 + 1.0),
    )
}

/// Table 2, rows (I, J, n).
static FORWARD: [Term; 34] = terms(
    [
        (0, -2, 1.4632971213167e-1),
        (0, -1, -8.4548187169114e-1),
        (0, 0, -3.756360367204e0),
        (0, 1, 3.3855169168385e0),
        (0, 2, -9.5791963387872e-1),
        (0, 3, 1.5772038513228e-1),
        (0, 4, -1.6616417199501e-2),
        (0, 5, 8.1214629983568e-4),
        (1, -9, 2.8319080123804e-4),
        (1, -7, -6.0706301565874e-4),
        (1, -1, -1.8990068218419e-2),
        (1, 0, -3.2529748770505e-2),
        (1, 1, -2.1841717175414e-2),
        (1, 3, -5.283835796993e-5),
        (2, -3, -4.7184321073267e-4),
        (2, 0, -3.0001780793026e-4),
        (2, 1, 4.7661393906987e-5),
        (2, 3, -4.4141845330846e-6),
        (2, 17, -7.2694996297594e-16),
        (3, -4, -3.1679644845054e-5),
        (3, 0, -2.8270797985312e-6),
        (3, 6, -8.5205128120103e-10),
        (4, -5, -2.2425281908e-6),
        (4, -2, -6.5171222895601e-7),
        (4, 10, -1.4341729937924e-13),
        (5, -8, -4.0516996860117e-7),
        (8, -11, -1.2734301741641e-9),
        (8, -6, -1.7424871230634e-10),
        (21, -29, -6.8762131295531e-19),
        (23, -31, 1.4478307828521e-20),
        (29, -38, 2.6335781662795e-23),
        (30, -39, -1.1947622640071e-23),
        (31, -40, 1.8228094581404e-24),
        (32, -41, -9.3537087292458e-26),
    ],
    0,
    41,
);

/// Table 6, rows (I, J, n).
static BACKWARD: [Term; 20] = terms(
    [
        (0, 0, -2.3872489924521e2),
        (0, 1, 4.0421188637945e2),
        (0, 2, 1.1349746881718e2),
        (0, 6, -5.8457616048039e0),
        (0, 22, -1.528548241314e-4),
        (0, 32, -1.0866707695377e-6),
        (1, 0, -1.3391744872602e1),
        (1, 1, 4.3211039183559e1),
        (1, 2, -5.4010067170506e1),
        (1, 3, 3.0535892203916e1),
        (1, 4, -6.5964749423638e0),
        (1, 10, 9.3965400878363e-3),
        (1, 32, 1.157364750534e-7),
        (2, 10, -2.5858641282073e-5),
        (2, 32, -4.0644363084799e-9),
        (3, 10, 6.6456186191635e-8),
        (3, 32, 8.0670734103027e-11),
        (4, 32, -9.3477771213947e-13),
        (5, 32, 5.8265442020601e-15),
        (6, 32, -1.5020185953503e-17),
    ],
    0,
    0,
);

#[cfg(test)]
mod tests {
    use super::*;

    /// R7-97(2012), Table 7.
    #[test]
    fn backward_equation_gives_the_published_digits() {
        for (p, h, t) in [
            (3.0, 500.0, 391.798509),
            (80.0, 500.0, 378.108626),
            (80.0, 1500.0, 611.041229),
        ] {
            let computed = temperature_ph(p, h);
            assert!((computed / t - 1.0).abs() < 5e-9, "{computed} is not {t}");
        }
    }

    /// R7-97(2012), section 5.2.1: within 25 mK of the forward equation.
    #[test]
    fn backward_equation_is_a_close_start() {
        for p in [0.01, 0.1, 1.0, 5.0, 10.0, 16.0, 25.0, 50.0, 75.0, 100.0] {
            for t in (274..624).step_by(7).map(f64::from) {
                if p >= super::super::saturation::pressure(t) {
                    let error = temperature_ph(p, gibbs(p, t).h) - t;
                    assert!(error.abs() < 0.025, "{error} K at {p} MPa, {t} K");
                }
            }
        }
    }
}
