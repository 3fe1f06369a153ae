//! From the samples of a period to its readings: time-weighted means with the
//! uncertainty that scatter adds, flags for samples that are not to be trusted,
//! and whether tag and plant were steady. Pure: no clock, no store.
