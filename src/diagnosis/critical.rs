//! The critical value of the largest of many correlated statistics.
//!
//! Whitened errors e of the observations, standard normal and independent, give
//! adjustments R e and multipliers L e; both depend on e only through the
//! redundant space, R = U U', so that with z standard normal in d dimensions all
//! standardised statistics are rows of one matrix W times z, each row of unit
//! length. The critical value is the quantile of max |W z| at the confidence,
//! by simulation with a fixed seed. Sidak's bound, which takes the statistics as
//! independent, is the fallback for plants that are too large.

use nalgebra::DMatrix;
use rand::SeedableRng;
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, StandardNormal};
use statrs::distribution::{ContinuousCDF, Normal};

/// Draws of the simulation: the quantile's standard error is near 0.01.
const DRAWS: usize = 10_000;
/// Most multiplications that a simulation may take.
const LARGEST: usize = 3_000_000_000;
/// Seed of the simulation: fixed, so that a critical value is a function of the
/// statistics alone.
const SEED: u64 = 0x00C0_FFEE;
/// Pivots of the redundancy matrix below this are zero: it is a projector, and
/// its pivots are of the order of the redundancies.
const RANK_TOLERANCE: f64 = 1e-9;

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
}

/// The critical value of the largest standardised statistic.
///
/// `redundancy` is the redundancy matrix R of the observations in use (n x n);
/// `multipliers` holds one row of n per balance that is tested: the response
/// of its multiplier to unit whitened errors; `tested` lists the observations
/// whose adjustment is tested. `None` where nothing is tested.
pub fn critical_value(
    redundancy: &DMatrix<f64>,
    multipliers: &DMatrix<f64>,
    tested: &[usize],
    confidence: f64,
) -> Option<Critical> {
    let statistics = tested.len() + multipliers.nrows();
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
        });
    }
    let balances = multipliers * &basis;
    let rows = tested.iter().map(|&i| basis.row(i).into_owned());
    let rows = rows.chain((0..balances.nrows()).map(|k| balances.row(k).into_owned()));
    let unit: Vec<_> = rows.map(|row| row.normalize()).collect();
    let statistics_by_draw = DMatrix::from_rows(&unit);
    Some(Critical {
        value: simulate(&statistics_by_draw, confidence),
        method: Method::Simulated,
        statistics,
    })
}

/// Sidak's bound for independent statistics.
pub fn sidak(statistics: usize, confidence: f64) -> f64 {
    let each = 1.0 - confidence.powf(1.0 / statistics as f64);
    Normal::standard().inverse_cdf(1.0 - 0.5 * each)
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

/// Draws at a time: one matrix product each.
const BLOCK: usize = 250;

fn simulate(statistics: &DMatrix<f64>, confidence: f64) -> f64 {
    let mut random = ChaCha8Rng::seed_from_u64(SEED);
    let mut largest: Vec<f64> = Vec::with_capacity(DRAWS);
    let mut draws = DMatrix::zeros(statistics.ncols(), BLOCK);
    let mut values = DMatrix::zeros(statistics.nrows(), BLOCK);
    while largest.len() < DRAWS {
        draws
            .iter_mut()
            .for_each(|z| *z = StandardNormal.sample(&mut random));
        values.gemm(1.0, statistics, &draws, 0.0);
        largest.extend(values.column_iter().map(|draw| draw.amax()));
    }
    let rank = ((confidence * DRAWS as f64) as usize).min(DRAWS - 1);
    *largest.select_nth_unstable_by(rank, f64::total_cmp).1
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Sidak values as printed with the exchanger-and-bypass example of
    /// Narasimhan and Jordache (2000), remembered: 2.4909 for 4, 2.631 for 6.
    #[test]
    fn sidak_of_the_bypass_example() {
        assert!((sidak(4, 0.95) - 2.4909).abs() < 1e-4);
        assert!((sidak(6, 0.95) - 2.631).abs() < 2e-4);
    }

    #[test]
    fn independent_statistics_come_out_as_sidak() {
        let critical = critical_value(
            &DMatrix::identity(5, 5),
            &DMatrix::zeros(0, 5),
            &[0, 1, 2, 3, 4],
            0.95,
        );
        let critical = critical.unwrap();
        assert_eq!(critical.method, Method::Simulated);
        assert!((critical.value - sidak(5, 0.95)).abs() < 0.04);
    }

    #[test]
    fn one_degree_of_freedom_is_one_statistic() {
        let e = nalgebra::DVector::from_element(6, 6_f64.sqrt().recip());
        let projector = &e * e.transpose();
        let critical =
            critical_value(&projector, &DMatrix::zeros(0, 6), &[0, 1, 2, 3, 4, 5], 0.95).unwrap();
        assert!((critical.value - 1.95996).abs() < 0.04);
        assert_eq!(critical.statistics, 6);
    }
}
