//! The tests that look at the whole from outside, in one binary.

mod batches;
mod cycles;
mod defects;
mod demo_truth;
mod fluid;
mod harness;
mod house;
mod identification;
mod jacobians;
mod laws;
mod malformed;
mod malformed_slow;
mod monte_carlo;
mod openapi;
mod plant_files;
mod published_networks;
mod reference;
mod robustness;
mod service;
mod service_process;
mod store;
mod store_faults;
