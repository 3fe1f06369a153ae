//! How well a portable instrument reads in the field: what a check of a suspect
//! is reckoned with.

use super::Uncertainty;

/// Uncertainties of portable instruments, in internal units.
#[derive(Clone, Debug, PartialEq)]
pub struct Portable {
    /// Mass flow, kg/s.
    pub mass_flow: Uncertainty,
    /// Pressure, MPa.
    pub pressure: Uncertainty,
    /// Temperature, K.
    pub temperature: Uncertainty,
}

impl Default for Portable {
    /// Common practice: a clamp-on ultrasonic flowmeter on a straight run, a
    /// test gauge, a contact thermometer under lagging.
    fn default() -> Self {
        let of_reading = |share| Uncertainty {
            of_reading: share,
            ..Uncertainty::default()
        };
        Portable {
            mass_flow: of_reading(0.03),
            pressure: of_reading(0.0025),
            temperature: Uncertainty {
                constant: 1.0,
                ..Uncertainty::default()
            },
        }
    }
}
