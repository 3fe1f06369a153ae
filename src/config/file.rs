//! The settings file: one option of the command line per line, in TOML, held to
//! the same rules.
//!
//! What may stand in it is read from the command itself, so that an option that
//! is added there can be set here too: `max-in-flight = 64` is
//! `--max-in-flight=64`. What the command line or the environment sets goes
//! before the file. The file's settings are handed to the command line's parser
//! as if they had been typed, so that what belongs together is asked for
//! together wherever it is set.

use clap::builder::ValueParser;
use clap::error::{ContextKind, ContextValue};
use clap::parser::ValueSource;
use clap::{Arg, ArgAction, Command};
use std::any::TypeId;
use std::ffi::OsString;
use std::fmt;
use std::io;
use std::path::{Path, PathBuf};
use std::time::Duration;
use toml::Spanned;
use toml::de::{DeTable, DeValue};

/// The option that names the file.
const CONFIG: &str = "config";

/// Options that are no settings.
const NO_SETTINGS: [&str; 3] = [CONFIG, "help", "version"];

/// Why settings cannot be used.
#[derive(Debug)]
pub enum Unusable {
    /// The file cannot be read.
    Unread(PathBuf, io::Error),
    /// Everything that is wrong in it or in the environment, one a line.
    Faults(Vec<String>),
}

impl fmt::Display for Unusable {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Unusable::Unread(path, error) => {
                write!(f, "cannot read the settings {}: {error}", path.display())
            }
            Unusable::Faults(faults) => f.write_str(&faults.join("\n")),
        }
    }
}

impl std::error::Error for Unusable {}

/// The options of a command that may be set in a file.
pub fn settings(command: &Command) -> impl Iterator<Item = &Arg> {
    let arguments = command.get_arguments();
    arguments.filter(|argument| {
        let name = argument.get_long();
        name.is_some_and(|name| !NO_SETTINGS.contains(&name))
    })
}

/// A command line, and after it what the file that it names (or the environment
/// does) sets and neither of them does. Of any other subcommand it is left as it
/// is.
///
/// # Errors
///
/// [`Unusable`], with every fault of the file.
pub fn with_settings(
    program: &Command,
    subcommand: &str,
    mut line: Vec<OsString>,
) -> Result<Vec<OsString>, Unusable> {
    // What is wrong in the command line itself is told when it is parsed.
    let lenient = program.clone().ignore_errors(true);
    let Ok(matches) = lenient.try_get_matches_from(&line) else {
        return Ok(line);
    };
    let (Some(set), Some(command)) = (
        matches.subcommand_matches(subcommand),
        program.find_subcommand(subcommand),
    ) else {
        return Ok(line);
    };
    let Some(path) = set.get_one::<PathBuf>(CONFIG) else {
        return Ok(line);
    };
    for (option, values) in read(command, path)? {
        let id = option.get_id().as_str();
        let source = set.value_source(id);
        if !matches!(
            source,
            Some(ValueSource::CommandLine | ValueSource::EnvVariable)
        ) {
            line.extend(values);
        }
    }
    Ok(line)
}

/// Variables of the environment that look like ours and are none, with what they
/// may be meant for.
pub fn strange_variables(program: &Command, names: impl Iterator<Item = OsString>) -> Vec<String> {
    const PREFIX: &str = "COUNTERPOISE_";
    // What Kubernetes tells of a service that is called after the program.
    const OF_OTHERS: [&str; 2] = ["COUNTERPOISE_SERVICE_", "COUNTERPOISE_PORT"];
    let commands = || program.get_subcommands();
    let known = |name: &str| {
        let mut options = commands().flat_map(Command::get_arguments);
        options.any(|option| option.get_env().is_some_and(|known| known == name))
    };
    let names = names.filter_map(|name| name.into_string().ok());
    let strange = names.filter(|name| {
        let is_ours = name.starts_with(PREFIX) && !OF_OTHERS.iter().any(|o| name.starts_with(o));
        is_ours && !known(name)
    });
    let told = strange.map(|name| {
        let option = name[PREFIX.len()..].to_lowercase().replace('_', "-");
        let meant = commands().find_map(|command| nearest(command, &option));
        let meant =
            meant.map(|meant| format!("{PREFIX}{}", meant.to_uppercase().replace('-', "_")));
        format!("the variable {name} sets nothing{}", did_you_mean(meant))
    });
    told.collect()
}

/// The options that a file sets, with the arguments that set them.
///
/// # Errors
///
/// [`Unusable`], with every fault.
pub fn read<'c>(
    command: &'c Command,
    path: &Path,
) -> Result<Vec<(&'c Arg, Vec<OsString>)>, Unusable> {
    let text =
        std::fs::read_to_string(path).map_err(|error| Unusable::Unread(path.to_owned(), error))?;
    parse(command, &text).map_err(|faults| {
        let told = faults.into_iter().map(|(at, what)| {
            let before = text.get(..at).unwrap_or_default();
            let line = before.matches('\n').count() + 1;
            let column = before.chars().rev().take_while(|c| *c != '\n').count() + 1;
            format!("{}:{line}:{column}: {what}", path.display())
        });
        Unusable::Faults(told.collect())
    })
}

type Fault = (usize, String);

fn parse<'c>(
    command: &'c Command,
    text: &str,
) -> Result<Vec<(&'c Arg, Vec<OsString>)>, Vec<Fault>> {
    let (document, errors) = DeTable::parse_recoverable(text);
    let at = |error: &toml::de::Error| error.span().map_or(0, |span| span.start);
    let mut faults: Vec<Fault> = errors
        .iter()
        .map(|error| (at(error), format!("not TOML: {}", error.message())))
        .collect();
    let mut found = Vec::new();
    for (key, value) in document.into_inner() {
        let (start, key) = (key.span().start, key.into_inner());
        let option = settings(command).find(|option| option.get_long() == Some(&key));
        let Some(option) = option else {
            let meant = nearest(command, &key);
            let meant = meant.filter(|meant| !NO_SETTINGS.contains(&meant.as_str()));
            let what = format!("`{key}` is no setting{}", did_you_mean(meant));
            faults.push((start, what));
            continue;
        };
        match arguments(option, &key, value) {
            Ok(arguments) => found.push((option, arguments)),
            Err((at, what)) => faults.push((at, format!("`{key}`: {what}"))),
        }
    }
    faults.sort();
    if faults.is_empty() {
        Ok(found)
    } else {
        Err(faults)
    }
}

/// What would be typed to set an option to a value.
fn arguments(option: &Arg, key: &str, value: Spanned<DeValue<'_>>) -> Result<Vec<OsString>, Fault> {
    let at = value.span().start;
    let fail = |what: String| Err((at, what));
    let kind = Kind::of(option);
    let text = match (kind, value.into_inner()) {
        (Kind::Switch, DeValue::Boolean(true)) => return Ok(vec![format!("--{key}").into()]),
        (Kind::Switch, DeValue::Boolean(false)) => return Ok(Vec::new()),
        (_, DeValue::Array(items)) if matches!(option.get_action(), ArgAction::Append) => {
            let each = items.into_iter().map(|item| arguments(option, key, item));
            let each: Result<Vec<_>, Fault> = each.collect();
            return each.map(|lists| lists.concat());
        }
        (Kind::Number | Kind::Either, DeValue::Integer(number)) => {
            match i128::from_str_radix(number.as_str(), number.radix()) {
                Ok(number) => number.to_string(),
                Err(_) => return fail("no such number".to_owned()),
            }
        }
        (Kind::Number | Kind::Either, DeValue::Float(number)) => number.as_str().to_owned(),
        (Kind::Text | Kind::Either, DeValue::String(text)) => text.into_owned(),
        (kind, other) => {
            let (wanted, got) = (kind.name(), name(&other));
            return fail(format!("{wanted} is needed, not {got}"));
        }
    };
    match refusal(option.get_value_parser(), &text) {
        None => Ok(vec![format!("--{key}={text}").into()]),
        Some(why) => fail(format!("\"{text}\" cannot be used: {why}")),
    }
}

/// What an option wants to be given in TOML.
#[derive(Clone, Copy, PartialEq, Eq)]
enum Kind {
    Switch,
    Number,
    Text,
    /// Whatever its own type can read.
    Either,
}

impl Kind {
    fn of(option: &Arg) -> Self {
        if matches!(option.get_action(), ArgAction::SetTrue) {
            return Kind::Switch;
        }
        let numbers = [
            TypeId::of::<usize>(),
            TypeId::of::<u64>(),
            TypeId::of::<u32>(),
            TypeId::of::<u16>(),
            TypeId::of::<i64>(),
            TypeId::of::<f64>(),
            // Seconds.
            TypeId::of::<Duration>(),
        ];
        let texts = [TypeId::of::<String>(), TypeId::of::<PathBuf>()];
        let kind = option.get_value_parser().type_id();
        let is_of = |types: &[TypeId]| types.iter().any(|one| kind == *one);
        if is_of(&numbers) {
            Kind::Number
        } else if is_of(&texts) {
            Kind::Text
        } else {
            Kind::Either
        }
    }

    fn name(self) -> &'static str {
        match self {
            Kind::Switch => "true or false",
            Kind::Number => "a number",
            Kind::Text => "text in quotes",
            Kind::Either => "text in quotes or a number",
        }
    }
}

fn name(value: &DeValue<'_>) -> &'static str {
    match value {
        DeValue::String(_) => "text",
        DeValue::Integer(_) | DeValue::Float(_) => "a number",
        DeValue::Boolean(_) => "true or false",
        DeValue::Datetime(_) => "a date or time",
        DeValue::Array(_) => "a list",
        DeValue::Table(_) => "a table",
    }
}

/// Why a value is refused.
fn refusal(parser: &ValueParser, text: &str) -> Option<String> {
    let option = Arg::new("value").long("value").value_parser(parser.clone());
    let command = Command::new("settings").no_binary_name(true).arg(option);
    let error = command
        .try_get_matches_from([format!("--value={text}")])
        .err()?;
    if let Some(ContextValue::Strings(possible)) = error.get(ContextKind::ValidValue) {
        return Some(format!("it is one of {}", possible.join(", ")));
    }
    let source = std::error::Error::source(&error).map(ToString::to_string);
    Some(source.unwrap_or_else(|| "it is refused".to_owned()))
}

/// The option whose name is like another.
fn nearest(command: &Command, name: &str) -> Option<String> {
    let command = command.clone().no_binary_name(true);
    let error = command.try_get_matches_from([format!("--{name}")]).err()?;
    match error.get(ContextKind::SuggestedArg)? {
        ContextValue::String(option) => Some(option.trim_start_matches('-').to_owned()),
        _ => None,
    }
}

fn did_you_mean(name: Option<String>) -> String {
    name.map_or_else(String::new, |name| format!("; did you mean {name}?"))
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::config::Config;
    use clap::Args;

    fn command() -> Command {
        Config::augment_args(Command::new("serve"))
    }

    fn faults(text: &str) -> Vec<String> {
        let faults = parse(&command(), text).err().unwrap_or_default();
        faults.into_iter().map(|(_, what)| what).collect()
    }

    #[test]
    fn every_fault_is_told() {
        let text = "max-in-fligth = 3\nworkers = \"4\"\nlisten = \"nowhere\"\ngrace = 0\n\
                    log-format = \"xml\"\ndatabase = 3\nmax-document = 1.5\nlog = [\"info\"]\n\
                    config = \"x\"\n[server]\nlisten = \"127.0.0.1:1\"\n";
        let expected = [
            "`max-in-fligth` is no setting; did you mean max-in-flight?",
            "`workers`: a number is needed, not text",
            "`listen`: \"nowhere\" cannot be used: invalid socket address syntax",
            "`grace`: \"0\" cannot be used: a positive number of seconds is needed",
            "`log-format`: \"xml\" cannot be used: it is one of text, json",
            "`database`: text in quotes is needed, not a number",
            "`max-document`: \"1.5\" cannot be used: a whole number from 1 is needed",
            "`log`: text in quotes is needed, not a list",
            "`config` is no setting",
            "`server` is no setting",
        ];
        assert_eq!(faults(text), expected);
    }

    #[test]
    fn a_key_twice_and_what_is_no_toml_are_told() {
        for text in ["workers = 1\nworkers = 2\n", "workers\n", "= 3"] {
            let faults = faults(text);
            assert!(
                faults.iter().any(|fault| fault.starts_with("not TOML")),
                "{text}: {faults:?}"
            );
        }
    }

    #[test]
    fn numbers_are_taken_as_toml_writes_them() {
        let text = "max-stream = 0x10\nread-timeout = 2.5\nmax-document = 1_000\n";
        let command = command();
        let found = parse(&command, text).expect("no faults");
        let mut typed: Vec<OsString> = found.into_iter().flat_map(|(_, typed)| typed).collect();
        typed.sort();
        let expected = [
            "--max-document=1000",
            "--max-stream=16",
            "--read-timeout=2.5",
        ];
        assert_eq!(typed, expected);
    }
}
