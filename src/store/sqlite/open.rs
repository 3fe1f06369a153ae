//! Opening the file: options, migrations, and the checks before the first
//! batch.

use super::fault::{corrupt, explain};
use super::{Hindrance, SqliteOptions, Synchronous, sql};
use crate::store::StoreError;
use sqlx::sqlite::{
    SqliteAutoVacuum, SqliteConnectOptions, SqliteConnection, SqliteJournalMode, SqliteSynchronous,
};
use sqlx::{AssertSqlSafe, ConnectOptions};

/// The oldest SQLite that is used: before it, a reset of the write-ahead log
/// could lose commits.
pub const OLDEST_SQLITE: (u32, u32, u32) = (3, 51, 3);

/// Day chunks of many tags will fill pages of this size; a file keeps the size
/// that it was made with.
const PAGE_SIZE: u32 = 16_384;

fn common(options: &SqliteOptions) -> SqliteConnectOptions {
    SqliteConnectOptions::new()
        .filename(&options.path)
        .busy_timeout(options.lock_timeout)
        .foreign_keys(true)
        .disable_statement_logging()
}

fn writer(options: &SqliteOptions) -> SqliteConnectOptions {
    common(options)
        .create_if_missing(true)
        .page_size(PAGE_SIZE)
        .auto_vacuum(SqliteAutoVacuum::Incremental)
        .journal_mode(SqliteJournalMode::Wal)
        .synchronous(match options.synchronous {
            Synchronous::Full => SqliteSynchronous::Full,
            Synchronous::Normal => SqliteSynchronous::Normal,
        })
}

/// How a reader connects.
pub(super) fn reader(options: &SqliteOptions) -> SqliteConnectOptions {
    common(options).pragma("query_only", "ON")
}

/// The writer's connection at start-up, after every check.
pub(super) async fn first(options: &SqliteOptions) -> Result<SqliteConnection, StoreError> {
    let mut connection = writer(options).connect().await.map_err(|e| explain(&e))?;
    check_version(&mut connection).await?;
    check_integrity(&mut connection).await?;
    migrate(options, &mut connection).await?;
    prove_durable(&mut connection)
        .await
        .map_err(|e| explain(&e))?;
    Ok(connection)
}

/// A writer's connection beside a service that may be running.
pub(super) async fn beside(
    options: &SqliteOptions,
    make: bool,
) -> Result<SqliteConnection, StoreError> {
    let writer = writer(options).create_if_missing(make);
    let mut connection = writer.connect().await.map_err(|e| explain(&e))?;
    check_version(&mut connection).await?;
    migrate(options, &mut connection).await?;
    Ok(connection)
}

async fn migrate(
    options: &SqliteOptions,
    connection: &mut SqliteConnection,
) -> Result<(), StoreError> {
    sqlx::migrate!("./migrations")
        .run(&mut *connection)
        .await
        .map_err(|error| {
            StoreError::Unusable(format!(
                "the schema of {} cannot be brought up to date: {error}",
                options.path.display()
            ))
        })
}

/// The writer's connection after a failure.
pub(super) async fn again(
    options: &SqliteOptions,
    hindrance: Hindrance,
) -> Result<SqliteConnection, sqlx::Error> {
    let mut connection = writer(options).create_if_missing(false).connect().await?;
    hinder(&mut connection, hindrance).await?;
    prove_durable(&mut connection).await?;
    Ok(connection)
}

/// Makes a connection behave as on a full or read-only disk.
pub(super) async fn hinder(
    connection: &mut SqliteConnection,
    hindrance: Hindrance,
) -> Result<(), sqlx::Error> {
    const AS_MANY_AS_THERE_CAN_BE: u32 = 4_294_967_294;
    let pages = hindrance.max_pages.unwrap_or(AS_MANY_AS_THERE_CAN_BE);
    let pages = format!("PRAGMA max_page_count = {pages}");
    let read_only = format!("PRAGMA query_only = {}", u8::from(hindrance.read_only));
    sqlx::query(AssertSqlSafe(pages))
        .execute(&mut *connection)
        .await?;
    sqlx::query(AssertSqlSafe(read_only))
        .execute(&mut *connection)
        .await?;
    Ok(())
}

async fn check_version(connection: &mut SqliteConnection) -> Result<(), StoreError> {
    let version: String = sqlx::query_scalar(sql::SQLITE_VERSION)
        .fetch_one(connection)
        .await
        .map_err(|e| explain(&e))?;
    if is_new_enough(&version) {
        return Ok(());
    }
    let (major, minor, patch) = OLDEST_SQLITE;
    Err(StoreError::Unusable(format!(
        "SQLite {version} is too old: {major}.{minor}.{patch} or newer is needed"
    )))
}

/// Whether a version text such as `3.51.3` is [`OLDEST_SQLITE`] or newer.
pub(super) fn is_new_enough(version: &str) -> bool {
    let mut parts = version
        .split('.')
        .map(|part| part.parse::<u32>().unwrap_or(0));
    let mut next = || parts.next().unwrap_or(0);
    (next(), next(), next()) >= OLDEST_SQLITE
}

async fn check_integrity(connection: &mut SqliteConnection) -> Result<(), StoreError> {
    let answer: String = sqlx::query_scalar(sql::QUICK_CHECK)
        .fetch_one(connection)
        .await
        .map_err(|e| explain(&e))?;
    if answer == "ok" {
        return Ok(());
    }
    Err(corrupt(format!("the database file is damaged: {answer}")))
}

/// A real write, fsynced, and everything in the log written back to the file.
async fn prove_durable(connection: &mut SqliteConnection) -> Result<(), sqlx::Error> {
    sqlx::query(sql::BEGIN).execute(&mut *connection).await?;
    sqlx::query(sql::COUNT_START)
        .execute(&mut *connection)
        .await?;
    sqlx::query(sql::COMMIT).execute(&mut *connection).await?;
    checkpoint(connection).await
}

/// Writes the log back to the file. A reader in the way is no fault: what is in
/// the log is durable.
pub(super) async fn checkpoint(connection: &mut SqliteConnection) -> Result<(), sqlx::Error> {
    let (busy, _, _): (i64, i64, i64) = sqlx::query_as(sql::CHECKPOINT)
        .fetch_one(connection)
        .await?;
    if busy != 0 {
        tracing::info!("a reader kept the log from being written back completely");
    }
    Ok(())
}
