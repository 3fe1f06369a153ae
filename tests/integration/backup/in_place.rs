//! What becomes of the database that a copy takes the place of.

use super::{TROUBLE, database, done, everything, names, open, refused, rows, text};
use crate::harness::{Service, Setup, batch};
use counterpoise::store::verify;
use reqwest::StatusCode;
use sqlx::Connection;

const RESTORE: [&str; 4] = ["restore", "copy", "--database", "test.sqlite"];
const REPLACE: [&str; 5] = ["restore", "copy", "--database", "test.sqlite", "--replace"];

#[tokio::test]
async fn what_was_there_is_kept() {
    let folder = tempfile::tempdir().expect("a folder");
    let folder = folder.path();
    let path = folder.join("test.sqlite");
    database(&path, &["then"]).await;
    done(folder, &["backup", "--database", "test.sqlite", "copy"]);
    let then = rows(&path).await;
    database(&path, &["then", "now"]).await;
    let now = rows(&path).await;
    let told = refused(folder, &RESTORE, TROUBLE);
    assert!(
        told.contains("test.sqlite") && told.contains("--replace"),
        "{told}"
    );

    let said = done(folder, &REPLACE);
    assert!(said.contains("test.sqlite.before-restore"), "{said}");
    assert_eq!(rows(&path).await, then);
    assert_eq!(rows(&folder.join("test.sqlite.before-restore")).await, now);
    assert_eq!(
        names(&everything(folder)),
        ["copy", "test.sqlite", "test.sqlite.before-restore"]
    );
    let told = refused(folder, &REPLACE, TROUBLE);
    assert!(
        told.contains("before-restore") && told.contains("move it away"),
        "{told}"
    );
    std::fs::remove_file(folder.join("test.sqlite.before-restore")).expect("removed");
    done(folder, &REPLACE);
    let told = refused(
        folder,
        &["restore", "copy", "--database", "copy", "--replace"],
        TROUBLE,
    );
    assert!(told.contains("name another"), "{told}");
}

/// The log of a service that was killed belongs to the old database, and would
/// destroy the new one.
#[tokio::test]
async fn a_log_that_was_left_goes_with_the_old_database() {
    let folder = tempfile::tempdir().expect("a folder");
    let folder = folder.path();
    let path = folder.join("test.sqlite");
    database(&path, &["then"]).await;
    done(folder, &["backup", "--database", "test.sqlite", "copy"]);
    let then = rows(&path).await;
    // What a kill leaves: all that was written since, in the log alone.
    let mut connection = open(&path).await;
    let changes = "PRAGMA journal_mode = WAL; INSERT INTO plants (name) VALUES ('in the log');";
    sqlx::raw_sql(changes)
        .execute(&mut connection)
        .await
        .expect("changed");
    let left: Vec<(String, Vec<u8>)> = everything(folder)
        .into_iter()
        .filter(|(name, _)| name.starts_with("test.sqlite"))
        .collect();
    assert_eq!(left.len(), 3, "a file, a log and an index");
    connection.close().await.expect("closed");
    let killed = || {
        for (name, bytes) in &left {
            std::fs::write(folder.join(name), bytes).expect("written");
        }
    };
    killed();
    done(folder, &["backup", "--database", "test.sqlite", "later"]);
    let later = rows(&folder.join("later")).await;
    assert!(
        later.iter().any(|row| row.contains("in the log")),
        "{later:?}"
    );
    std::fs::remove_file(folder.join("later")).expect("removed");
    killed();
    let told = refused(folder, &RESTORE, TROUBLE);
    assert!(told.contains("--replace"), "{told}");
    let told = refused(folder, &["verify", "test.sqlite"], TROUBLE);
    assert!(
        told.contains("test.sqlite-wal") && told.contains("counterpoise backup"),
        "{told}"
    );

    done(folder, &REPLACE);
    assert_eq!(
        names(&everything(folder)),
        ["copy", "test.sqlite", "test.sqlite.before-restore"]
    );
    verify(&path).await.expect("a sound database");
    assert_eq!(rows(&path).await, then);
    let kept = rows(&folder.join("test.sqlite.before-restore")).await;
    assert!(
        kept.iter().any(|row| row.contains("in the log")),
        "{kept:?}"
    );

    // The same, where the old database is too damaged to be locked.
    std::fs::remove_file(folder.join("test.sqlite.before-restore")).expect("removed");
    killed();
    std::fs::write(&path, vec![7; 50_000]).expect("written");
    let told = refused(folder, &REPLACE, TROUBLE);
    assert!(
        told.contains("test.sqlite-shm") && told.contains("no service uses it"),
        "{told}"
    );
    std::fs::remove_file(folder.join("test.sqlite-shm")).expect("removed");
    done(folder, &REPLACE);
    verify(&path).await.expect("a sound database");
    assert_eq!(rows(&path).await, then);
    let files = everything(folder);
    assert_eq!(files["test.sqlite.before-restore"], vec![7; 50_000]);
    let log = left
        .iter()
        .find(|(name, _)| name.ends_with("-wal"))
        .expect("a log");
    assert_eq!(files["test.sqlite.before-restore-wal"], log.1);
    assert_eq!(files.len(), 4);
}

/// Without a database only its log may be left: that is in the way too.
#[tokio::test]
async fn a_log_without_a_database_is_set_aside() {
    let folder = tempfile::tempdir().expect("a folder");
    let folder = folder.path();
    let path = folder.join("test.sqlite");
    database(&path, &["then"]).await;
    done(folder, &["backup", "--database", "test.sqlite", "copy"]);
    std::fs::rename(&path, folder.join("test.sqlite-wal")).expect("renamed");
    let told = refused(folder, &RESTORE, TROUBLE);
    assert!(
        told.contains("test.sqlite-wal") && told.contains("--replace"),
        "{told}"
    );
    done(folder, &REPLACE);
    verify(&path).await.expect("a sound database");
    assert_eq!(
        names(&everything(folder)),
        ["copy", "test.sqlite", "test.sqlite.before-restore-wal"]
    );
}

#[tokio::test]
async fn a_database_in_use_is_not_replaced() {
    let folder = tempfile::tempdir().expect("a folder");
    let path = folder.path().join("test.sqlite");
    let mut service = Service::with(Setup {
        database: Some(path.clone()),
        ..Setup::default()
    });
    service.put_plant().await;
    let to = folder.path().to_owned();
    // Restoring looks for locks, and those of one process do not show within it.
    let told = tokio::task::spawn_blocking(move || {
        done(&to, &["backup", "--database", "test.sqlite", "copy"]);
        let output = super::run(&to, &REPLACE);
        assert_eq!(output.status.code(), Some(TROUBLE));
        text(&output.stderr)
    });
    let told = told.await.expect("told");
    assert!(
        told.contains("locked") && told.contains("stop the service"),
        "{told}"
    );
    let files = everything(folder.path());
    assert!(!files.contains_key("test.sqlite.before-restore"));
    assert!(names(&files).iter().all(|name| !name.contains("partial")));
    let answer = service.post_batch(batch("b", 0, 150.0)).await;
    assert_eq!(answer.status(), StatusCode::OK, "the service goes on");
    service.stop().expect("an orderly end");
    done(folder.path(), &REPLACE);
    assert!(!rows(&path).await.iter().any(|row| row.contains("results")));
}
