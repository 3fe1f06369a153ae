//! The settings file: its sample is complete and true, what goes before what,
//! and every fault with its place.

use crate::service_process::{program, run, text};
use clap::CommandFactory;
use counterpoise::cli::Cli;
use counterpoise::config;
use std::collections::BTreeMap;
use std::io::{BufRead, BufReader};
use std::path::Path;
use std::process::Stdio;

const SAMPLE: &str = include_str!("../../deploy/counterpoise.toml");

fn serve() -> clap::Command {
    let program = Cli::command();
    program.find_subcommand("serve").expect("serve").clone()
}

/// The settings of the sample with the words above them.
fn sample() -> BTreeMap<String, (toml::Value, String)> {
    let mut settings = BTreeMap::new();
    let mut words = String::new();
    for line in SAMPLE.lines() {
        let setting = line
            .strip_prefix('#')
            .filter(|rest| !rest.is_empty() && !rest.starts_with(' '));
        if let Some(setting) = setting {
            let table: toml::Table = setting.parse().expect("a setting");
            for (key, value) in table {
                let before = settings.insert(key.clone(), (value, std::mem::take(&mut words)));
                assert_eq!(before, None, "{key} stands twice");
            }
        } else {
            assert!(
                line.is_empty() || line.starts_with("# ") || line == "#",
                "{line}"
            );
            if line.is_empty() {
                words.clear();
            }
            words.push_str(line.trim_start_matches('#'));
        }
    }
    settings
}

#[test]
fn the_sample_has_every_setting_with_its_default() {
    let sample = sample();
    let command = serve();
    let mut names: Vec<&str> = config::settings(&command)
        .filter_map(|option| option.get_long())
        .collect();
    names.sort_unstable();
    let shown: Vec<&str> = sample.keys().map(String::as_str).collect();
    assert_eq!(shown, names, "the sample and the options of serve");
    for option in config::settings(&command) {
        let name = option.get_long().expect("a name");
        let (value, words) = &sample[name];
        assert!(words.len() > 20, "{name} is not described: {words}");
        let value = match value {
            toml::Value::String(text) => text.clone(),
            other => other.to_string(),
        };
        let defaults = option.get_default_values();
        let is_switch = matches!(option.get_action(), clap::ArgAction::SetTrue);
        match defaults.first() {
            Some(default) if !is_switch => assert_eq!(value, default.to_string_lossy(), "{name}"),
            _ if is_switch => assert_eq!(value, "false", "{name}"),
            _ => assert!(words.contains("Unless it is set"), "{name}: {words}"),
        }
        assert!(option.get_env().is_some(), "{name} has no variable");
    }
}

#[test]
fn the_sample_with_everything_set_is_sound() {
    let directory = tempfile::tempdir().expect("a directory");
    let set = SAMPLE.lines().map(|line| {
        let is_setting = line.starts_with('#') && !line.starts_with("# ") && line.len() > 1;
        if is_setting { &line[1..] } else { line }
    });
    let set = set.collect::<Vec<_>>().join("\n");
    std::fs::write(directory.path().join("all.toml"), set).expect("written");
    let checked = run(directory.path(), &["config", "--check", "all.toml"], "");
    assert_eq!(text(&checked.stderr), "");
    assert_eq!(text(&checked.stdout), "all.toml: no faults\n");
    let printed = run(directory.path(), &["config"], "");
    assert_eq!(text(&printed.stdout), SAMPLE);
}

#[test]
fn faults_have_their_places_and_nothing_is_started() {
    let directory = tempfile::tempdir().expect("a directory");
    let faulty = "# mine\nworkers = \"two\"\n\nmax-in-fligth = 3\n";
    std::fs::write(directory.path().join("f.toml"), faulty).expect("written");
    let expected = "f.toml:2:11: `workers`: a number is needed, not text\n\
                    f.toml:4:1: `max-in-fligth` is no setting; did you mean max-in-flight?\n";
    for arguments in [
        &["config", "--check", "f.toml"][..],
        &["serve", "--config", "f.toml"],
        &["serve", "--workers", "3", "--config=f.toml"],
    ] {
        let ended = run(directory.path(), arguments, "");
        assert_eq!(text(&ended.stderr), expected, "{arguments:?}");
        assert_eq!(ended.status.code(), Some(1), "{arguments:?}");
    }
    let apart = "webhook-url = \"http://127.0.0.1:9/\"\n";
    std::fs::write(directory.path().join("apart.toml"), apart).expect("written");
    let ended = run(directory.path(), &["config", "--check", "apart.toml"], "");
    assert_eq!(ended.status.code(), Some(1));
    assert!(text(&ended.stderr).contains("--webhook-secret-file"));
    let ended = run(directory.path(), &["serve", "--config", "none.toml"], "");
    assert_eq!(ended.status.code(), Some(3));
    assert!(
        text(&ended.stderr).contains("none.toml"),
        "{:?}",
        ended.stderr
    );
    let left: Vec<_> = std::fs::read_dir(directory.path())
        .expect("files")
        .collect();
    assert_eq!(left.len(), 2, "no database was made: {left:?}");
}

#[test]
fn a_variable_that_sets_nothing_is_refused() {
    let directory = tempfile::tempdir().expect("a directory");
    let ended = program()
        .arg("serve")
        .env("COUNTERPOISE_MAX_INFLIGHT", "3")
        .env("COUNTERPOISE_PORT", "tcp://10.0.0.1:80")
        .current_dir(directory.path())
        .output()
        .expect("an end");
    let told = "the variable COUNTERPOISE_MAX_INFLIGHT sets nothing; did you mean \
                COUNTERPOISE_MAX_IN_FLIGHT?\n";
    assert_eq!(text(&ended.stderr), told);
    assert_eq!(ended.status.code(), Some(1));
}

/// The database that a service says it serves.
fn served(directory: &Path, arguments: &[&str], variable: Option<&str>) -> String {
    let mut command = program();
    command.arg("serve").args(arguments).current_dir(directory);
    if let Some(file) = variable {
        command.env("COUNTERPOISE_DATABASE", file);
    }
    let mut child = command.stderr(Stdio::piped()).spawn().expect("a process");
    let lines = BufReader::new(child.stderr.take().expect("a log")).lines();
    let line = lines
        .map(|line| line.expect("text"))
        .find(|line| line.contains("serving"))
        .expect("it serves");
    child.kill().expect("killed");
    child.wait().expect("an end");
    let json: serde_json::Value = serde_json::from_str(&line).expect("JSON, as the file asks");
    json["database"].as_str().expect("a name").to_owned()
}

#[test]
fn the_command_line_goes_before_the_environment_and_that_before_the_file() {
    let directory = tempfile::tempdir().expect("a directory");
    let directory = directory.path();
    let file = "listen = \"127.0.0.1:0\"\ndatabase = \"file.sqlite\"\nlog-format = \"json\"\n";
    std::fs::write(directory.join("c.toml"), file).expect("written");
    let config = ["--config", "c.toml"];
    assert_eq!(served(directory, &config, None), "file.sqlite");
    let variable = Some("variable.sqlite");
    assert_eq!(served(directory, &config, variable), "variable.sqlite");
    let typed = ["--config", "c.toml", "--database", "typed.sqlite"];
    assert_eq!(served(directory, &typed, variable), "typed.sqlite");
}
