//! Which trace an event came of, so that what is sent of it belongs to the same.
//!
//! Kept in memory only: an event that is sent after a restart begins a trace of
//! its own, and so may one that the webhook has read before it was remembered.

use super::lock;
use crate::http::trace::Trace;
use std::collections::BTreeMap;
use std::sync::{Arc, Mutex};

/// Events whose traces are remembered.
const REMEMBERED: usize = 1024;

/// See the module.
#[derive(Default)]
pub(in crate::http) struct Traces(Mutex<BTreeMap<i64, Arc<Trace>>>);

impl Traces {
    /// Events have come of the present task's trace.
    pub fn remember(&self, events: &[i64]) {
        let Some(trace) = Trace::current() else {
            return;
        };
        let mut traces = lock(&self.0);
        traces.extend(events.iter().map(|event| (*event, Arc::clone(&trace))));
        while traces.len() > REMEMBERED {
            traces.pop_first();
        }
    }

    /// The trace of an event.
    pub fn of(&self, event: i64) -> Option<Arc<Trace>> {
        lock(&self.0).get(&event).map(Arc::clone)
    }
}
