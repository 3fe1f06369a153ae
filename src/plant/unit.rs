//! Units of tags: one factor and one offset to the internal unit.

/// A unit, resolved to the internal one: internal = factor * value + offset.
#[derive(Clone, Debug, PartialEq)]
pub struct Unit {
    /// As written in the plant file.
    pub symbol: String,
    /// Internal units per unit.
    pub factor: f64,
    /// Internal value of zero in this unit.
    pub offset: f64,
}

impl Unit {
    /// Value in the internal unit.
    pub fn to_internal(&self, value: f64) -> f64 {
        self.factor * value + self.offset
    }

    /// Value in this unit.
    pub fn from_internal(&self, internal: f64) -> f64 {
        (internal - self.offset) / self.factor
    }

    /// A difference or sigma in the internal unit.
    pub fn difference_to_internal(&self, difference: f64) -> f64 {
        self.factor * difference
    }

    /// A difference or sigma in this unit.
    pub fn difference_from_internal(&self, internal: f64) -> f64 {
        internal / self.factor
    }
}
