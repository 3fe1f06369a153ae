//! Uncertainty of a reading, from the terms of a data sheet.
//!
//! Terms are stated at 95 % coverage and combine as root sum of squares; sigma
//! is that over 1.959964.

/// Half-width of the central 95 % of a normal distribution, in sigma.
pub const COVERAGE_FACTOR: f64 = 1.959_964;

/// A standard uncertainty: positive and finite.
#[derive(Clone, Copy, Debug, PartialEq, PartialOrd)]
pub struct Sigma(f64);

impl Sigma {
    /// `None` unless `value` is positive and finite.
    pub fn new(value: f64) -> Option<Self> {
        (value > 0.0 && value.is_finite()).then_some(Sigma(value))
    }

    /// The value.
    pub fn get(self) -> f64 {
        self.0
    }
}

/// The terms of an uncertainty at 95 % coverage, in the unit of the tag.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Uncertainty {
    /// Fraction of the reading as read.
    pub of_reading: f64,
    /// Constant terms: of the range and absolute ones, combined, in the unit.
    pub constant: f64,
    /// 0.5 e span^2 of a flow by square-root extraction, in the unit squared:
    /// divided by the reading it is a term.
    pub differential: f64,
}

impl Uncertainty {
    /// Half-width at 95 % coverage for a reading, in the unit of the tag.
    pub fn half_width(&self, reading: f64) -> f64 {
        let differential = if self.differential > 0.0 {
            self.differential / reading.abs()
        } else {
            0.0
        };
        let of_reading = self.of_reading * reading;
        (of_reading * of_reading + self.constant * self.constant + differential * differential)
            .sqrt()
    }

    /// Sigma for a reading, in the unit of the tag; `None` where it comes out
    /// zero or infinite (a reading of zero whose only term is a fraction of it).
    pub fn sigma(&self, reading: f64) -> Option<Sigma> {
        Sigma::new(self.half_width(reading) / COVERAGE_FACTOR)
    }
}
