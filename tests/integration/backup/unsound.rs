//! Files that are no sound copy, each with what is said of it.

use super::{UNSOUND, change, database, done, everything, refused, rows};
use std::path::Path;

/// Has a file refused by `verify` and by `restore`, onto nothing and onto a
/// database that is there.
fn is_refused(folder: &Path, file: &str, why: &[&str]) {
    for arguments in [
        &["verify", file][..],
        &["restore", file, "--database", "new.sqlite"],
        &["restore", file, "--database", "there.sqlite", "--replace"],
    ] {
        let told = refused(folder, arguments, UNSOUND);
        for why in why {
            assert!(told.contains(why), "{arguments:?}: {why}: {told}");
        }
        assert!(told.contains(file), "{told}");
    }
}

#[tokio::test]
async fn what_is_not_whole_is_refused_and_nothing_is_changed() {
    let folder = tempfile::tempdir().expect("a folder");
    let folder = folder.path();
    database(&folder.join("there.sqlite"), &["there"]).await;
    database(&folder.join("test.sqlite"), &["b1", "b2"]).await;
    done(folder, &["backup", "--database", "test.sqlite", "copy"]);
    let whole = everything(folder)["copy"].clone();
    let write = |name: &str, bytes: &[u8]| {
        std::fs::write(folder.join(name), bytes).expect("written");
    };
    write("half", &whole[..whole.len() / 2]);
    write("short", &whole[..whole.len() - 1]);
    write("head", &whole[..100]);
    write("sixteen", &whole[..16]);
    write("empty", b"");
    write("letter", b"Dear Sirs, please find enclosed the database.");
    let noise: Vec<u8> = whole
        .iter()
        .enumerate()
        .map(|(at, _)| (at * 37 % 251) as u8)
        .collect();
    write("noise", &noise);
    for name in ["half", "short", "head"] {
        is_refused(folder, name, &["cut short", "take another copy"]);
    }
    for name in ["sixteen", "empty", "letter", "noise"] {
        is_refused(folder, name, &["it is no database", "take another copy"]);
    }
    // A page of zeros, wherever it is.
    const PAGE: usize = 16_384;
    assert_eq!(whole.len() % PAGE, 0);
    for page in 1..whole.len() / PAGE {
        let mut torn = whole.clone();
        torn[page * PAGE..(page + 1) * PAGE].fill(0);
        write("torn", &torn);
        let told = refused(folder, &["verify", "torn"], UNSOUND);
        assert!(told.contains("damaged"), "page {page}: {told}");
    }
    is_refused(folder, "torn", &["damaged"]);
    done(folder, &["verify", "copy"]);
}

#[tokio::test]
async fn what_another_program_or_version_wrote_is_refused() {
    let folder = tempfile::tempdir().expect("a folder");
    let folder = folder.path();
    database(&folder.join("there.sqlite"), &["there"]).await;
    database(&folder.join("test.sqlite"), &["b1"]).await;
    let there = rows(&folder.join("there.sqlite")).await;
    let copied = |name: &str| {
        done(folder, &["backup", "--database", "test.sqlite", name]);
        folder.join(name)
    };
    change(
        &copied("newer"),
        "INSERT INTO _sqlx_migrations SELECT 9001, 'to come', installed_on, success, checksum,
         execution_time FROM _sqlx_migrations WHERE version = 1",
    )
    .await;
    is_refused(
        folder,
        "newer",
        &["newer version", "9001", "use that version"],
    );
    change(
        &copied("other"),
        "UPDATE _sqlx_migrations SET checksum = x'00' WHERE version = 1",
    )
    .await;
    is_refused(folder, "other", &["schema 1"]);
    std::fs::write(folder.join("foreign"), "").expect("written");
    change(
        &folder.join("foreign"),
        "CREATE TABLE stock (screws INTEGER)",
    )
    .await;
    is_refused(folder, "foreign", &["not one of counterpoise"]);
    // A database that is itself of a newer schema is not copied at all.
    let told = refused(folder, &["backup", "--database", "newer", "copy"], UNSOUND);
    assert!(told.contains("newer version"), "{told}");
    assert_eq!(rows(&folder.join("there.sqlite")).await, there);
}

#[tokio::test]
async fn every_fault_of_what_it_holds_is_told() {
    let folder = tempfile::tempdir().expect("a folder");
    let folder = folder.path();
    database(&folder.join("there.sqlite"), &["there"]).await;
    database(&folder.join("test.sqlite"), &["b1", "b2", "b3", "b4"]).await;
    let copied = |name: &str| {
        done(folder, &["backup", "--database", "test.sqlite", name]);
        folder.join(name)
    };
    change(
        &copied("faulty"),
        "PRAGMA foreign_keys = OFF;
         INSERT INTO pending (inbox_id) VALUES (77);
         DELETE FROM results WHERE inbox_id = 1;
         UPDATE results SET report = x'00' WHERE inbox_id = 2;
         UPDATE inbox SET body = x'00' WHERE id = 3;
         UPDATE results SET verdict = 'inconsistent' WHERE inbox_id = 4;",
    )
    .await;
    is_refused(
        folder,
        "faulty",
        &[
            "rows of pending that belong to missing rows of inbox: 1",
            "neither wait for a result nor have one, or do both: 1",
            "the report of batch b2 is unreadable",
            "the body of batch b3 is unreadable",
            "the report of batch b4 is another's",
        ],
    );
    // And so is a database that is faulty itself, by its own name.
    let told = refused(folder, &["backup", "--database", "faulty", "copy"], UNSOUND);
    assert!(told.contains("faulty: the report of batch b2"), "{told}");
    let both = copied("both");
    change(&both, "INSERT INTO pending (inbox_id) VALUES (1)").await;
    is_refused(folder, "both", &["or do both: 1"]);
}
