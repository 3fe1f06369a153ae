//! Chi-square quantiles and tails.

use statrs::distribution::{ChiSquared, ContinuousCDF};

/// The value that chi-square with `degrees` degrees of freedom stays below with
/// probability `confidence`; `None` at zero degrees.
pub fn chi_square_quantile(confidence: f64, degrees: usize) -> Option<f64> {
    let start = distribution(degrees)?.inverse_cdf(confidence);
    Some(polish(start, confidence, degrees))
}

/// Probability of a value at least as large as `statistic`; `None` at zero
/// degrees of freedom.
pub fn chi_square_tail(statistic: f64, degrees: usize) -> Option<f64> {
    Some(distribution(degrees)?.sf(statistic.max(0.0)))
}

fn distribution(degrees: usize) -> Option<ChiSquared> {
    ChiSquared::new(degrees as f64).ok()
}

/// Newton steps on the tail: the library bisects to a coarser tolerance.
fn polish(start: f64, confidence: f64, degrees: usize) -> f64 {
    use statrs::distribution::Continuous;
    let Some(distribution) = distribution(degrees) else {
        return start;
    };
    let mut x = start;
    for _ in 0..3 {
        let slope = distribution.pdf(x);
        if slope <= 0.0 {
            break;
        }
        x += (distribution.sf(x) - (1.0 - confidence)) / slope;
    }
    x
}

#[cfg(test)]
mod tests {
    use super::*;

    /// NIST/SEMATECH e-Handbook of Statistical Methods, 1.3.6.7.4, upper
    /// critical values to five decimals; those of 20, 30 and 100 degrees of
    /// freedom computed. Values carried over from a copy of the table.
    #[test]
    fn critical_values_of_the_handbook() {
        let table = [
            (1, 3.84146, 6.6349),
            (2, 5.99146, 9.21034),
            (3, 7.81473, 11.34487),
            (4, 9.48773, 13.2767),
            (5, 11.0705, 15.08627),
            (6, 12.59159, 16.81189),
            (7, 14.06714, 18.47531),
            (8, 15.50731, 20.09024),
            (9, 16.91898, 21.66599),
            (10, 18.30704, 23.20925),
            (11, 19.67514, 24.72497),
            (12, 21.02607, 26.21697),
        ];
        for (degrees, five, one) in table {
            let quantile = |confidence| chi_square_quantile(confidence, degrees).unwrap();
            assert!((quantile(0.95) - five).abs() < 2e-5, "{degrees}");
            assert!((quantile(0.99) - one).abs() < 2e-5, "{degrees}");
        }
        for (degrees, five) in [(20, 31.41043), (30, 43.77297), (100, 124.34211)] {
            assert!((chi_square_quantile(0.95, degrees).unwrap() - five).abs() < 2e-5);
        }
    }

    #[test]
    fn tail_and_quantile_are_inverse() {
        for degrees in [1, 4, 37, 250] {
            let x = chi_square_quantile(0.95, degrees).unwrap();
            assert!((chi_square_tail(x, degrees).unwrap() - 0.05).abs() < 1e-10);
        }
        assert_eq!(chi_square_tail(3.0, 0), None);
    }
}
