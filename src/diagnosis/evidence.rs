//! What a solution says of one hypothesis.

/// Size of a hypothesis by linear theory, and how strongly it is spoken for.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Evidence {
    /// Estimate of its size.
    pub size: f64,
    /// Standard uncertainty of the estimate.
    pub sigma: f64,
    /// size / sigma, which follows the standard normal where the hypothesis does
    /// not hold.
    pub standardised: f64,
}

impl Evidence {
    /// From the numerator and its variance; `None` where the variance is zero:
    /// nothing of the hypothesis shows in the readings.
    pub fn new(numerator: f64, variance: f64) -> Option<Self> {
        (variance > 0.0).then(|| {
            let root = variance.sqrt();
            Evidence {
                size: numerator / variance,
                sigma: 1.0 / root,
                standardised: numerator / root,
            }
        })
    }

    /// How far it speaks for the hypothesis, in sigma; zero against its sign.
    pub fn strength(&self, one_sided: bool) -> f64 {
        if one_sided {
            self.standardised.max(0.0)
        } else {
            self.standardised.abs()
        }
    }

    /// Generalised likelihood ratio; zero against its sign.
    pub fn ratio(&self, one_sided: bool) -> f64 {
        self.strength(one_sided).powi(2)
    }
}
