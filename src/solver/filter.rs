//! Which points a step may lead to: a filter over feasibility and objective
//! (Fletcher and Leyffer, Math. Program. 91, 2002, 239).
//!
//! A point is acceptable when, against every point remembered, it either
//! violates the relations less or has a smaller sum of squares, by a margin.
//! Unlike a merit function it needs no penalty, so that the multipliers of
//! relations that depend on each other, which may be large, do no harm.

/// Fraction of the violation that a point must gain on a remembered one.
const MARGIN: f64 = 1e-4;
/// Relative rise of the objective that rounding may cause.
const ROUNDING: f64 = 1e-9;

/// How good a point is.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) struct Merit {
    /// Sum of the normalised relations' magnitudes.
    pub(super) violation: f64,
    /// Half the sum of squared residuals.
    pub(super) objective: f64,
    /// True where every relation holds within its tolerance.
    pub(super) feasible: bool,
}

#[derive(Clone, Debug, Default)]
pub(super) struct Filter {
    remembered: Vec<Merit>,
}

impl Filter {
    pub(super) fn clear(&mut self) {
        self.remembered.clear();
    }

    pub(super) fn remember(&mut self, point: Merit) {
        self.remembered
            .retain(|old| old.violation < point.violation || old.objective < point.objective);
        self.remembered.push(point);
    }

    pub(super) fn accepts(&self, point: Merit) -> bool {
        point.violation.is_finite()
            && point.objective.is_finite()
            && self.remembered.iter().all(|old| {
                let slack = ROUNDING * (1.0 + old.objective);
                point.violation <= (1.0 - MARGIN) * old.violation
                    || point.objective <= old.objective - MARGIN * old.violation
                    || (point.feasible && point.objective <= old.objective + slack)
            })
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn merit(violation: f64, objective: f64) -> Merit {
        Merit {
            violation,
            objective,
            feasible: violation < 1e-10,
        }
    }

    #[test]
    fn a_point_worse_in_both_is_refused() {
        let mut filter = Filter::default();
        filter.remember(merit(1.0, 10.0));
        filter.remember(merit(0.5, 20.0));
        assert!(!filter.accepts(merit(1.1, 10.5)));
        assert!(!filter.accepts(merit(0.7, 20.0)));
        assert!(filter.accepts(merit(0.7, 15.0)));
        assert!(filter.accepts(merit(0.1, 100.0)));
        assert!(!filter.accepts(merit(f64::NAN, 0.0)));
    }

    #[test]
    fn rounding_does_not_refuse_a_feasible_point() {
        let mut filter = Filter::default();
        filter.remember(merit(1e-14, 10.0));
        assert!(filter.accepts(merit(2e-14, 10.0 + 1e-10)));
        assert!(!filter.accepts(merit(2e-14, 10.1)));
    }
}
