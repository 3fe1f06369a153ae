//! The saturation line and wet steam (region 4 of IAPWS-IF97).
//!
//! Pressure and temperature of saturation are the two solutions of one polynomial, quadratic in
//! `beta = (p / 1 MPa)^(1/4)` and in `theta = T + n9 / (T - n10)` (R7-97(2012), Eqs. 29 to 31, Table 34):
//!
//! `F = beta^2 theta^2 + n1 beta^2 theta + n2 beta^2 + n3 beta theta^2 + n4 beta theta + n5 beta
//!  + n6 theta^2 + n7 theta + n8 = 0`, so that `dT/dp = -(F_beta beta_p) / (F_theta theta_T)`.
//!
//! The saturated liquid and vapour are those of regions 1 and 2 up to 623.15 K, of region 3 above.
//! Wet steam mixes them: `v = v' + x (v'' - v')` with `x = (h - h') / (h'' - h')`. Its derivatives follow
//! from those of the branches along the line. dT/dp is the saturation equation's own and not
//! Clapeyron's `T (v'' - v') / (h'' - h')`, from which it differs by up to 1.6e-4: the derivatives are those
//! of the functions as computed here.

use super::range::{self, OutOfRange, Quantity};
use super::{
    CRITICAL_DENSITY, CRITICAL_TEMPERATURE, MAX_SATURATION_PRESSURE, MIN_SATURATION_PRESSURE,
    MIN_TEMPERATURE, Phase, Saturation, State, region1, region2, region3,
};

/// The temperature in K above which region 3 describes the saturated states.
pub(super) const REGION3_TEMPERATURE: f64 = 623.15;

/// Its saturation pressure in MPa (R7-97(2012), section 4.2: 16.529 164 2526).
pub(super) const REGION3_PRESSURE: f64 = 16.529_164_252_604_5;

/// Both saturated states at `p` MPa.
///
/// # Errors
///
/// A pressure outside [`MIN_SATURATION_PRESSURE`] to [`MAX_SATURATION_PRESSURE`].
pub fn saturation(p: f64) -> Result<Saturation, OutOfRange> {
    range::check(
        Quantity::Pressure,
        p,
        MIN_SATURATION_PRESSURE,
        MAX_SATURATION_PRESSURE,
    )?;
    Ok(at(p, temperature(p)))
}

/// Saturation temperature in K at `p` MPa alone.
///
/// # Errors
///
/// A pressure outside [`MIN_SATURATION_PRESSURE`] to [`MAX_SATURATION_PRESSURE`].
pub fn saturation_temperature(p: f64) -> Result<f64, OutOfRange> {
    range::check(
        Quantity::Pressure,
        p,
        MIN_SATURATION_PRESSURE,
        MAX_SATURATION_PRESSURE,
    )?;
    Ok(temperature(p))
}

/// Both saturated states at `t` K.
///
/// # Errors
///
/// A temperature below 273.15 K or above that of [`MAX_SATURATION_PRESSURE`], 0.2 mK below the critical one.
pub fn saturation_t(t: f64) -> Result<Saturation, OutOfRange> {
    range::check(
        Quantity::Temperature,
        t,
        MIN_TEMPERATURE,
        temperature(MAX_SATURATION_PRESSURE),
    )?;
    // At the limits the pressure may round to the other side of them.
    let p = pressure(t).clamp(MIN_SATURATION_PRESSURE, MAX_SATURATION_PRESSURE);
    Ok(at(p, t))
}

/// Both saturated states at a point of the line.
#[inline]
pub(super) fn at(p: f64, t: f64) -> Saturation {
    let t_p = slope(p, t);
    let (liquid, vapour) = if p <= REGION3_PRESSURE {
        (
            region1::gibbs(p, t).branch(t_p),
            region2::gibbs(p, t).branch(t_p),
        )
    } else {
        let (liquid, vapour) = start_densities(t);
        (
            region3::from_density(p, t, liquid).branch(t_p),
            region3::from_density(p, t, vapour).branch(t_p),
        )
    };
    Saturation {
        p,
        t,
        t_p,
        liquid,
        vapour,
    }
}

impl Saturation {
    /// Wet steam of quality `x`.
    #[inline]
    pub(super) fn wet(&self, x: f64) -> State {
        let (l, g) = (&self.liquid, &self.vapour);
        let mix = |a: f64, b: f64| a + x * (b - a);
        let latent = g.h - l.h;
        let x_h = latent.recip();
        let x_p = -mix(l.h_p, g.h_p) * x_h;
        State {
            p: self.p,
            h: mix(l.h, g.h),
            t: self.t,
            v: mix(l.v, g.v),
            s: mix(l.s, g.s),
            cp: None,
            x: Some(x),
            phase: Phase::Wet,
            t_p: self.t_p,
            t_h: 0.0,
            v_p: mix(l.v_p, g.v_p) + x_p * (g.v - l.v),
            v_h: x_h * (g.v - l.v),
            s_p: mix(l.s_p, g.s_p) + x_p * (g.s - l.s),
            s_h: x_h * (g.s - l.s),
        }
    }
}

/// Saturation temperature in K at `p` MPa (Eq. 31).
#[inline]
pub(super) fn temperature(p: f64) -> f64 {
    let beta = p.sqrt().sqrt();
    let e = beta * (beta + N[2]) + N[5];
    let f = beta * (beta * N[0] + N[3]) + N[6];
    let g = beta * (beta * N[1] + N[4]) + N[7];
    let theta = 2.0 * g / (-f - (f * f - 4.0 * e * g).sqrt());
    let sum = N[9] + theta;
    0.5 * (sum - (sum * sum - 4.0 * (N[8] + N[9] * theta)).sqrt())
}

/// Saturation pressure in MPa at `t` K (Eq. 30).
#[inline]
pub(super) fn pressure(t: f64) -> f64 {
    let theta = t + N[8] / (t - N[9]);
    let a = theta * (theta + N[0]) + N[1];
    let b = theta * (theta * N[2] + N[3]) + N[4];
    let c = theta * (theta * N[5] + N[6]) + N[7];
    let beta = 2.0 * c / (-b + (b * b - 4.0 * a * c).sqrt());
    let square = beta * beta;
    square * square
}

/// dT/dp in K/MPa along the line, from Eq. 29.
#[inline]
fn slope(p: f64, t: f64) -> f64 {
    let beta = p.sqrt().sqrt();
    let theta = t + N[8] / (t - N[9]);
    let f_beta =
        theta * (theta * (2.0 * beta + N[2]) + 2.0 * beta * N[0] + N[3]) + 2.0 * beta * N[1] + N[4];
    let f_theta = 2.0 * theta * (beta * (beta + N[2]) + N[5]) + beta * (beta * N[0] + N[3]) + N[6];
    let beta_p = beta / (4.0 * p);
    let theta_t = 1.0 - N[8] / ((t - N[9]) * (t - N[9]));
    -f_beta * beta_p / (f_theta * theta_t)
}

/// Starts for the densities in kg/m3 of saturated liquid and vapour above 623.15 K, where Newton's method
/// closes in without crossing to the other branch: up to 644.7 K within 3e-6 of the solution, from a fit to
/// this module's own values; nearer to the critical point beyond it.
fn start_densities(t: f64) -> (f64, f64) {
    const LIQUID: [f64; 8] = [
        1.008323, 7.226796, -51.51258, 447.1027, -2639.989, 9933.82, -21543.48, 20486.7,
    ];
    const VAPOUR: [f64; 8] = [
        0.9892928, -7.650256, 71.35345, -660.5487, 4196.965, -16722.53, 37783.41, -36914.7,
    ];
    let root = (1.0 - t / CRITICAL_TEMPERATURE).sqrt();
    let (liquid, vapour) = if root > 0.06 {
        let fit = |c: [f64; 8]| c.iter().rev().fold(0.0, |sum, c| sum * root + c);
        (fit(LIQUID), fit(VAPOUR))
    } else {
        (1.0 + 8.0 * root, 1.0 - 7.6 * root)
    };
    (CRITICAL_DENSITY * liquid, CRITICAL_DENSITY * vapour)
}

/// Table 34.
const N: [f64; 10] = [
    0.11670521452767e4,
    -0.72421316703206e6,
    -0.17073846940092e2,
    0.12020824702470e5,
    -0.32325550322333e7,
    0.14915108613530e2,
    -0.48232657361591e4,
    0.40511340542057e6,
    -0.23855557567849,
    0.65017534844798e3,
];

#[cfg(test)]
mod tests {
    use super::*;

    /// R7-97(2012), Tables 35 and 36.
    #[test]
    fn equations_give_the_published_digits() {
        for (t, p) in [
            (300.0, 3.53658941e-3),
            (500.0, 2.63889776),
            (600.0, 12.3443146),
        ] {
            assert!((pressure(t) / p - 1.0).abs() < 5e-9);
        }
        for (p, t) in [(0.1, 372.755919), (1.0, 453.035632), (10.0, 584.149488)] {
            assert!((temperature(p) / t - 1.0).abs() < 5e-9);
        }
    }

    #[test]
    fn equations_invert_each_other() {
        for k in 0..=1000 {
            let t =
                MIN_TEMPERATURE + (CRITICAL_TEMPERATURE - MIN_TEMPERATURE) * f64::from(k) / 1000.0;
            assert!((temperature(pressure(t)) - t).abs() < 1e-8, "at {t} K");
        }
        assert!((temperature(REGION3_PRESSURE) - REGION3_TEMPERATURE).abs() < 1e-10);
        assert!((temperature(MIN_SATURATION_PRESSURE) - MIN_TEMPERATURE).abs() < 1e-9);
    }

    #[test]
    fn slope_matches_differences() {
        for p in [7e-4, 0.01, 0.5, 5.0, 16.0, 20.0, 22.0] {
            let d = 3e-4 * p;
            let numeric = (8.0 * (temperature(p + d) - temperature(p - d))
                - (temperature(p + 2.0 * d) - temperature(p - 2.0 * d)))
                / (12.0 * d);
            assert!(
                (slope(p, temperature(p)) / numeric - 1.0).abs() < 1e-8,
                "at {p} MPa"
            );
        }
    }

    #[test]
    fn starts_are_near_or_beyond() {
        for k in 1..=2000 {
            let p = REGION3_PRESSURE
                + (MAX_SATURATION_PRESSURE - REGION3_PRESSURE) * f64::from(k) / 2000.0;
            let line = at(p, temperature(p));
            let (liquid, vapour) = start_densities(line.t);
            let (excess, shortfall) = (liquid * line.liquid.v - 1.0, vapour * line.vapour.v - 1.0);
            assert!(
                excess > -3e-6 && shortfall < 1e-5,
                "{excess} and {shortfall} at {p} MPa"
            );
        }
    }
}
