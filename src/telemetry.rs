//! The log: one line per event on standard error, as text or JSON.

use crate::access::masked;
use clap::ValueEnum;
use std::io::{self, IsTerminal, Write};
use tracing_subscriber::EnvFilter;

/// Form of the log.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, ValueEnum)]
pub enum LogFormat {
    /// For people.
    #[default]
    Text,
    /// One JSON document per line.
    Json,
}

/// Standard error, on which no token can be read: whoever writes one where it
/// does not belong, in an address say, does not find it in the log.
struct Masked(io::Stderr);

impl Write for Masked {
    /// An event comes whole, as one piece.
    fn write(&mut self, bytes: &[u8]) -> io::Result<usize> {
        let text = String::from_utf8_lossy(bytes);
        self.0.write_all(masked(&text).as_bytes())?;
        Ok(bytes.len())
    }

    fn flush(&mut self) -> io::Result<()> {
        self.0.flush()
    }
}

/// Starts logging. `filter` is as `tracing-subscriber` reads it: `info`,
/// `counterpoise=debug,info`.
///
/// # Errors
///
/// Where the filter cannot be read, or logging has been started before.
pub fn start(format: LogFormat, filter: &str) -> anyhow::Result<()> {
    let filter = EnvFilter::try_new(filter)?;
    // A log that nobody reads any more must not end the service: the complaint
    // about it would go the same way, and panic.
    let builder = tracing_subscriber::fmt()
        .with_env_filter(filter)
        .with_writer(|| Masked(io::stderr()))
        .with_ansi(io::stderr().is_terminal())
        .log_internal_errors(false);
    let started = match format {
        LogFormat::Text => builder.with_target(false).try_init(),
        LogFormat::Json => builder.json().flatten_event(true).try_init(),
    };
    started.map_err(|error| anyhow::anyhow!(error))
}
