//! The rules of the house that a machine can hold: which module may import
//! which, that SQL and status codes have one home each, and that files stay
//! small enough to read.

use std::collections::BTreeMap;
use std::fs;
use std::path::{Path, PathBuf};

/// What each module may import; the same table stands in DEVELOPERS.md.
const IMPORTS: &[(&str, &[&str])] = &[
    ("main", &["cli", "config", "server", "store", "telemetry"]),
    (
        "cli",
        &[
            "config", "demo", "ingest", "pipeline", "plant", "report", "server",
        ],
    ),
    ("config", &["server", "store", "telemetry"]),
    ("server", &["http", "store"]),
    ("http", &["ingest", "pipeline", "plant", "report", "store"]),
    (
        "pipeline",
        &["diagnosis", "equations", "plant", "report", "solver"],
    ),
    ("store", &["plant", "report"]),
    ("report", &["plant"]),
    ("diagnosis", &["fluid", "plant", "solver"]),
    ("equations", &["fluid", "plant", "solver"]),
    ("demo", &["fluid", "plant"]),
    ("ingest", &["plant"]),
    ("telemetry", &[]),
    ("plant", &[]),
    ("fluid", &[]),
    ("solver", &[]),
];

fn sources() -> Vec<(PathBuf, String)> {
    fn walk(folder: &Path, into: &mut Vec<(PathBuf, String)>) {
        let mut entries: Vec<PathBuf> = fs::read_dir(folder)
            .unwrap()
            .map(|entry| entry.unwrap().path())
            .collect();
        entries.sort();
        for path in entries {
            if path.is_dir() {
                walk(&path, into);
            } else if path.extension().is_some_and(|e| e == "rs") {
                let text = fs::read_to_string(&path).unwrap();
                into.push((path, text));
            }
        }
    }
    let mut sources = Vec::new();
    walk(
        &Path::new(env!("CARGO_MANIFEST_DIR")).join("src"),
        &mut sources,
    );
    sources
}

/// The module a file belongs to: its first folder or its own name.
fn module_of(path: &Path) -> String {
    let src = Path::new(env!("CARGO_MANIFEST_DIR")).join("src");
    let first = path.strip_prefix(src).unwrap().iter().next().unwrap();
    first.to_str().unwrap().trim_end_matches(".rs").to_owned()
}

/// Modules named after `crate::` (or, in main, `counterpoise::`) in code.
fn imported(text: &str) -> Vec<String> {
    let code = text
        .lines()
        .filter(|line| !line.trim_start().starts_with("//"));
    code.flat_map(|line| {
        line.match_indices("crate::")
            .map(|(at, found)| &line[at + found.len()..])
            .chain(
                line.match_indices("counterpoise::")
                    .map(|(at, found)| &line[at + found.len()..]),
            )
            .map(|rest| {
                rest.chars()
                    .take_while(|c| c.is_alphanumeric() || *c == '_')
                    .collect()
            })
            .collect::<Vec<String>>()
    })
    .filter(|name: &String| IMPORTS.iter().any(|(module, _)| module == name))
    .collect()
}

#[test]
fn modules_import_only_what_the_table_allows() {
    let allowed: BTreeMap<&str, &[&str]> = IMPORTS.iter().copied().collect();
    let mut wrong = Vec::new();
    let mut seen = 0;
    for (path, text) in sources() {
        let module = module_of(&path);
        if module == "lib" {
            continue;
        }
        let allowed = allowed
            .get(module.as_str())
            .unwrap_or_else(|| panic!("module {module} is not in the import table"));
        for import in imported(&text) {
            seen += 1;
            if import != module && !allowed.contains(&import.as_str()) {
                wrong.push(format!("{}: crate::{import}", path.display()));
            }
        }
    }
    assert!(seen > 50, "the scan found hardly any import: {seen}");
    assert!(
        wrong.is_empty(),
        "not in the import table:\n{}",
        wrong.join("\n")
    );
}

#[test]
fn the_table_has_no_circle() {
    let table: BTreeMap<&str, &[&str]> = IMPORTS.iter().copied().collect();
    fn reaches(table: &BTreeMap<&str, &[&str]>, from: &str, to: &str, depth: usize) -> bool {
        depth < IMPORTS.len()
            && table[from]
                .iter()
                .any(|&next| next == to || reaches(table, next, to, depth + 1))
    }
    for (module, _) in IMPORTS {
        assert!(
            !reaches(&table, module, module, 0),
            "{module} imports itself in a circle"
        );
    }
}

#[test]
fn the_table_is_the_one_in_the_developers_map() {
    let map = include_str!("../../DEVELOPERS.md");
    for (module, imports) in IMPORTS {
        let names = if imports.is_empty() {
            "nothing of ours".to_owned()
        } else {
            imports.join(", ")
        };
        let row = format!("| {module} | {names} |");
        assert!(map.contains(&row), "DEVELOPERS.md lacks the row: {row}");
    }
}

#[test]
fn sql_and_status_codes_have_one_home() {
    for (path, text) in sources() {
        if module_of(&path) != "store" {
            assert!(
                !text.contains("sqlx"),
                "sqlx outside the store: {}",
                path.display()
            );
        }
        let home = path.ends_with("http/error.rs") || module_of(&path) == "http";
        assert!(
            home || !text.contains("StatusCode::"),
            "a status code outside http: {}",
            path.display()
        );
    }
}

#[test]
fn files_are_small_enough_to_read() {
    for (path, text) in sources() {
        // Tables of published coefficients are as long as the publication.
        let numbers = text
            .lines()
            .filter(|line| {
                let line = line.trim();
                line.starts_with('(') && line.ends_with(',') && line.contains("e")
            })
            .count();
        let lines = text.lines().count() - numbers;
        assert!(lines <= 500, "{}: {lines} lines", path.display());
        assert!(
            text.starts_with("//!"),
            "{} does not say what it is for",
            path.display()
        );
    }
}
