//! How large the database is, and how much room there is for it.

use crate::store::sqlite::fault::explain;
use crate::store::sqlite::sql;
use crate::store::{Room, StoreError};
use sqlx::SqlitePool;
use std::path::Path;

/// Sizes of the database, its log and its disk, and what waits in it.
pub(in crate::store::sqlite) async fn room(
    readers: &SqlitePool,
    path: &Path,
) -> Result<Room, StoreError> {
    let (pages, free, page, pending, open): (i64, i64, i64, i64, i64) = sqlx::query_as(sql::ROOM)
        .fetch_one(readers)
        .await
        .map_err(|error| explain(&error))?;
    let bytes = |pages: i64| u64::try_from(pages.saturating_mul(page)).unwrap_or(0);
    let mut log = path.as_os_str().to_owned();
    log.push("-wal");
    Ok(Room {
        bytes: bytes(pages),
        free: bytes(free),
        log: std::fs::metadata(log).map_or(0, |log| log.len()),
        // As a service sees it that is not root.
        disk_free: rustix::fs::statvfs(path)
            .ok()
            .map(|disk| disk.f_bavail.saturating_mul(disk.f_frsize)),
        pending: u64::try_from(pending).unwrap_or(0),
        open_periods: u64::try_from(open).unwrap_or(0),
    })
}
