//! The tests that look at the whole from outside, in one binary.

mod access;
mod alarms;
mod averaged;
mod backfills;
mod backup;
mod batches;
mod by_hand;
mod clients;
mod clock_steps;
mod cycles;
mod defects;
mod demo_truth;
mod deploy;
#[cfg(target_os = "linux")]
mod disks;
mod field_readings;
mod fluid;
mod fuzz;
mod gone;
mod harness;
mod history;
mod house;
mod identification;
mod jacobians;
#[cfg(target_os = "linux")]
mod kills;
mod laws;
mod line_ups;
mod malformed;
mod malformed_acts;
mod malformed_bombs;
mod malformed_slow;
mod metrics;
mod monte_carlo;
mod openapi;
mod parsers;
mod parsers_over_http;
mod plant_files;
#[cfg(target_os = "linux")]
mod power_cut;
mod published_networks;
mod readings;
mod reference;
mod replays;
mod robustness;
mod schemathesis;
mod service;
mod service_process;
mod settings;
mod store;
mod store_faults;
mod suspects_text;
mod trace;
mod under_load;
