//! States from pairs of properties.
//!
//! (p, h) and (p, s) are solved in the temperature within their region, in region 3 together with the density.
//! (h, s) is solved as s(p; h) = s in p: at constant enthalpy the entropy falls with the pressure,
//! `(ds/dp)_h = -v / T`, through all regions, and Newton's method is kept in a bracket.

use super::gibbs::{self, Target};
use super::place::{Place, bounds, place_ph, place_ps};
use super::range::{self, OutOfRange, Quantity, check_at, check_pressure};
use super::saturation::{self, REGION3_PRESSURE, REGION3_TEMPERATURE, saturation};
use super::{
    CRITICAL_PRESSURE, CRITICAL_TEMPERATURE, MAX_PRESSURE, MAX_TEMPERATURE, MIN_PRESSURE,
    MIN_SATURATION_PRESSURE, MIN_TEMPERATURE, Phase, REGION5_MAX_PRESSURE, REGION5_MAX_TEMPERATURE,
    State, region1, region2, region3, region5,
};

/// The state at `p` MPa and `h` kJ/kg.
///
/// # Errors
///
/// A pressure outside [`MIN_PRESSURE`] to [`MAX_PRESSURE`], or an enthalpy outside [`super::enthalpy_range`].
pub fn from_ph(p: f64, h: f64) -> Result<State, OutOfRange> {
    check_pressure(p)?;
    if !(bounds::COLDEST..bounds::HOTTEST).contains(&h) || p < MIN_SATURATION_PRESSURE {
        let (least, greatest) = (range::coldest(p).h, range::hottest(p).h);
        check_at(
            Quantity::Enthalpy,
            h,
            least..=greatest,
            Some((Quantity::Pressure, p)),
        )?;
    }
    let target = Target::Enthalpy(h);
    Ok(match place_ph(p, h) {
        Place::Liquid => liquid(p, target),
        Place::Vapour => vapour(p, target),
        Place::Dense(low, high) => region3::isobaric(p, target, (low, high)),
        Place::Wet(line) => {
            let x = (h - line.liquid.h) / (line.vapour.h - line.liquid.h);
            State { h, ..line.wet(x) }
        }
    })
}

/// The state at `p` MPa and `t` K. On the saturation line this is the liquid.
///
/// # Errors
///
/// A pressure outside [`MIN_PRESSURE`] to [`MAX_PRESSURE`], or a temperature outside 273.15 K to 2273.15 K,
/// above 50 MPa to 1073.15 K.
pub fn from_pt(p: f64, t: f64) -> Result<State, OutOfRange> {
    check_pressure(p)?;
    let temperatures = MIN_TEMPERATURE..=range::greatest_temperature(p);
    check_at(
        Quantity::Temperature,
        t,
        temperatures,
        Some((Quantity::Pressure, p)),
    )?;
    Ok(if t <= REGION3_TEMPERATURE {
        if p >= saturation::pressure(t) {
            region1::gibbs(p, t).state(Phase::Liquid)
        } else {
            region2::gibbs(p, t).state(Phase::Vapour)
        }
    } else if t > MAX_TEMPERATURE {
        region5::gibbs(p, t).state(hot_phase(p, t))
    } else if p <= REGION3_PRESSURE || t >= region2::boundary_temperature(p) {
        region2::gibbs(p, t).state(hot_phase(p, t))
    } else {
        region3::isothermal(p, t)
    })
}

/// The state at `p` MPa and `s` kJ/(kg K).
///
/// # Errors
///
/// A pressure outside [`MIN_PRESSURE`] to [`MAX_PRESSURE`], or an entropy beyond those at the ends of the
/// temperature range at that pressure.
pub fn from_ps(p: f64, s: f64) -> Result<State, OutOfRange> {
    check_pressure(p)?;
    let entropies = range::coldest(p).s..=range::hottest(p).s;
    check_at(
        Quantity::Entropy,
        s,
        entropies,
        Some((Quantity::Pressure, p)),
    )?;
    let target = Target::Entropy(s);
    Ok(match place_ps(p, s) {
        Place::Liquid => liquid(p, target),
        Place::Vapour => vapour(p, target),
        Place::Dense(low, high) => region3::isobaric(p, target, (low, high)),
        Place::Wet(line) => {
            let x = (s - line.liquid.s) / (line.vapour.s - line.liquid.s);
            State { s, ..line.wet(x) }
        }
    })
}

/// Wet steam of quality `x` at `p` MPa; 0 is saturated liquid, 1 saturated vapour.
///
/// # Errors
///
/// A pressure outside [`MIN_SATURATION_PRESSURE`] to [`super::MAX_SATURATION_PRESSURE`], or a quality outside 0 to 1.
pub fn from_px(p: f64, x: f64) -> Result<State, OutOfRange> {
    let line = saturation(p)?;
    range::check(Quantity::Quality, x, 0.0, 1.0)?;
    Ok(line.wet(x))
}

/// The state at `h` kJ/kg and `s` kJ/(kg K), exact in `h`.
///
/// Where `s` falls into a jump between two regions, the state is the one at the jump.
///
/// # Errors
///
/// An enthalpy that no pressure allows, or an entropy that no pressure allows at that enthalpy.
pub fn from_hs(h: f64, s: f64) -> Result<State, OutOfRange> {
    /// Entropies in kJ/(kg K) are good to about this.
    const ROUNDING: f64 = 1e-13;
    let (mut low, mut high) = pressures_at(h)?;
    let (least, greatest) = (from_ph(high, h)?, from_ph(low, h)?);
    check_at(
        Quantity::Entropy,
        s,
        least.s - ROUNDING..=greatest.s + ROUNDING,
        Some((Quantity::Enthalpy, h)),
    )?;
    let mut state = least;
    // Bisection in ln p alone would need 60 halvings.
    for _ in 0..100 {
        let residual = s - state.s;
        if residual < 0.0 {
            low = state.p;
        } else {
            high = state.p;
        }
        let step = residual / state.s_p;
        // s is nearly linear in p for liquid, in ln p for vapour and wet steam.
        let newton = match state.phase {
            Phase::Liquid => state.p + step,
            Phase::Wet | Phase::Vapour | Phase::Supercritical => state.p * (step / state.p).exp(),
        };
        let next = if low <= newton && newton <= high {
            newton
        } else {
            (low * high).sqrt()
        };
        let settled = residual.abs() <= ROUNDING || high - low <= 1e-14 * high;
        state = from_ph(next, h)?;
        if settled {
            break;
        }
    }
    Ok(state)
}

/// A margin in K beyond the ends of a region, for pairs that fall into a jump at its edge.
const MARGIN: f64 = 0.5;

#[inline]
fn liquid(p: f64, target: Target) -> State {
    let start = match target {
        Target::Enthalpy(h) => region1::temperature_ph(p, h),
        // As for a constant heat capacity of 4.3 kJ/(kg K).
        Target::Entropy(s) => MIN_TEMPERATURE * (s / 4.3).exp(),
    };
    let range = (MIN_TEMPERATURE - MARGIN, REGION3_TEMPERATURE + MARGIN);
    gibbs::isobaric(region1::gibbs, p, target, start, range).state(Phase::Liquid)
}

#[inline]
fn vapour(p: f64, target: Target) -> State {
    let start = match target {
        Target::Enthalpy(h) if h < bounds::HOTTEST => region2::temperature_ph(p, h),
        Target::Enthalpy(_) | Target::Entropy(_) => {
            let top = region2::gibbs(p, MAX_TEMPERATURE);
            if top.step(target) > 0.0 {
                return hot(p, target);
            }
            match target {
                Target::Enthalpy(h) => region2::temperature_ph(p, h),
                Target::Entropy(s) => MAX_TEMPERATURE * ((s - top.s) / top.cp).exp(),
            }
        }
    };
    let range = (MIN_TEMPERATURE - MARGIN, MAX_TEMPERATURE + MARGIN);
    let state = gibbs::isobaric(region2::gibbs, p, target, start, range);
    state.state(hot_phase(p, state.t))
}

/// Region 5.
fn hot(p: f64, target: Target) -> State {
    let range = (MAX_TEMPERATURE - MARGIN, REGION5_MAX_TEMPERATURE + MARGIN);
    let state = gibbs::isobaric(region5::gibbs, p, target, 1500.0, range);
    state.state(hot_phase(p, state.t))
}

/// The phase on the hot side of saturation and of the boundary B23.
#[inline]
fn hot_phase(p: f64, t: f64) -> Phase {
    if p >= CRITICAL_PRESSURE && t >= CRITICAL_TEMPERATURE {
        Phase::Supercritical
    } else {
        Phase::Vapour
    }
}

/// The least and the greatest pressure at which a state of enthalpy `h` exists: one interval, since h at the
/// least temperature rises with p, and h at the greatest temperatures falls.
fn pressures_at(h: f64) -> Result<(f64, f64), OutOfRange> {
    let ice_point = region1::gibbs(MIN_SATURATION_PRESSURE, MIN_TEMPERATURE).h;
    let hottest = range::hottest(MIN_PRESSURE).h;
    range::check(Quantity::Enthalpy, h, ice_point, hottest)?;
    let dry = |p| region2::gibbs(p, MIN_TEMPERATURE).h;
    let low = if h >= dry(MIN_PRESSURE) {
        MIN_PRESSURE
    } else if h > dry(MIN_SATURATION_PRESSURE) {
        last_inside(MIN_SATURATION_PRESSURE, MIN_PRESSURE, |p| dry(p) <= h)
    } else {
        MIN_SATURATION_PRESSURE
    };
    let inside = |p| range::coldest(p).h <= h && h <= range::hottest(p).h;
    let high = if inside(MAX_PRESSURE) {
        MAX_PRESSURE
    } else if inside(REGION5_MAX_PRESSURE) {
        last_inside(REGION5_MAX_PRESSURE, MAX_PRESSURE, inside)
    } else {
        last_inside(low, REGION5_MAX_PRESSURE, inside)
    };
    Ok((low, high))
}

/// The last pressure from `within` towards `beyond` that is inside, by bisection.
fn last_inside(mut within: f64, mut beyond: f64, inside: impl Fn(f64) -> bool) -> f64 {
    // 2^-60 of the interval is below the spacing of pressures.
    for _ in 0..60 {
        let middle = 0.5 * (within + beyond);
        if inside(middle) {
            within = middle;
        } else {
            beyond = middle;
        }
    }
    within
}

#[cfg(test)]
mod tests {
    use super::*;

    fn along(low: f64, high: f64) -> impl Iterator<Item = f64> {
        (0..=2000).map(move |k| low * (high / low).powf(f64::from(k) / 2000.0))
    }

    /// What [`pressures_at`] rests on.
    #[test]
    fn enthalpy_limits_are_monotone_in_pressure() {
        let falling = |h: fn(f64) -> f64, low: f64, high: f64| {
            let values: Vec<f64> = along(low, high).map(h).collect();
            assert!(values.is_sorted_by(|a, b| a > b));
        };
        falling(
            |p| -region1::gibbs(p, MIN_TEMPERATURE).h,
            MIN_SATURATION_PRESSURE,
            MAX_PRESSURE,
        );
        falling(
            |p| region2::gibbs(p, MIN_TEMPERATURE).h,
            MIN_PRESSURE,
            MIN_SATURATION_PRESSURE,
        );
        falling(
            |p| region2::gibbs(p, MAX_TEMPERATURE).h,
            REGION5_MAX_PRESSURE,
            MAX_PRESSURE,
        );
        falling(
            |p| region5::gibbs(p, REGION5_MAX_TEMPERATURE).h,
            MIN_PRESSURE,
            REGION5_MAX_PRESSURE,
        );
    }
}
