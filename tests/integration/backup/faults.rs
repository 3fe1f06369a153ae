//! Full disks, kills in the middle, and two copies at once.

use super::{
    TROUBLE, change, database, done, everything, names, open, program, refused, rows, text,
};
use counterpoise::store::verify;
use rand_chacha::ChaCha8Rng;
use rand_chacha::rand_core::{RngCore, SeedableRng};
use sqlx::Connection;
use std::os::unix::process::ExitStatusExt;
use std::path::Path;
use std::process::{Command, Output, Stdio};

/// A script of the shell with the program as `$0`.
fn shell(folder: &Path, before: &[&str], script: &str) -> Output {
    let mut words = before.to_vec();
    words.extend(["sh", "-c", script, env!("CARGO_BIN_EXE_counterpoise")]);
    let mut command = Command::new(words[0]);
    command.args(&words[1..]).current_dir(folder);
    command.output().expect("a shell")
}

/// How a file system of one's own is had here, if it can be: by a privileged
/// user, or by one who may pretend to be.
fn own_mounts(folder: &Path) -> Option<Vec<&'static str>> {
    let ways = [
        vec!["unshare", "--mount"],
        vec!["unshare", "--mount", "--map-root-user"],
    ];
    ways.into_iter().find(|way| {
        let mut command = Command::new(way[0]);
        let mount = ["mount", "-t", "tmpfs", "none", "full"];
        command.args(&way[1..]).args(mount).current_dir(folder);
        let tried = command.stdout(Stdio::null()).stderr(Stdio::null()).status();
        tried.is_ok_and(|status| status.success())
    })
}

#[tokio::test]
async fn a_full_disk_leaves_nothing_behind() {
    let folder = tempfile::tempdir().expect("a folder");
    let folder = folder.path();
    database(&folder.join("test.sqlite"), &["b"]).await;
    done(folder, &["backup", "--database", "test.sqlite", "copy"]);
    database(&folder.join("old.sqlite"), &["old"]).await;
    std::fs::create_dir(folder.join("full")).expect("made");
    let before = everything(folder);
    assert!(
        before["copy"].len() > 250_000,
        "more than there is room for"
    );
    let commands = [
        "backup --database test.sqlite full/made",
        "restore copy --database full/made",
    ];
    let mut ways: Vec<(&str, Vec<&str>, &str)> = vec![
        // A file may grow to 64 blocks, of 512 or 1024 bytes, in every shell.
        ("limit", vec![], "trap '' XFSZ; ulimit -f 64;"),
    ];
    match own_mounts(folder) {
        Some(way) => ways.push((
            "disk is full|No space left",
            way,
            "mount -t tmpfs -o size=200k none full;",
        )),
        None => eprintln!("no file system can be mounted here: the limit on a file stands for it"),
    }
    for command in commands {
        for (why, way, before_it) in &ways {
            let script = format!(r#"{before_it} "$0" {command}; code=$?; ls -A full; exit $code"#);
            let output = shell(folder, way, &script);
            let told = text(&output.stderr);
            assert_eq!(output.status.code(), Some(TROUBLE), "{command}: {told}");
            assert_eq!(text(&output.stdout), "", "{command}: something is left");
            assert!(told.contains("cannot be written"), "{command}: {told}");
            if *why != "limit" {
                assert!(why.split('|').any(|why| told.contains(why)), "{told}");
                assert!(told.contains("free space"), "{told}");
            }
        }
    }
    let script = r#"trap '' XFSZ; ulimit -f 64;
        "$0" restore copy --database old.sqlite --replace"#;
    let output = shell(folder, &[], script);
    assert_eq!(
        output.status.code(),
        Some(TROUBLE),
        "{}",
        text(&output.stderr)
    );
    assert!(
        everything(folder) == before,
        "the old database is as it was"
    );
    // What a kill between the two names leaves is the copy itself.
    std::fs::hard_link(folder.join("copy"), folder.join(PARTIAL)).expect("a second name");
    let script = r#"trap '' XFSZ; ulimit -f 64;
        "$0" backup --database test.sqlite copy --replace"#;
    let output = shell(folder, &[], script);
    assert_eq!(
        output.status.code(),
        Some(TROUBLE),
        "{}",
        text(&output.stderr)
    );
    assert!(everything(folder) == before, "the old copy is as it was");
    // And where there is room again.
    for command in commands {
        let arguments: Vec<&str> = command.split(' ').collect();
        done(folder, &arguments);
        std::fs::remove_file(folder.join("full/made")).expect("a file");
    }
}

/// A database of about 40 MB, so that there is a middle to be killed in.
async fn large(path: &Path) {
    database(path, &["b"]).await;
    let mut connection = open(path).await;
    let mut random = ChaCha8Rng::seed_from_u64(7);
    let mut noise = vec![0; 400_000];
    let mut transaction = connection.begin().await.expect("begun");
    for number in 2..100 {
        random.fill_bytes(&mut noise);
        sqlx::query(
            "INSERT INTO inbox (id, plant_id, batch, revision, digest, start_ns, end_ns, received_ns, body)
             SELECT ?1, plant_id, 'large ' || ?1, revision, digest, start_ns, end_ns, received_ns, ?2
             FROM inbox WHERE id = 1",
        )
        .bind(number)
        .bind(zstd::encode_all(&noise[..], 1).expect("a frame"))
        .execute(&mut *transaction)
        .await
        .expect("a batch");
        sqlx::query("INSERT INTO pending (inbox_id) VALUES (?1)")
            .bind(number)
            .execute(&mut *transaction)
            .await
            .expect("waiting");
    }
    transaction.commit().await.expect("committed");
    connection.close().await.expect("closed");
}

/// Starts the program and kills it once a file has grown to a size; whether it
/// was killed before it had ended.
fn killed_at(folder: &Path, arguments: &[&str], growing: &str, size: u64) -> bool {
    let growing = folder.join(growing);
    let mut command = program();
    command.args(arguments).current_dir(folder);
    let mut child = command.stdout(Stdio::null()).spawn().expect("a process");
    while child.try_wait().expect("a child").is_none()
        && !std::fs::metadata(&growing).is_ok_and(|data| data.len() >= size)
    {
        std::thread::yield_now();
    }
    let _ = child.kill();
    child.wait().expect("an end").signal() == Some(9)
}

const PARTIAL: &str = "copy.counterpoise-partial";

#[tokio::test]
async fn a_backup_that_is_killed_leaves_no_file_of_the_final_name() {
    let folder = tempfile::tempdir().expect("a folder");
    let folder = folder.path();
    let path = folder.join("test.sqlite");
    large(&path).await;
    let size = std::fs::metadata(&path).expect("a file").len();
    let arguments = ["backup", "--database", "test.sqlite", "copy"];
    let mut in_the_middle = 0;
    for part in [1, size / 4, size / 2, size * 3 / 4, size * 9 / 10] {
        let killed = killed_at(folder, &arguments, PARTIAL, part);
        if folder.join("copy").exists() {
            verify(&folder.join("copy")).await.expect("a sound copy");
            std::fs::remove_file(folder.join("copy")).expect("removed");
        } else {
            assert!(killed, "it ended without a copy");
            in_the_middle += 1;
        }
    }
    assert!(in_the_middle >= 2, "{in_the_middle} of 5 in the middle");
    // What was left, by the next one as well as by hand, is no hindrance.
    let noise = vec![7; 100_000];
    for left in [PARTIAL, "copy.counterpoise-partial-journal"] {
        std::fs::write(folder.join(left), &noise).expect("written");
    }
    done(folder, &arguments);
    let files = everything(folder);
    assert!(names(&files).iter().all(|name| !name.contains("partial")));
    let holdings = verify(&folder.join("copy")).await.expect("a sound copy");
    assert_eq!((holdings.batches, holdings.unfinished), (99, 98));
    assert_eq!(holdings.sampled, 99);
}

#[tokio::test]
async fn a_restore_that_is_killed_leaves_the_old_database() {
    let folder = tempfile::tempdir().expect("a folder");
    let folder = folder.path();
    large(&folder.join("copy")).await;
    let path = folder.join("test.sqlite");
    database(&path, &["old"]).await;
    let old = rows(&path).await;
    let size = std::fs::metadata(folder.join("copy"))
        .expect("a file")
        .len();
    let arguments = ["restore", "copy", "--database", "test.sqlite", "--replace"];
    let partial = "test.sqlite.counterpoise-partial";
    let mut in_the_middle = 0;
    for part in [1, size / 2, size] {
        let killed = killed_at(folder, &arguments, partial, part);
        let kept = folder.join("test.sqlite.before-restore");
        if kept.exists() {
            // It had come to the end, or to within a step of it.
            let there = rows(&path).await;
            assert!(there == old || there == rows(&folder.join("copy")).await);
            std::fs::rename(&kept, &path).expect("put back");
            let _ = std::fs::remove_file(&kept);
        } else {
            assert!(killed, "it ended without a database");
            in_the_middle += 1;
        }
        assert!(rows(&path).await == old);
    }
    assert!(in_the_middle >= 1, "{in_the_middle} of 3 in the middle");
    done(folder, &arguments);
    assert!(rows(&path).await == rows(&folder.join("copy")).await);
}

/// Two at once would write into one file; a name may also be taken while a copy
/// is being made.
#[tokio::test]
async fn a_second_copy_of_one_name_is_refused() {
    let folder = tempfile::tempdir().expect("a folder");
    let folder = folder.path();
    database(&folder.join("test.sqlite"), &["b"]).await;
    let first = std::fs::File::create(folder.join(PARTIAL)).expect("a file");
    first.lock().expect("locked");
    let arguments = ["backup", "--database", "test.sqlite", "copy"];
    let told = refused(folder, &arguments, TROUBLE);
    assert!(
        told.contains("another copy") && told.contains("wait for it"),
        "{told}"
    );
    drop(first);
    done(folder, &arguments);
    assert_eq!(names(&everything(folder)), ["copy", "test.sqlite"]);
    change(&folder.join("copy"), "PRAGMA user_version = 1").await;
}
