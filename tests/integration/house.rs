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
            "access", "config", "demo", "ingest", "pipeline", "plant", "report", "server", "store",
        ],
    ),
    ("config", &["access", "server", "store", "telemetry"]),
    ("server", &["http", "store"]),
    (
        "http",
        &[
            "access",
            "alarms",
            "averaging",
            "comparison",
            "ingest",
            "meter",
            "pipeline",
            "plant",
            "report",
            "store",
            "webhook",
        ],
    ),
    (
        "pipeline",
        &["diagnosis", "equations", "plant", "report", "solver"],
    ),
    ("store", &["access", "meter", "plant", "report"]),
    ("report", &["plant"]),
    ("comparison", &["report"]),
    ("diagnosis", &["fluid", "plant", "solver"]),
    ("equations", &["fluid", "plant", "solver"]),
    ("demo", &["fluid", "plant"]),
    ("ingest", &["plant"]),
    ("averaging", &["plant"]),
    ("alarms", &["plant", "report"]),
    ("webhook", &["alarms"]),
    ("access", &[]),
    ("telemetry", &["access"]),
    ("meter", &[]),
    ("plant", &[]),
    ("fluid", &[]),
    ("solver", &[]),
];

/// Every file of some folders, in order.
fn files(folders: &[&str]) -> Vec<PathBuf> {
    fn walk(folder: &Path, into: &mut Vec<PathBuf>) {
        let mut entries: Vec<PathBuf> = fs::read_dir(folder)
            .unwrap()
            .map(|entry| entry.unwrap().path())
            .collect();
        entries.sort();
        for path in entries {
            if path.is_dir() {
                walk(&path, into);
            } else {
                into.push(path);
            }
        }
    }
    let mut files = Vec::new();
    for folder in folders {
        let folder = Path::new(env!("CARGO_MANIFEST_DIR")).join(folder);
        // A folder without files is none to a version control.
        if folder.exists() {
            walk(&folder, &mut files);
        }
    }
    files
}

fn rust_files(folders: &[&str]) -> Vec<(PathBuf, String)> {
    let files = files(folders).into_iter();
    files
        .filter(|path| path.extension().is_some_and(|e| e == "rs"))
        .map(|path| {
            let text = fs::read_to_string(&path).unwrap();
            (path, text)
        })
        .collect()
}

/// Every file of the library and the program, with its text.
pub fn sources() -> Vec<(PathBuf, String)> {
    rust_files(&["src"])
}

/// The module a file belongs to: its first folder or its own name.
fn module_of(path: &Path) -> String {
    let src = Path::new(env!("CARGO_MANIFEST_DIR")).join("src");
    let first = path.strip_prefix(src).unwrap().iter().next().unwrap();
    first.to_str().unwrap().trim_end_matches(".rs").to_owned()
}

/// Modules named after `crate::` (or, in main, `counterpoise::`) in code, alone
/// or in braces.
fn imported(text: &str) -> Vec<String> {
    let code: String = text
        .lines()
        .filter(|line| !line.trim_start().starts_with("//"))
        .flat_map(|line| [line, "\n"])
        .collect();
    let mut names = Vec::new();
    for prefix in ["crate::", "counterpoise::"] {
        for (at, found) in code.match_indices(prefix) {
            let rest = &code[at + found.len()..];
            match rest.strip_prefix('{') {
                Some(group) => names.extend(heads(group)),
                None => names.push(word(rest)),
            }
        }
    }
    names.retain(|name| IMPORTS.iter().any(|(module, _)| module == name));
    names
}

fn word(text: &str) -> String {
    text.chars()
        .take_while(|c| c.is_alphanumeric() || *c == '_')
        .collect()
}

/// The first name of each path in a brace that has been opened.
fn heads(group: &str) -> Vec<String> {
    let mut heads = Vec::new();
    let mut depth = 0;
    let mut starts = true;
    for (at, c) in group.char_indices() {
        match c {
            '{' => depth += 1,
            '}' if depth == 0 => break,
            '}' => depth -= 1,
            ',' if depth == 0 => starts = true,
            c if starts && !c.is_whitespace() => {
                heads.push(word(&group[at..]));
                starts = false;
            }
            _ => {}
        }
    }
    heads
}

#[test]
fn imports_are_seen_in_braces_too() {
    let text = "use crate::{\n    plant::{Batch, fluid},\n    store,\n};\nuse crate::solver::X;\n// crate::http\n";
    let mut found = imported(text);
    found.sort();
    assert_eq!(found, ["plant", "solver", "store"]);
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
        // Handlers name the codes of success; those of problems are in
        // `http/error.rs`.
        let is_problem = ["BAD_", "NOT_FOUND", "UNPROCESSABLE", "CONFLICT", "INTERNAL"]
            .iter()
            .any(|code| text.contains(&format!("StatusCode::{code}")));
        assert!(
            path.ends_with("http/error.rs") || !is_problem,
            "the status code of a problem outside http/error.rs: {}",
            path.display()
        );
        assert!(
            module_of(&path) == "http" || !text.contains("StatusCode::"),
            "a status code outside http: {}",
            path.display()
        );
    }
}

#[test]
fn files_are_small_enough_to_read() {
    for (path, text) in rust_files(&["src", "tests", "benches"]) {
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

/// A snapshot, a fixture or a script that was made on one machine must not name
/// its folders.
#[test]
fn no_file_names_the_folders_of_a_machine() {
    // Put together, so that this file does not hold them.
    let needles = ["work", "tmp", "home", "root"].map(|folder| format!("/{folder}/"));
    let folders = [
        "src",
        "tests",
        "benches",
        "fixtures",
        "deploy",
        "migrations",
    ];
    let mut looked_at = 0;
    let mut wrong = Vec::new();
    for path in files(&folders) {
        let Ok(text) = fs::read_to_string(&path) else {
            continue;
        };
        looked_at += 1;
        for (number, line) in text.lines().enumerate() {
            if needles.iter().any(|needle| line.contains(needle)) {
                wrong.push(format!("{}:{}", path.display(), number + 1));
            }
        }
    }
    assert!(
        looked_at > 200,
        "the scan found hardly any file: {looked_at}"
    );
    assert!(wrong.is_empty(), "{}", wrong.join("\n"));
}
