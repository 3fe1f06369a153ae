//! From the bytes of a batch to a [`Batch`](crate::plant::Batch), or to every
//! fault in them at once, each with its place.
//!
//! The reader is our own because a general-purpose one stops at the first
//! fault, keeps the last of two equal keys in silence, and cannot say where in
//! the text a value stood. Numbers are read correctly rounded, so a value that
//! was printed with 17 digits comes back as the same bits.
//!
//! A batch has one canonical form ([`Parsed::digest`]): times in UTC, readings
//! in order of their tags. Two bodies with the same canonical form are the same
//! batch, whatever their spelling.

mod averaged;
mod batch;
mod digest;
mod faults;
mod fields;
mod json;
mod readings;
mod write;

pub use batch::{Parsed, Refusal, parse};
pub use fields::FUTURE_ALLOWANCE;
pub use readings::{Block, Readings, ReadingsForm, ReadingsLines, readings};
pub use write::write;

/// Longest name of a batch or a tag, in characters.
pub const LONGEST_NAME: usize = 128;

/// Deepest nesting of arrays and objects that is read.
pub const DEEPEST_NESTING: usize = 16;
