//! Which region a pair (p, h) or (p, s) belongs to.
//!
//! By (p, h) the commonest states are told apart by bounds that hold at every pressure, so that the values at a
//! region's edge are worked out only for a pair that may lie near it.

use super::saturation::{self, REGION3_PRESSURE, REGION3_TEMPERATURE};
use super::{
    Branch, MAX_SATURATION_PRESSURE, MIN_SATURATION_PRESSURE, Saturation, region1, region2, region3,
};

/// The region that a pair (p, h) or (p, s) belongs to.
pub(super) enum Place {
    /// Region 1.
    Liquid,
    /// Regions 2 and 5.
    Vapour,
    /// Region 3, one phase, with densities in kg/m3 that enclose the state's.
    Dense(f64, f64),
    /// Between the two branches.
    Wet(Saturation),
}

/// Bounds on the enthalpy, in kJ/kg, at the edges of the regions over all pressures. The tests hold
/// the edges to them.
pub(super) mod bounds {
    /// Above every h(p, 273.15 K) of liquid.
    pub const COLDEST: f64 = 96.0;
    /// Enclose h(p, 623.15 K) of region 1.
    pub const REGION1: (f64, f64) = (1553.0, 1671.0);
    /// Enclose h on region 2's side of B23.
    pub const B23: (f64, f64) = (2563.0, 2820.0);
    /// Above every h'' of region 2.
    pub const VAPOUR: f64 = 2805.0;
    /// Below every h(p, 1073.15 K) of region 2.
    pub const HOTTEST: f64 = 3714.0;

    /// Below h' at the saturation temperature `t` K, up to 623.15 K.
    #[inline]
    pub fn subcooled(t: f64) -> f64 {
        4.15 * (t - 273.15) - 0.05
    }
}

/// Where (p, h) lies; `h` is inside the range.
#[inline]
pub(super) fn place_ph(p: f64, h: f64) -> Place {
    if p < MIN_SATURATION_PRESSURE {
        return Place::Vapour;
    }
    if p > REGION3_PRESSURE {
        return place_ph_around_region3(p, h);
    }
    if h > bounds::VAPOUR {
        return Place::Vapour;
    }
    let t = saturation::temperature(p);
    if h < bounds::subcooled(t) {
        return Place::Liquid;
    }
    let line = saturation::at(p, t);
    if h < line.liquid.h {
        Place::Liquid
    } else if h <= line.vapour.h {
        Place::Wet(line)
    } else {
        Place::Vapour
    }
}

/// The same at pressures at which region 3 lies between regions 1 and 2.
fn place_ph_around_region3(p: f64, h: f64) -> Place {
    if h < bounds::REGION1.0 {
        return Place::Liquid;
    }
    if h > bounds::B23.1 {
        return Place::Vapour;
    }
    if h <= bounds::REGION1.1 && h <= region1::gibbs(p, REGION3_TEMPERATURE).h {
        return Place::Liquid;
    }
    if h >= bounds::B23.0 && h >= region2::gibbs(p, region2::boundary_temperature(p)).h {
        return Place::Vapour;
    }
    dense_or_wet(p, h, |branch| branch.h)
}

/// Where (p, s) lies; `s` is inside the range.
pub(super) fn place_ps(p: f64, s: f64) -> Place {
    if p < MIN_SATURATION_PRESSURE {
        return Place::Vapour;
    }
    if p > REGION3_PRESSURE {
        return if s <= region1::gibbs(p, REGION3_TEMPERATURE).s {
            Place::Liquid
        } else if s >= region2::gibbs(p, region2::boundary_temperature(p)).s {
            Place::Vapour
        } else {
            dense_or_wet(p, s, |branch| branch.s)
        };
    }
    let line = saturation::at(p, saturation::temperature(p));
    if s < line.liquid.s {
        Place::Liquid
    } else if s <= line.vapour.s {
        Place::Wet(line)
    } else {
        Place::Vapour
    }
}

/// Tells the two apart where region 3 surrounds the saturation line, by the value `y` of a property.
fn dense_or_wet(p: f64, y: f64, of: impl Fn(&Branch) -> f64) -> Place {
    let (low, high) = region3::DENSITY;
    if p > MAX_SATURATION_PRESSURE {
        return Place::Dense(low, high);
    }
    let line = saturation::at(p, saturation::temperature(p));
    if y < of(&line.liquid) {
        Place::Dense(line.liquid.v.recip(), high)
    } else if y <= of(&line.vapour) {
        Place::Wet(line)
    } else {
        Place::Dense(low, line.vapour.v.recip())
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::fluid::{MAX_PRESSURE, MAX_TEMPERATURE, range};

    fn along(low: f64, high: f64) -> impl Iterator<Item = f64> {
        (0..=2000).map(move |k| low * (high / low).powf(f64::from(k) / 2000.0))
    }

    #[test]
    fn bounds_hold_at_every_pressure() {
        for p in along(MIN_SATURATION_PRESSURE, MAX_PRESSURE) {
            assert!(range::coldest(p).h < bounds::COLDEST);
            assert!(region2::gibbs(p, MAX_TEMPERATURE).h > bounds::HOTTEST);
        }
        for p in along(MIN_SATURATION_PRESSURE, REGION3_PRESSURE) {
            let t = saturation::temperature(p);
            let line = saturation::at(p, t);
            assert!(line.liquid.h > bounds::subcooled(t), "at {p} MPa");
            assert!(line.vapour.h < bounds::VAPOUR, "at {p} MPa");
        }
        for p in along(REGION3_PRESSURE, MAX_PRESSURE) {
            let enclosed = |(low, high): (f64, f64), h: f64| low < h && h < high;
            assert!(enclosed(
                bounds::REGION1,
                region1::gibbs(p, REGION3_TEMPERATURE).h
            ));
            let edge = region2::gibbs(p, region2::boundary_temperature(p).max(REGION3_TEMPERATURE));
            assert!(enclosed(bounds::B23, edge.h), "at {p} MPa");
        }
    }
}
