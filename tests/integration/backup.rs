//! Copies of a database: taken beside a service at work, put back, and refused
//! where they are not sound.

mod faults;
mod in_place;
mod unsound;

use crate::harness::{Service, Setup, batch, contents, event_ids, problem};
use counterpoise::store::{Existing, verify};
use reqwest::StatusCode;
use sqlx::sqlite::{SqliteConnectOptions, SqliteConnection};
use sqlx::{ConnectOptions, Connection};
use std::collections::{BTreeMap, BTreeSet};
use std::path::Path;
use std::process::{Command, Output};
use std::sync::Mutex;
use std::sync::atomic::{AtomicBool, Ordering};

/// What cannot be done for a reason outside the copy.
const TROUBLE: i32 = 3;
/// The copy is not sound.
const UNSOUND: i32 = 1;

fn program() -> Command {
    let mut command = Command::new(env!("CARGO_BIN_EXE_counterpoise"));
    command.env_clear();
    command
}

fn run(folder: &Path, arguments: &[&str]) -> Output {
    let mut command = program();
    command.args(arguments).current_dir(folder);
    command.output().expect("a process")
}

fn text(bytes: &[u8]) -> String {
    String::from_utf8(bytes.to_vec()).expect("text")
}

/// Runs a command that has to be done, and answers what it prints.
fn done(folder: &Path, arguments: &[&str]) -> String {
    let output = run(folder, arguments);
    let told = text(&output.stderr);
    assert_eq!(output.status.code(), Some(0), "{arguments:?}: {told}");
    assert_eq!(told, "", "{arguments:?}");
    text(&output.stdout)
}

/// Runs a command that has to be refused with a code, changing nothing in the
/// folder, and answers what it says.
fn refused(folder: &Path, arguments: &[&str], code: i32) -> String {
    let before = everything(folder);
    let output = run(folder, arguments);
    let told = text(&output.stderr);
    assert_eq!(output.status.code(), Some(code), "{arguments:?}: {told}");
    assert_eq!(text(&output.stdout), "", "{arguments:?}");
    assert_eq!(names(&everything(folder)), names(&before), "{arguments:?}");
    assert!(everything(folder) == before, "{arguments:?} changed a file");
    told
}

/// The files of a folder with what they hold.
fn everything(folder: &Path) -> BTreeMap<String, Vec<u8>> {
    let entries = std::fs::read_dir(folder).expect("the folder");
    entries
        .map(|entry| entry.expect("an entry"))
        .filter(|entry| entry.path().is_file())
        .map(|entry| {
            let name = entry.file_name().into_string().expect("a name");
            (name, std::fs::read(entry.path()).expect("a file"))
        })
        .collect()
}

fn names(files: &BTreeMap<String, Vec<u8>>) -> Vec<&str> {
    files.keys().map(String::as_str).collect()
}

async fn open(path: &Path) -> SqliteConnection {
    let options = SqliteConnectOptions::new().filename(path);
    options.connect().await.expect("a database")
}

/// Everything that a database at rest holds, row by row; read from a copy,
/// because whoever reads a database leaves traces beside it for a while.
async fn rows(path: &Path) -> Vec<String> {
    let folder = tempfile::tempdir().expect("a folder");
    for suffix in ["", "-wal"] {
        let mut from = path.as_os_str().to_owned();
        from.push(suffix);
        if Path::new(&from).exists() {
            let to = folder.path().join(format!("rows{suffix}"));
            std::fs::copy(from, to).expect("copied");
        }
    }
    contents(&folder.path().join("rows")).await
}

/// Changes a database with the file in hand.
async fn change(path: &Path, statements: &'static str) {
    let mut connection = open(path).await;
    sqlx::raw_sql(statements)
        .execute(&mut connection)
        .await
        .expect("changed");
    connection.close().await.expect("closed");
}

/// A service's database after an orderly end, with batches of these names.
async fn database(path: &Path, batches: &[&str]) {
    let mut service = Service::with(Setup {
        database: Some(path.to_owned()),
        ..Setup::default()
    });
    service.put_plant().await;
    for (minute, name) in (0..).zip(batches) {
        let answer = service.post_batch(batch(name, minute, 150.0)).await;
        assert_eq!(answer.status(), StatusCode::OK);
    }
    service.stop().expect("an orderly end");
}

#[tokio::test]
async fn a_copy_taken_while_eight_clients_post_is_whole() {
    const BEFORE: usize = 40;
    let service = Service::with_plant().await;
    let folder = tempfile::tempdir().expect("a folder");
    let acknowledged = Mutex::new(BTreeSet::new());
    let copied = AtomicBool::new(false);
    let (enough, mut reached) = tokio::sync::mpsc::channel(1);
    let client = async |number: u32| {
        let mut minute = 0;
        while !copied.load(Ordering::Acquire) {
            let name = format!("c{number}-{minute}");
            let answer = service.post_batch(batch(&name, minute % 100, 150.0)).await;
            assert_eq!(answer.status(), StatusCode::OK, "a copy is in the way");
            minute += 1;
            let mut acknowledged = acknowledged.lock().expect("the names");
            acknowledged.insert(name);
            if acknowledged.len() >= BEFORE {
                let _ = enough.try_send(());
            }
        }
    };
    let copying = async {
        reached.recv().await.expect("clients at work");
        let before = acknowledged.lock().expect("the names").clone();
        let (from, to) = (service.database.clone(), folder.path().to_owned());
        let work = tokio::task::spawn_blocking(move || {
            let from = from.to_str().expect("text");
            done(&to, &["backup", "--database", from, "copy.sqlite"])
        });
        let said = work.await.expect("a copy");
        copied.store(true, Ordering::Release);
        (before, said)
    };
    let (clients, (before, said)) =
        tokio::join!(futures::future::join_all((0..8).map(client)), copying);
    assert_eq!(clients.len(), 8);
    let after = acknowledged.lock().expect("the names").len();
    assert!(after > before.len(), "nobody posted while it was copied");

    let copy = folder.path().join("copy.sqlite");
    assert_eq!(names(&everything(folder.path())), ["copy.sqlite"]);
    let holdings = verify(&copy).await.expect("a sound copy");
    let (batches, unfinished) = (holdings.batches, holdings.unfinished);
    let line = format!("{batches}, of which {unfinished} wait");
    assert!(said.contains(&line), "{line}: {said}");
    let mut connection = open(&copy).await;
    let held: Vec<(i64, String)> = sqlx::query_as("SELECT id, batch FROM inbox ORDER BY id")
        .fetch_all(&mut connection)
        .await
        .expect("batches");
    assert_eq!(held.len() as u64, holdings.batches);
    // One moment of the service: what came before it, without a gap.
    assert!((1..).zip(&held).all(|(number, (id, _))| number == *id));
    let held: BTreeSet<String> = held.into_iter().map(|(_, name)| name).collect();
    let lost: Vec<&String> = before.difference(&held).collect();
    assert!(
        lost.is_empty(),
        "acknowledged and not in the copy: {lost:?}"
    );
    for (question, answer) in [
        ("PRAGMA integrity_check", "ok"),
        (
            "SELECT CAST(COUNT(*) AS TEXT) FROM pragma_foreign_key_check",
            "0",
        ),
        (
            "SELECT CAST(COUNT(*) AS TEXT) FROM pending WHERE inbox_id NOT IN (SELECT id FROM inbox)",
            "0",
        ),
        (
            "SELECT CAST(COUNT(*) AS TEXT) FROM inbox WHERE (id IN (SELECT inbox_id FROM pending))
             = (id IN (SELECT inbox_id FROM results))",
            "0",
        ),
    ] {
        let told: String = sqlx::query_scalar(question)
            .fetch_one(&mut connection)
            .await
            .expect("an answer");
        assert_eq!(told, answer, "{question}");
    }
}

#[tokio::test]
async fn a_restored_service_goes_on() {
    const QUESTIONS: [&str; 6] = [
        "/v1/plants",
        "/v1/plants/mixer",
        "/v1/plants/mixer/batches",
        "/v1/plants/mixer/batches/b3",
        "/v1/plants/mixer/series?tag=F-3&tag=T-1&stream=both.mass_flow",
        "/v1/plants/mixer/alarms",
    ];
    async fn answers(service: &Service) -> Vec<String> {
        let mut answers = Vec::new();
        for question in QUESTIONS {
            let answer = service.get(question).await;
            assert_eq!(answer.status(), StatusCode::OK, "{question}");
            answers.push(answer.text().await.expect("text"));
        }
        answers
    }
    let folder = tempfile::tempdir().expect("a folder");
    let service = Service::with_plant().await;
    for minute in 0..6 {
        let name = format!("b{minute}");
        // The last ones disagree for long enough to raise an alarm.
        let flow = if minute < 3 { 150.0 } else { 190.0 };
        let answer = service.post_batch(batch(&name, minute, flow)).await;
        assert_eq!(answer.status(), StatusCode::OK);
    }
    let expected = answers(&service).await;
    let events = event_ids(&service.database, "mixer").await;
    assert!(!events.is_empty(), "an alarm is part of the test");
    let from = service.database.to_str().expect("text");
    done(
        folder.path(),
        &["backup", "--database", from, "copy.sqlite"],
    );
    let said = done(
        folder.path(),
        &["restore", "copy.sqlite", "--database", "new.sqlite"],
    );
    for held in [
        "plants        1\n",
        "revisions     1\n",
        "6, of which 0 wait",
        "b5 of mixer, until 2031-04-02T10:05:30Z",
        "6 of the batches",
    ] {
        assert!(said.contains(held), "{held}: {said}");
    }
    let database = folder.path().join("new.sqlite");
    assert!(rows(&database).await == contents(&service.database).await);

    let restored = Service::with(Setup {
        database: Some(database.clone()),
        ..Setup::default()
    });
    assert_eq!(answers(&restored).await, expected);
    let again = restored.post_batch(batch("b3", 3, 190.0)).await;
    assert_eq!(again.text().await.expect("text"), expected[3]);
    let other = restored.post_batch(batch("b3", 3, 151.0)).await;
    problem(other, StatusCode::CONFLICT).await;
    for minute in 6..12 {
        let answer = restored
            .post_batch(batch(&format!("b{minute}"), minute, 150.0))
            .await;
        assert_eq!(answer.status(), StatusCode::OK);
    }
    let series = restored.get_json("/v1/plants/mixer/series?tag=F-3").await;
    let series = series.to_string();
    assert!(series.contains("b0") && series.contains("b11"), "{series}");
    let gone_on = event_ids(&database, "mixer").await;
    assert!(gone_on.starts_with(&events) && gone_on.len() > events.len());
    assert!(gone_on[events.len()] > events[events.len() - 1]);
}

#[tokio::test]
async fn a_copy_takes_nothing_from_the_file_it_is_made_of() {
    let folder = tempfile::tempdir().expect("a folder");
    let path = folder.path().join("test.sqlite");
    database(&path, &["b"]).await;
    let before = rows(&path).await;
    let copy = folder.path().join("copy.sqlite");
    let first = counterpoise::store::backup(&path, &copy, Existing::Refuse).await;
    let first = first.expect("a copy");
    assert_eq!(first, verify(&copy).await.expect("a sound copy"));
    assert_eq!(rows(&path).await, before);
    assert_eq!(rows(&copy).await, before);
    assert_eq!(
        names(&everything(folder.path())),
        ["copy.sqlite", "test.sqlite"]
    );
}

#[tokio::test]
async fn a_backup_is_refused_where_it_would_do_harm() {
    let folder = tempfile::tempdir().expect("a folder");
    let folder = folder.path();
    database(&folder.join("test.sqlite"), &["b"]).await;
    std::fs::write(folder.join("taken"), "a letter").expect("written");
    std::fs::write(folder.join("used-wal"), "a log").expect("written");
    std::fs::create_dir(folder.join("folder")).expect("made");
    std::os::unix::fs::symlink("test.sqlite", folder.join("link")).expect("a link");
    for (to, replace, mend) in [
        ("taken", false, "--replace"),
        ("test.sqlite", true, "name another"),
        ("./test.sqlite", true, "name another"),
        ("link", true, "name another"),
        ("used", true, "name another file"),
        ("folder", true, "name a file"),
        ("no/copy.sqlite", false, "make the folder"),
    ] {
        let mut arguments = vec!["backup", "--database", "test.sqlite", to];
        arguments.extend(replace.then_some("--replace"));
        let told = refused(folder, &arguments, TROUBLE);
        assert!(told.starts_with("error: ") && told.contains(mend), "{told}");
    }
    let told = refused(folder, &["backup", "--database", "none", "copy"], TROUBLE);
    assert!(told.contains("none: cannot be found"), "{told}");
    done(
        folder,
        &["backup", "--database", "test.sqlite", "taken", "--replace"],
    );
    verify(&folder.join("taken")).await.expect("a sound copy");
}

/// Whoever may not read the database may not read its copy.
#[tokio::test]
async fn a_copy_is_as_private_as_its_database() {
    use std::os::unix::fs::PermissionsExt;
    let folder = tempfile::tempdir().expect("a folder");
    let path = folder.path().join("test.sqlite");
    database(&path, &[]).await;
    let mode = |name: &str| {
        let data = std::fs::metadata(folder.path().join(name)).expect("a file");
        data.permissions().mode() & 0o777
    };
    std::fs::set_permissions(&path, PermissionsExt::from_mode(0o640)).expect("set");
    done(
        folder.path(),
        &["backup", "--database", "test.sqlite", "copy"],
    );
    assert_eq!(mode("copy"), 0o640);
    std::fs::set_permissions(folder.path().join("copy"), PermissionsExt::from_mode(0o440))
        .expect("set");
    done(folder.path(), &["restore", "copy", "--database", "new"]);
    assert_eq!(mode("new"), 0o640, "a database has to be written to");
}
