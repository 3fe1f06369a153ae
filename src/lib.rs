//! Counterpoise reconciles the measurements of steam and power plants.
//!
//! It takes what the instruments say, finds the nearest set of flows,
//! pressures and temperatures that conserve mass and energy, and says how sure
//! each value is and whether the whole is consistent. `DEVELOPERS.md` is the
//! map of the modules; the middle of the program ([`plant`], [`equations`],
//! [`solver`], [`diagnosis`], [`pipeline`]) is pure, and clock, database and
//! sockets stay at the edges.
#![forbid(unsafe_code)]

pub mod access;
pub mod alarms;
pub mod averaging;
pub mod cli;
pub mod comparison;
pub mod config;
pub mod demo;
pub mod diagnosis;
pub mod equations;
pub mod fluid;
pub mod http;
pub mod ingest;
pub mod meter;
pub mod pipeline;
pub mod plant;
pub mod report;
pub mod server;
pub mod solver;
pub mod store;
pub mod telemetry;
pub mod webhook;
