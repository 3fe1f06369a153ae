//! Where the formulation holds, and the error that says so.
//!
//! IAPWS-IF97 covers 273.15 K to 1073.15 K up to 100 MPa, and on to 2273.15 K up to 50 MPa
//! (R7-97(2012), section 2). It has no lower limit of pressure but zero; ours is 1 Pa, so that what
//! goes as 1/p stays finite.

use std::fmt;
use std::ops::RangeInclusive;

use super::gibbs::Gibbs;
use super::{
    MAX_PRESSURE, MAX_TEMPERATURE, MIN_PRESSURE, MIN_SATURATION_PRESSURE, MIN_TEMPERATURE,
    REGION5_MAX_PRESSURE, REGION5_MAX_TEMPERATURE, region1, region2, region5,
};

/// A property that states are asked for by.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash)]
pub enum Quantity {
    /// Absolute pressure in MPa.
    Pressure,
    /// Temperature in K.
    Temperature,
    /// Specific enthalpy in kJ/kg.
    Enthalpy,
    /// Specific entropy in kJ/(kg K).
    Entropy,
    /// Mass fraction of vapour.
    Quality,
}

/// A value outside the range of the formulation; not-a-number and the infinities are outside of every range.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
#[error("{quantity} {} is outside the range of the water and steam properties, {} to {}{}",
    Shown(*.quantity, *.value), Shown(*.quantity, *.least), Shown(*.quantity, *.greatest), At(*.at))]
pub struct OutOfRange {
    /// What is out of range.
    pub quantity: Quantity,
    /// The value that was given.
    pub value: f64,
    /// The least valid value, in the same unit.
    pub least: f64,
    /// The greatest valid value, in the same unit.
    pub greatest: f64,
    /// The other given value, where the range depends on it.
    pub at: Option<(Quantity, f64)>,
}

/// The least and the greatest specific enthalpy in kJ/kg that [`super::from_ph`] accepts at `p` MPa:
/// at 273.15 K, and at 2273.15 K up to 50 MPa or 1073.15 K above.
///
/// The least is that of liquid water from [`MIN_SATURATION_PRESSURE`] on; below it there is vapour alone.
///
/// # Errors
///
/// A pressure outside [`MIN_PRESSURE`] to [`MAX_PRESSURE`].
pub fn enthalpy_range(p: f64) -> Result<(f64, f64), OutOfRange> {
    check_pressure(p)?;
    Ok((coldest(p).h, hottest(p).h))
}

impl Quantity {
    /// The unit that its values are given in; empty for the quality.
    #[must_use]
    pub const fn unit(self) -> &'static str {
        match self {
            Self::Pressure => "MPa",
            Self::Temperature => "K",
            Self::Enthalpy => "kJ/kg",
            Self::Entropy => "kJ/(kg K)",
            Self::Quality => "",
        }
    }
}

impl fmt::Display for Quantity {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(match self {
            Self::Pressure => "pressure",
            Self::Temperature => "temperature",
            Self::Enthalpy => "specific enthalpy",
            Self::Entropy => "specific entropy",
            Self::Quality => "quality",
        })
    }
}

/// A value with its unit.
struct Shown(Quantity, f64);

impl fmt::Display for Shown {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let Self(quantity, value) = self;
        write!(f, "{value}")?;
        match quantity.unit() {
            "" => Ok(()),
            unit => write!(f, " {unit}"),
        }
    }
}

/// The condition that a range holds under, if any.
struct At(Option<(Quantity, f64)>);

impl fmt::Display for At {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self.0 {
            None => Ok(()),
            Some((quantity, value)) => write!(f, " at {quantity} {}", Shown(quantity, value)),
        }
    }
}

/// Refuses what lies outside `least` to `greatest`, and not-a-number.
#[inline]
pub(super) fn check(
    quantity: Quantity,
    value: f64,
    least: f64,
    greatest: f64,
) -> Result<(), OutOfRange> {
    check_at(quantity, value, least..=greatest, None)
}

/// The same for a range that holds at another given value.
#[inline]
pub(super) fn check_at(
    quantity: Quantity,
    value: f64,
    range: RangeInclusive<f64>,
    at: Option<(Quantity, f64)>,
) -> Result<(), OutOfRange> {
    if range.contains(&value) {
        Ok(())
    } else {
        Err(OutOfRange {
            quantity,
            value,
            least: *range.start(),
            greatest: *range.end(),
            at,
        })
    }
}

#[inline]
pub(super) fn check_pressure(p: f64) -> Result<(), OutOfRange> {
    check(Quantity::Pressure, p, MIN_PRESSURE, MAX_PRESSURE)
}

/// The greatest temperature in K at `p` MPa.
#[inline]
pub(super) fn greatest_temperature(p: f64) -> f64 {
    if p <= REGION5_MAX_PRESSURE {
        REGION5_MAX_TEMPERATURE
    } else {
        MAX_TEMPERATURE
    }
}

/// The state at the least temperature.
pub(super) fn coldest(p: f64) -> Gibbs {
    if p < MIN_SATURATION_PRESSURE {
        region2::gibbs(p, MIN_TEMPERATURE)
    } else {
        region1::gibbs(p, MIN_TEMPERATURE)
    }
}

/// The state at the greatest temperature.
pub(super) fn hottest(p: f64) -> Gibbs {
    if p <= REGION5_MAX_PRESSURE {
        region5::gibbs(p, REGION5_MAX_TEMPERATURE)
    } else {
        region2::gibbs(p, MAX_TEMPERATURE)
    }
}
