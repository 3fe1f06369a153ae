//! Laws that any right estimator obeys, held against whole plants: what must be
//! equal, what must add up, what must change nothing, and what a report must say.
//!
//! None of them knows an expected number; each is an identity of weighted least
//! squares under constraints, so a wrong weight, Jacobian, rank or variance
//! breaks at least one. Where an identity is exact only to first order, the
//! readings are kept so near to an exact balance that the second order is far
//! below the tolerance.

mod balances;
mod exact;
mod invariance;
mod propagation;
mod readings;
mod saturation;
mod suspects;
mod workbench;
