//! What nothing can be faster than: HTTP alone, and SQLite alone.

use crate::client::{Load, Measured};
use crate::plant::Batches;
use axum::body::Bytes;
use axum::http::StatusCode;
use axum::routing::post;
use sqlx::sqlite::{SqliteConnectOptions, SqliteJournalMode, SqliteSynchronous};
use sqlx::{ConnectOptions, Connection};
use std::time::{Duration, Instant};
use time::OffsetDateTime;

/// Rows that one commit takes.
const GROUP: usize = 64;

/// Batches that are read and dropped.
pub async fn http(batches: &Batches, lasting: Duration) -> Measured {
    let router = axum::Router::new().route(
        "/v1/plants/string/batches",
        post(async |body: Bytes| {
            match counterpoise::ingest::parse(&body, OffsetDateTime::now_utc()) {
                Ok(_) => StatusCode::ACCEPTED,
                Err(_) => StatusCode::BAD_REQUEST,
            }
        }),
    );
    let listener = tokio::net::TcpListener::bind("127.0.0.1:0")
        .await
        .expect("an address");
    let address = listener.local_addr().expect("an address");
    let serving = tokio::spawn(async { axum::serve(listener, router).await });
    let measured = Load::new(crate::CLIENTS)
        .run(address, batches, lasting)
        .await;
    serving.abort();
    measured
}

/// Batches a second that are inserted as they are, many a commit, each commit synced.
pub async fn sqlite(batches: &Batches, lasting: Duration) -> f64 {
    let directory = tempfile::tempdir_in(env!("CARGO_TARGET_TMPDIR")).expect("a directory");
    let options = SqliteConnectOptions::new()
        .filename(directory.path().join("floor.sqlite"))
        .create_if_missing(true)
        .page_size(16_384)
        .journal_mode(SqliteJournalMode::Wal)
        .synchronous(SqliteSynchronous::Full);
    let mut connection = options.connect().await.expect("a database");
    let table = "CREATE TABLE inbox (id INTEGER PRIMARY KEY, body BLOB NOT NULL) STRICT";
    sqlx::query(table)
        .execute(&mut connection)
        .await
        .expect("a table");
    let started = Instant::now();
    let mut rows = 0;
    while started.elapsed() < lasting {
        let mut transaction = connection.begin().await.expect("begun");
        for _ in 0..GROUP {
            sqlx::query("INSERT INTO inbox (body) VALUES (?1)")
                .bind(batches.body(rows).into_bytes())
                .execute(&mut *transaction)
                .await
                .expect("inserted");
            rows += 1;
        }
        transaction.commit().await.expect("committed");
    }
    rows as f64 / started.elapsed().as_secs_f64()
}
