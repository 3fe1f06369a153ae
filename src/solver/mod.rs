//! Sparse constrained least squares: solve, classify, and say how sure.
//!
//! The solver knows no tags, fluids or units. A [`Problem`] gives residuals
//! and Jacobians; a [`Symbolic`] is made once from its [`Structure`] and
//! serves every batch; [`solve`] finds the point.

#[cfg(test)]
mod checks;
mod classes;
mod covariance;
mod factor;
mod filter;
mod gauss_newton;
mod ordering;
mod outcome;
mod pairing;
mod problem;
mod projection;
mod rank;
mod refine;
mod search;
mod selected;
mod solve;
mod sparse_rows;
mod symbolic;
mod system;
#[cfg(test)]
mod testing;
mod unbiased;

pub use classes::{Classes, classify};
pub use covariance::{Column, Covariance};
pub use outcome::{Hold, Options, Outcome, Reason, Status};
pub use problem::{Evaluation, Outside, Problem, Rows, Structure};
pub use solve::solve;
pub use symbolic::Symbolic;
