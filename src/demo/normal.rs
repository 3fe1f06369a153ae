//! Standard normal numbers from uniform ones, by the polar form of Box and
//! Muller (Marsaglia and Bray 1964). The second number of each pair is thrown
//! away: a caller then always takes up the stream where it left it.

use rand::Rng;

/// One standard normal number.
pub(super) fn standard_normal(rng: &mut impl Rng) -> f64 {
    loop {
        let a = 2.0 * rng.random::<f64>() - 1.0;
        let b = 2.0 * rng.random::<f64>() - 1.0;
        let square = a * a + b * b;
        if square > 0.0 && square < 1.0 {
            return a * (-2.0 * square.ln() / square).sqrt();
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use rand::SeedableRng;
    use rand_chacha::ChaCha8Rng;

    #[test]
    fn moments_are_those_of_the_standard_normal() {
        let mut rng = ChaCha8Rng::seed_from_u64(1);
        let n = 200_000;
        let sample: Vec<f64> = (0..n).map(|_| standard_normal(&mut rng)).collect();
        let moment = |k: i32| sample.iter().map(|z| z.powi(k)).sum::<f64>() / n as f64;
        // Five standard errors each: var(z^k) is 1, 2, 15, 96 for k = 1 to 4.
        let error = |variance: f64| 5.0 * (variance / n as f64).sqrt();
        assert!(moment(1).abs() < error(1.0));
        assert!((moment(2) - 1.0).abs() < error(2.0));
        assert!(moment(3).abs() < error(15.0));
        assert!((moment(4) - 3.0).abs() < error(96.0));
    }
}
