//! What readers ask.

mod access;
mod batches;
mod by_hand;
mod plants;
mod readings;
mod replays;
mod results;
mod room;
mod series;
mod watch;

pub(super) use access::{deeds, token, tokens, tokens_version};
pub(super) use batches::{batch, batches, inbox, unfinished};
pub(super) use by_hand::{by_hand, decision, field_readings};
pub(super) use plants::{critical_values, current_plant, plant, plants};
pub(super) use readings::{
    backfill, backfills, begun_backfill, body, open_periods, plants_with_open_periods, samples,
};
pub(super) use replays::{kept_replay, replay, replayed, replays, running_replays, unreplayed};
pub(super) use results::{version, versions};
pub(super) use room::room;
pub(super) use series::series;
pub(super) use watch::{
    accusation, accusations, delivered, events, events_of_all, newest_event, watch,
};

use super::fault::nanoseconds;
use time::OffsetDateTime;

fn earliest(from: Option<OffsetDateTime>) -> i64 {
    from.map_or(i64::MIN, nanoseconds)
}

fn latest(to: Option<OffsetDateTime>) -> i64 {
    to.map_or(i64::MAX, nanoseconds)
}

fn count(limit: usize) -> i64 {
    i64::try_from(limit).unwrap_or(i64::MAX)
}
