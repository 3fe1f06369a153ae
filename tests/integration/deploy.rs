//! What is in `deploy/`: the options, variables and metrics that its files name
//! exist, its links lead somewhere, and its scripts do what they say.

use crate::harness::{Service, batch};
use crate::metrics::{measured, names};
use crate::service_process::text;
use clap::{CommandFactory, Parser};
use counterpoise::cli::Cli;
use std::collections::BTreeSet;
use std::path::{Path, PathBuf};
use std::process::Command;

fn root() -> &'static Path {
    Path::new(env!("CARGO_MANIFEST_DIR"))
}

fn file(path: &str) -> String {
    let read = std::fs::read_to_string(root().join(path));
    read.unwrap_or_else(|error| panic!("{path}: {error}"))
}

/// Values of a key of a unit.
fn values<'t>(unit: &'t str, key: &str) -> Vec<&'t str> {
    let lines = unit.lines().filter_map(|line| line.split_once('='));
    lines
        .filter(|(name, _)| *name == key)
        .map(|(_, value)| value)
        .collect()
}

#[test]
fn the_unit_starts_the_program_with_options_that_exist() {
    let unit = file("deploy/systemd/counterpoise.service");
    let start = values(&unit, "ExecStart");
    assert_eq!(start.len(), 1);
    let words: Vec<&str> = start[0].split_whitespace().collect();
    let cli = Cli::try_parse_from(&words).expect("options that exist");
    let counterpoise::cli::Command::Serve(config) = cli.command else {
        panic!("the unit does not serve: {start:?}");
    };
    let stop: u64 = values(&unit, "TimeoutStopSec")[0].parse().expect("seconds");
    assert!(
        stop > config.bounds.grace.as_secs(),
        "killed before its grace"
    );
    let credentials = unit
        .lines()
        .filter(|line| line.starts_with("#LoadCredential="));
    assert!(
        credentials.count() >= 3,
        "secrets are loaded as credentials"
    );
}

#[test]
fn the_image_sets_variables_that_exist() {
    let command = Cli::command();
    let serve = command.find_subcommand("serve").expect("serve");
    let known: BTreeSet<&str> = serve
        .get_arguments()
        .filter_map(|option| option.get_env()?.to_str())
        .collect();
    let image = file("deploy/container/Containerfile");
    let named = words(&image, "COUNTERPOISE_");
    assert!(named.len() >= 3, "{named:?}");
    let strange: Vec<_> = named
        .iter()
        .filter(|n| !known.contains(n.as_str()))
        .collect();
    assert!(strange.is_empty(), "{strange:?}");
}

/// Words of a text that begin so.
fn words(text: &str, start: &str) -> BTreeSet<String> {
    let parts = text.split(|c: char| !(c.is_ascii_alphanumeric() || c == '_'));
    let found = parts.filter(|word| word.starts_with(start));
    found.map(str::to_owned).collect()
}

#[tokio::test]
async fn every_metric_that_is_named_is_measured() {
    let service = Service::with_plant().await;
    service.post_batch(batch("b", 0, 150.0)).await;
    let measured = names(&measured(&service).await);
    let mut looked_at = 0;
    for path in ["deploy/prometheus/rules.yml", "deploy/OPERATIONS.md"] {
        for name in words(&file(path), "counterpoise_") {
            looked_at += 1;
            let is_there = measured.contains(&name) || measured.contains(&format!("{name}_bucket"));
            assert!(is_there, "{path} names {name}: {measured:?}");
        }
    }
    assert!(looked_at > 12, "{looked_at}");
}

/// Also checked by `promtool check rules`, where it is at hand.
#[test]
fn every_alert_has_its_parts_and_its_row_in_the_operators_page() {
    let rules = file("deploy/prometheus/rules.yml");
    let parts: Vec<&str> = rules.split("      - alert: ").skip(1).collect();
    assert!(parts.len() >= 8);
    let page = file("deploy/OPERATIONS.md");
    let mut alerts = BTreeSet::new();
    for part in parts {
        let name = part.lines().next().expect("a name").to_owned();
        for key in [
            "        expr: ",
            "        for: ",
            "        labels: {severity: ",
            "          summary: \"",
        ] {
            assert!(part.contains(key), "{name} lacks {key}");
        }
        assert!(page.contains(&format!("`{name}`")), "{name} has no row");
        alerts.insert(name);
    }
    let named = words(&page, "Counterpoise")
        .into_iter()
        .filter(|word| word != "Counterpoise");
    let strange: Vec<String> = named.filter(|word| !alerts.contains(word)).collect();
    assert!(strange.is_empty(), "no such alert: {strange:?}");
}

/// Anchors as the usual renderers of Markdown make them of headings.
fn anchors(page: &str) -> BTreeSet<String> {
    let headings = page.lines().filter(|line| line.starts_with('#'));
    let anchor = |line: &str| -> String {
        let words = line.trim_start_matches('#').trim().to_lowercase();
        let kept = words
            .chars()
            .filter(|c| c.is_alphanumeric() || " -_".contains(*c));
        kept.map(|c| if c == ' ' { '-' } else { c }).collect()
    };
    headings.map(anchor).collect()
}

#[test]
fn links_in_the_pages_lead_somewhere() {
    let mut looked_at = 0;
    for page in ["README.md", "DEVELOPERS.md", "deploy/OPERATIONS.md"] {
        let content = file(page);
        let folder = root().join(page).parent().expect("a folder").to_owned();
        for after in content.split("](").skip(1) {
            let Some((target, _)) = after.split_once(')') else {
                continue;
            };
            if target.contains("://") || target.contains(char::is_whitespace) {
                continue;
            }
            let (path, anchor) = target.split_once('#').unwrap_or((target, ""));
            looked_at += 1;
            let at: PathBuf = match path {
                "" => root().join(page),
                path => folder.join(path),
            };
            assert!(at.exists(), "{page}: {target}");
            if !anchor.is_empty() {
                let there = std::fs::read_to_string(&at).expect("a page");
                assert!(anchors(&there).contains(anchor), "{page}: {target}");
            }
        }
    }
    assert!(looked_at > 10, "{looked_at}");
}

#[test]
fn the_backup_script_keeps_the_newest_copies_and_touches_nothing_else() {
    let directory = tempfile::tempdir().expect("a directory");
    let copies = directory.path().join("copies");
    std::fs::create_dir(&copies).expect("made");
    let old = ["20200101T000000Z", "20200102T000000Z", "20200103T000000Z"];
    for time in old {
        let name = format!("counterpoise-{time}.sqlite");
        std::fs::write(copies.join(name), "old").expect("written");
    }
    std::fs::write(copies.join("counterpoise-mine.sqlite"), "mine").expect("written");
    let run = |database: &Path, keep: &str| {
        Command::new("sh")
            .arg(root().join("deploy/systemd/backup.sh"))
            .env("COUNTERPOISE", env!("CARGO_BIN_EXE_counterpoise"))
            .env("DATABASE", database)
            .env("COPIES", &copies)
            .env("KEEP", keep)
            .output()
            .expect("sh is needed for this test")
    };
    let missing = run(&directory.path().join("none.sqlite"), "2");
    assert!(!missing.status.success());
    let there = || {
        let names = std::fs::read_dir(&copies).expect("a folder");
        let names = names.map(|entry| entry.expect("a file").file_name());
        let names: BTreeSet<String> = names.map(|n| n.into_string().expect("text")).collect();
        names
    };
    assert_eq!(
        there().len(),
        4,
        "a failed copy removes none: {:?}",
        there()
    );

    let mut service = Service::start();
    let kept = run(&service.database, "2");
    assert!(kept.status.success(), "{}", text(&kept.stderr));
    service.stop().expect("ended in order");
    let left = there();
    assert_eq!(left.len(), 3, "{left:?}");
    assert!(left.contains("counterpoise-mine.sqlite"));
    assert!(left.contains("counterpoise-20200103T000000Z.sqlite"));
    let wrong = run(&service.database, "0");
    assert_eq!(wrong.status.code(), Some(2));
}
