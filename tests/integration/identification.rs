//! Whether the right one is accused, how often a wrong one, and whether what is
//! stated of sizes and limits is true: over seeded batches of the demonstration
//! plant with known errors in them.
//!
//! Every batch has its own load, fouling, true values of the assumptions and
//! noise. Counts are small by default, so that the tests stay short, and their
//! bounds allow three standard errors of the sample; `COUNTERPOISE_STUDY=200`
//! takes that many batches per hypothesis and holds each hypothesis by itself to
//! its bound too. Figures are printed: `cargo test --release --test integration
//! identification -- --nocapture`.
//!
//! Beside the demonstration plant stand published networks of flows, and the
//! independent reference's figures of every hypothesis.

mod bench;
mod detectability;
mod gross;
mod linear;
mod metering;
mod pairs;
mod power;
mod reference;
mod wrong_models;

/// Batches per hypothesis.
fn batches_each(usual: usize) -> usize {
    let asked = std::env::var("COUNTERPOISE_STUDY").ok();
    asked.and_then(|n| n.parse().ok()).unwrap_or(usual)
}

/// From so many batches on a hypothesis is held to its bound by itself.
const ENOUGH: usize = 100;

/// Three standard errors of a fraction `p` of `n`.
fn three_errors(p: f64, n: usize) -> f64 {
    3.0 * (p * (1.0 - p) / n.max(1) as f64).sqrt()
}
