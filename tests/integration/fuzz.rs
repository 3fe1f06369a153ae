//! Targets for fuzzers: a plant file, a batch. As tests they run on a stable
//! compiler for a few seconds each, over the seeds beside them and random bytes;
//! under `cargo bolero` a fuzzer that sees the program's branches runs them.
//!
//! `COUNTERPOISE_FUZZ=60` gives each so many seconds. The bytes are taken twice: as
//! they are, and as a list of damages to a sound document.

use crate::harness::batch;
use crate::parsers::{damage, damages, is_a_batch_or_told, is_a_plant_or_told, sound_plants};
use std::time::Duration;

/// How long one target runs as a test.
fn time() -> Duration {
    let seconds = std::env::var("COUNTERPOISE_FUZZ").ok();
    let seconds = seconds.and_then(|text| text.parse().ok()).unwrap_or(3);
    Duration::from_secs(seconds)
}

/// Longest input, in bytes.
const LONGEST: usize = 16 << 10;

#[test]
fn a_plant_file() {
    let sound = sound_plants();
    bolero::check!(name = "plant-file")
        .with_test_time(time())
        .with_iterations(usize::MAX)
        .with_max_len(LONGEST)
        .for_each(|bytes: &[u8]| {
            is_a_plant_or_told(bytes);
            let damages = damages(&bytes[..bytes.len().min(64)]);
            let which = bytes
                .first()
                .map_or(0, |&byte| usize::from(byte) % sound.len());
            is_a_plant_or_told(&damage(&sound[which], &damages));
        });
}

#[test]
fn a_batch() {
    let sound = batch("b", 0, 150.0);
    bolero::check!(name = "batch")
        .with_test_time(time())
        .with_iterations(usize::MAX)
        .with_max_len(LONGEST)
        .for_each(|bytes: &[u8]| {
            is_a_batch_or_told(bytes);
            is_a_batch_or_told(&damage(&sound, &damages(&bytes[..bytes.len().min(64)])));
        });
}
