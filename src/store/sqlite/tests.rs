//! What only SQLite can be asked. That it is a [`Store`](crate::store::Store)
//! is tested from outside, against the trait.

use super::*;
use sqlx::{AssertSqlSafe, ConnectOptions, Executor, SqlSafeStr};

async fn fresh() -> (tempfile::TempDir, SqliteOptions, sqlx::SqliteConnection) {
    let directory = tempfile::tempdir().expect("a directory");
    let options = SqliteOptions::new(directory.path().join("test.sqlite"));
    let connection = open::first(&options).await.expect("a database");
    (directory, options, connection)
}

#[tokio::test]
async fn every_statement_prepares() {
    let (_directory, _, mut connection) = fresh().await;
    for (statements, source) in [
        (sql::OF_BATCHES, include_str!("sql/mod.rs")),
        (sql::OF_ACCESS, include_str!("sql/access.rs")),
        (sql::OF_COPIES, include_str!("sql/copies.rs")),
        (sql::OF_HISTORY, include_str!("sql/history.rs")),
        (sql::OF_READINGS, include_str!("sql/readings.rs")),
        (sql::OF_RECORDS, include_str!("sql/records.rs")),
        (sql::OF_REPLAYS, include_str!("sql/replays.rs")),
    ] {
        for statement in statements {
            let prepared = (&mut connection)
                .prepare(AssertSqlSafe(*statement).into_sql_str())
                .await;
            assert!(prepared.is_ok(), "{statement}: {:?}", prepared.err());
        }
        assert_eq!(
            source.matches("pub(in crate::store::sqlite) const").count(),
            statements.len() + 1,
            "one is missing in the list at the end"
        );
    }
    for (count, statement) in sql::INSERT_SAMPLES.iter() {
        let prepared = (&mut connection).prepare(statement.as_str().into_sql_str());
        let prepared = prepared.await;
        assert!(prepared.is_ok(), "{count}: {:?}", prepared.err());
    }
    assert_eq!(
        std::fs::read_dir(concat!(env!("CARGO_MANIFEST_DIR"), "/src/store/sqlite/sql"))
            .expect("the folder")
            .count(),
        7,
        "a file of statements is not looked at"
    );
}

#[tokio::test]
async fn a_commit_is_on_disk() {
    let (_directory, options, mut connection) = fresh().await;
    for reopened in [false, true] {
        if reopened {
            connection = open::again(&options, Hindrance::default())
                .await
                .expect("a database");
        }
        let mut pragma = async |name: &str| -> String {
            let sql = AssertSqlSafe(format!("PRAGMA {name}"));
            let row = sqlx::query(sql)
                .fetch_one(&mut connection)
                .await
                .expect("a value");
            sqlx::Row::try_get_unchecked::<String, _>(&row, 0).expect("text")
        };
        assert_eq!(pragma("journal_mode").await, "wal");
        assert_eq!(pragma("synchronous").await, "2", "FULL");
        assert_eq!(pragma("foreign_keys").await, "1");
        assert_eq!(pragma("page_size").await, "16384");
        assert_eq!(pragma("auto_vacuum").await, "2", "in steps");
    }
}

#[tokio::test]
async fn a_reader_cannot_write() {
    let (_directory, options, _connection) = fresh().await;
    let mut reader = open::reader(&options).connect().await.expect("a reader");
    let written = sqlx::query(sql::COUNT_START).execute(&mut reader).await;
    let error = written.expect_err("a refusal");
    assert!(
        matches!(fault::explain(&error), StoreError::Unavailable(_)),
        "{error}"
    );
}

#[tokio::test]
async fn the_sqlite_in_this_binary_is_new_enough() {
    let (_directory, _, mut connection) = fresh().await;
    let version: String = sqlx::query_scalar(sql::SQLITE_VERSION)
        .fetch_one(&mut connection)
        .await
        .expect("a version");
    assert!(open::is_new_enough(&version), "{version}");
    assert_eq!(OLDEST_SQLITE, (3, 51, 3));
}

#[test]
fn older_versions_are_told_apart() {
    for (version, enough) in [
        ("3.51.2", false),
        ("3.51.3", true),
        ("3.52.0", true),
        ("3.9.9", false),
        ("4.0.0", true),
        ("", false),
    ] {
        assert_eq!(open::is_new_enough(version), enough, "{version}");
    }
}

#[tokio::test]
async fn every_table_of_ours_is_strict() {
    let (_directory, _, mut connection) = fresh().await;
    let loose: Vec<String> = sqlx::query_scalar(
        "SELECT name FROM pragma_table_list
         WHERE type = 'table' AND strict = 0 AND schema = 'main'
           AND name NOT LIKE 'sqlite_%' AND name <> '_sqlx_migrations'",
    )
    .fetch_all(&mut connection)
    .await
    .expect("a list");
    assert_eq!(loose, Vec::<String>::new());
}

#[tokio::test]
async fn a_damaged_file_is_refused() {
    let (directory, options, connection) = fresh().await;
    sqlx::Connection::close(connection).await.expect("closed");
    std::fs::write(directory.path().join("test.sqlite"), vec![7u8; 40_000]).expect("written");
    let error = open::first(&options).await.expect_err("a refusal");
    assert!(matches!(error, StoreError::Corrupt(_)), "{error:?}");
}
