//! Samples, periods and backfills in SQLite.

use super::work::{AddSamples, BeginBackfill, ClosePeriod, DropPeriod, EndBackfill};
use super::{SqliteStore, read};
use crate::access::Deed;
use crate::store::{
    Backfill, Closed, NewSamples, OpenPeriod, PeriodBatch, ReadingsStore, Reply, SamplesTaken,
    TagSamples,
};
use futures::FutureExt;
use time::{Duration, OffsetDateTime};

impl ReadingsStore for SqliteStore {
    fn add_samples(&self, new: NewSamples) -> Reply<'_, Option<SamplesTaken>> {
        match AddSamples::new(new) {
            Ok(work) => self.write_now(work),
            Err(error) => std::future::ready(Err(error)).boxed(),
        }
    }

    fn samples<'a>(
        &'a self,
        plant: &'a str,
        from: OffsetDateTime,
        to: OffsetDateTime,
        holds: Duration,
    ) -> Reply<'a, Vec<TagSamples>> {
        read::samples(&self.readers, plant, from, to, holds).boxed()
    }

    fn open_periods<'a>(
        &'a self,
        plant: &'a str,
        due: OffsetDateTime,
        limit: usize,
    ) -> Reply<'a, Vec<OpenPeriod>> {
        read::open_periods(&self.readers, plant, due, limit).boxed()
    }

    fn plants_with_open_periods(&self) -> Reply<'_, Vec<String>> {
        read::plants_with_open_periods(&self.readers).boxed()
    }

    fn close_period(&self, batch: PeriodBatch) -> Reply<'_, Closed> {
        self.write_prepared(move || ClosePeriod::new(batch))
    }

    fn drop_period(&self, period: OpenPeriod) -> Reply<'_, ()> {
        self.write(DropPeriod(period))
    }

    fn body<'a>(&'a self, plant: &'a str, batch: &'a str, body: u32) -> Reply<'a, Option<Vec<u8>>> {
        read::body(&self.readers, plant, batch, body).boxed()
    }

    fn begin_backfill(
        &self,
        plant: &str,
        name: &str,
        at: OffsetDateTime,
        deed: Option<Deed>,
    ) -> Reply<'_, Option<Backfill>> {
        let (plant, name) = (plant.to_owned(), name.to_owned());
        self.write(BeginBackfill {
            plant,
            name,
            at,
            deed,
        })
    }

    fn end_backfill(&self, plant: &str, name: &str, at: OffsetDateTime) -> Reply<'_, ()> {
        let (plant, name) = (plant.to_owned(), name.to_owned());
        self.write(EndBackfill { plant, name, at })
    }

    fn backfill<'a>(&'a self, plant: &'a str, name: &'a str) -> Reply<'a, Option<Backfill>> {
        read::backfill(&self.readers, plant, name).boxed()
    }

    fn backfills<'a>(
        &'a self,
        plant: &'a str,
        after: Option<&'a str>,
        limit: usize,
    ) -> Reply<'a, Vec<Backfill>> {
        read::backfills(&self.readers, plant, after, limit).boxed()
    }
}
