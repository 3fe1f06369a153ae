//! The critical value of the largest of many correlated statistics, and how near
//! to the largest a statistic must be for its hypothesis to be held as likely.
//!
//! Whitened errors e of the observations, standard normal and independent, give
//! the numerator of every statistic as a row times e. All rows depend on e only
//! through the redundant space, R = U U', so that with z standard normal in d
//! dimensions all standardised statistics are W z, each row of W of unit length.
//!
//! - The critical value is the quantile of the largest of W z at the confidence,
//!   with |.| for statistics of two signs and the positive part for the others.
//! - Under hypothesis t of noncentrality D the statistics are W z + D W w_t.
//!   The group distance is the 95 % quantile of (largest)^2 - (statistic of t)^2
//!   where the largest exceeds the critical value: what lies within it of the
//!   best holds the true hypothesis with 95 %, whichever that is. It is taken at
//!   the size found with 80 % power and at twice that, and the largest over all
//!   hypotheses is kept.
//!
//! Both by simulation with a fixed seed. Sidak's bound, which takes the
//! statistics as independent, is the fallback for plants that are too large.

use super::POWER_QUANTILE;
use nalgebra::{DMatrix, DVectorView};
use rand::SeedableRng;
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, StandardNormal};
use statrs::distribution::{ContinuousCDF, Normal};

/// Draws of the simulation: the quantile's standard error is near 0.01.
const DRAWS: usize = 10_000;
/// Draws that the group distance is taken from, for each hypothesis and size.
const DISTANCE_DRAWS: usize = 1_000;
/// Draws at a time: one matrix product each.
const BLOCK: usize = 250;
/// Most multiplications that a simulation may take.
const LARGEST: usize = 3_000_000_000;
/// Seed of the simulation: fixed, so that a critical value is a function of the
/// statistics alone.
const SEED: u64 = 0x00C0_FFEE;
/// Pivots of the redundancy matrix below this are zero: it is a projector, and
/// its pivots are of the order of the redundancies.
const RANK_TOLERANCE: f64 = 1e-9;
/// Statistics correlated less than this are not taken for one another.
const RIVAL: f64 = 0.3;
/// Coverage of a group.
const GROUP_COVERAGE: f64 = 0.95;
/// Group distance where nothing is simulated: chi-square with two degrees of
/// freedom at 95 %, two directions to err in.
const DISTANCE_UNSIMULATED: f64 = 5.991_465;

/// How a critical value was found.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Method {
    /// By simulation.
    Simulated,
    /// By Sidak's bound.
    Sidak,
}

/// A critical value.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Critical {
    /// The value.
    pub value: f64,
    /// How it was found.
    pub method: Method,
    /// Number of statistics.
    pub statistics: usize,
    /// Likelihood ratios this near to the best belong to its group.
    pub group_distance: f64,
}

/// The critical value of the largest standardised statistic.
///
/// `redundancy` is the redundancy matrix R of the observations in use (n x n);
/// `rows` holds one row of n per statistic: the response of its numerator to
/// unit whitened errors; `one_sided` lies beside the rows. `None` where nothing
/// is tested.
pub fn critical_value(
    redundancy: &DMatrix<f64>,
    rows: &DMatrix<f64>,
    one_sided: &[bool],
    confidence: f64,
) -> Option<Critical> {
    let statistics = rows.nrows();
    if statistics == 0 {
        return None;
    }
    let basis = range_of_projector(redundancy);
    let work = statistics * basis.ncols() * DRAWS;
    if work > LARGEST {
        return Some(Critical {
            value: sidak(statistics, confidence),
            method: Method::Sidak,
            statistics,
            group_distance: DISTANCE_UNSIMULATED,
        });
    }
    let in_space = rows * &basis;
    let unit: Vec<_> = in_space.row_iter().map(|row| row.normalize()).collect();
    let simulation = Simulation {
        statistics: DMatrix::from_rows(&unit),
        one_sided,
    };
    let (value, kept) = simulation.critical(confidence);
    Some(Critical {
        value,
        method: Method::Simulated,
        statistics,
        group_distance: simulation.group_distance(value, &kept),
    })
}

/// Sidak's bound for independent statistics.
pub fn sidak(statistics: usize, confidence: f64) -> f64 {
    let each = 1.0 - confidence.powf(1.0 / statistics as f64);
    Normal::standard().inverse_cdf(1.0 - 0.5 * each)
}

struct Simulation<'a> {
    /// W, one unit row per statistic.
    statistics: DMatrix<f64>,
    one_sided: &'a [bool],
}

impl Simulation<'_> {
    /// The quantile of the largest, and the statistics of the first draws.
    fn critical(&self, confidence: f64) -> (f64, DMatrix<f64>) {
        let mut random = ChaCha8Rng::seed_from_u64(SEED);
        let mut largest: Vec<f64> = Vec::with_capacity(DRAWS);
        let mut draws = DMatrix::zeros(self.statistics.ncols(), BLOCK);
        let mut values = DMatrix::zeros(self.statistics.nrows(), BLOCK);
        let mut kept = DMatrix::zeros(self.statistics.nrows(), DISTANCE_DRAWS);
        while largest.len() < DRAWS {
            draws
                .iter_mut()
                .for_each(|z| *z = StandardNormal.sample(&mut random));
            values.gemm(1.0, &self.statistics, &draws, 0.0);
            if largest.len() < DISTANCE_DRAWS {
                kept.columns_mut(largest.len(), BLOCK).copy_from(&values);
            }
            largest.extend(values.column_iter().map(|draw| self.largest(&draw)));
        }
        (quantile(&mut largest, confidence), kept)
    }

    fn largest(&self, draw: &DVectorView<f64>) -> f64 {
        let sizes = draw.iter().zip(self.one_sided);
        sizes
            .map(|(&z, &one_sided)| size(z, one_sided))
            .fold(0.0, f64::max)
    }

    fn group_distance(&self, critical: f64, noise: &DMatrix<f64>) -> f64 {
        let correlation = &self.statistics * self.statistics.transpose();
        let mut distance = 0.0_f64;
        let mut differences = Vec::new();
        for t in 0..correlation.nrows() {
            let rivals: Vec<usize> = (0..correlation.nrows())
                .filter(|&h| h != t && correlation[(h, t)].abs() > RIVAL)
                .collect();
            for factor in [1.0, 2.0] {
                let shift = factor * (critical + POWER_QUANTILE);
                differences.clear();
                for (n, draw) in noise.column_iter().enumerate() {
                    // Of a statistic of two signs each comes in turn.
                    let sign = if self.one_sided[t] || n % 2 == 0 {
                        shift
                    } else {
                        -shift
                    };
                    let at =
                        |h: usize| size(draw[h] + sign * correlation[(h, t)], self.one_sided[h]);
                    let own = at(t);
                    let best = rivals.iter().map(|&h| at(h)).fold(own, f64::max);
                    if best > critical {
                        differences.push(best.powi(2) - own.powi(2));
                    }
                }
                if !differences.is_empty() {
                    distance = distance.max(quantile(&mut differences, GROUP_COVERAGE));
                }
            }
        }
        distance
    }
}

/// How far a statistic speaks for its hypothesis.
fn size(z: f64, one_sided: bool) -> f64 {
    if one_sided { z.max(0.0) } else { z.abs() }
}

fn quantile(values: &mut [f64], at: f64) -> f64 {
    let rank = ((at * values.len() as f64) as usize).min(values.len() - 1);
    *values.select_nth_unstable_by(rank, f64::total_cmp).1
}

/// U with R = U U', by Cholesky with full pivoting.
fn range_of_projector(redundancy: &DMatrix<f64>) -> DMatrix<f64> {
    let n = redundancy.nrows();
    let mut rest = redundancy.clone();
    let mut columns = Vec::new();
    while columns.len() < n {
        let diagonal = rest.diagonal();
        let pivot = diagonal.imax();
        if diagonal[pivot] <= RANK_TOLERANCE {
            break;
        }
        let column = rest.column(pivot) / diagonal[pivot].sqrt();
        rest.ger(-1.0, &column, &column, 1.0);
        columns.push(column);
    }
    if columns.is_empty() {
        return DMatrix::zeros(n, 0);
    }
    DMatrix::from_columns(&columns)
}

#[cfg(test)]
mod tests {
    use super::*;
    use nalgebra::DVector;

    /// Sidak values as printed with the exchanger-and-bypass example of
    /// Narasimhan and Jordache (2000), remembered: 2.4909 for 4, 2.631 for 6.
    #[test]
    fn sidak_of_the_bypass_example() {
        assert!((sidak(4, 0.95) - 2.4909).abs() < 1e-4);
        assert!((sidak(6, 0.95) - 2.631).abs() < 2e-4);
    }

    #[test]
    fn independent_statistics_come_out_as_sidak_and_are_told_apart() {
        let identity = DMatrix::identity(5, 5);
        let critical = critical_value(&identity, &identity, &[false; 5], 0.95).unwrap();
        assert_eq!(critical.method, Method::Simulated);
        assert!((critical.value - sidak(5, 0.95)).abs() < 0.04);
        assert_eq!(critical.group_distance, 0.0);
    }

    #[test]
    fn one_degree_of_freedom_is_one_statistic() {
        let e = DVector::from_element(6, 6_f64.sqrt().recip());
        let projector = &e * e.transpose();
        let critical = critical_value(&projector, &projector, &[false; 6], 0.95).unwrap();
        assert!((critical.value - 1.95996).abs() < 0.04);
        assert_eq!(critical.statistics, 6);
        assert!(critical.group_distance < 1e-9);
    }

    #[test]
    fn a_statistic_of_one_sign_has_the_one_sided_quantile() {
        let one = DMatrix::identity(1, 1);
        let critical = critical_value(&one, &one, &[true], 0.95).unwrap();
        assert!((critical.value - 1.64485).abs() < 0.05);
    }

    /// Of two statistics with correlation r the squared difference at the size D
    /// is normal with mean -u and variance 4 u, u = 2 D^2 (1 - r) to first order;
    /// its 95 % quantile is at most 1.645^2 = 2.706.
    #[test]
    fn two_rivals_need_no_more_distance_than_their_likelihood_ratio() {
        let (r, d) = (0.97_f64, 4.0);
        let rows = DMatrix::from_row_slice(2, 2, &[1.0, 0.0, r, (1.0 - r * r).sqrt()]);
        let critical = critical_value(&DMatrix::identity(2, 2), &rows, &[false; 2], 0.95).unwrap();
        let u = 2.0 * (1.0 - r) * d * d;
        let expected = 1.645 * 2.0 * u.sqrt() - u;
        assert!(critical.group_distance > 0.8 * expected);
        assert!(critical.group_distance < 3.2, "{}", critical.group_distance);
    }
}
