//! Settings of the service, from the command line, the environment and a file.

mod file;

pub use file::{Unusable, settings, strange_variables, with_settings};

use crate::access::Rate;
use crate::server::{self, Hook, Limits, Options};
use crate::store::SqliteOptions;
use crate::telemetry::LogFormat;
use anyhow::Context;
use clap::Args;
use std::net::SocketAddr;
use std::path::PathBuf;
use std::time::Duration;

/// How often the clock is looked at for shelvings that end.
const TICK: Duration = Duration::from_secs(1);

/// Settings of a running service.
#[derive(Args, Clone, Debug)]
pub struct Config {
    /// File with settings in TOML; what is set here or in the environment goes
    /// before it. `counterpoise config` prints one with every setting.
    #[arg(long, env = "COUNTERPOISE_CONFIG", value_name = "FILE")]
    pub config: Option<PathBuf>,

    /// Address to listen on; port 0 takes a free one.
    #[arg(long, env = "COUNTERPOISE_LISTEN", default_value = "127.0.0.1:8080")]
    pub listen: SocketAddr,

    /// Database file; made where it is missing.
    #[arg(
        long,
        env = "COUNTERPOISE_DATABASE",
        default_value = "counterpoise.sqlite"
    )]
    pub database: PathBuf,

    /// What a service can be held to.
    #[command(flatten)]
    pub bounds: Bounds,

    /// What tokens may do.
    #[command(flatten)]
    pub access: Access,

    /// What TLS is spoken with.
    #[command(flatten)]
    pub tls: Tls,

    /// Where events of alarms are sent.
    #[command(flatten)]
    pub webhook: Webhook,

    /// How it logs.
    #[command(flatten)]
    pub log: Log,
}

/// What tokens may do.
#[derive(Args, Clone, Debug)]
pub struct Access {
    /// Requests a second of each token that was made without a rate of its own,
    /// and as many at once; more get 429.
    #[arg(long, env = "COUNTERPOISE_TOKEN_RATE", default_value_t = Limits::default().token_rate)]
    pub token_rate: Rate,
}

/// What TLS is spoken with.
#[derive(Args, Clone, Debug, Default)]
pub struct Tls {
    /// File with the chain of certificates that TLS is spoken with, PEM, the
    /// service's own first; read again when it changes and on SIGHUP.
    #[arg(long, env = "COUNTERPOISE_TLS_CERT", requires = "tls_key")]
    pub tls_cert: Option<PathBuf>,

    /// File with the key of that certificate, PEM.
    #[arg(long, env = "COUNTERPOISE_TLS_KEY", requires = "tls_cert")]
    pub tls_key: Option<PathBuf>,
}

/// Where events of alarms are sent.
#[derive(Args, Clone, Debug, Default)]
pub struct Webhook {
    /// Address that every event of an alarm is posted to, signed: https://...
    /// or http://...
    #[arg(
        long,
        env = "COUNTERPOISE_WEBHOOK_URL",
        requires = "webhook_secret_file"
    )]
    pub webhook_url: Option<String>,

    /// File with the secret it is signed with, 32 bytes or more.
    #[arg(
        long,
        env = "COUNTERPOISE_WEBHOOK_SECRET_FILE",
        requires = "webhook_url"
    )]
    pub webhook_secret_file: Option<PathBuf>,

    /// File with the root certificates that an https:// address is trusted by,
    /// PEM; those of the system unless set.
    #[arg(long, env = "COUNTERPOISE_WEBHOOK_CA", requires = "webhook_url")]
    pub webhook_ca: Option<PathBuf>,
}

/// How a service logs.
#[derive(Args, Clone, Debug)]
pub struct Log {
    /// Form of the log.
    #[arg(long, env = "COUNTERPOISE_LOG_FORMAT", default_value = "text")]
    pub log_format: LogFormat,

    /// What is logged: error, warn, info, debug, or a list as
    /// `counterpoise=debug,warn`.
    #[arg(long, env = "COUNTERPOISE_LOG", default_value = "info")]
    pub log: String,
}

/// What a service can be held to.
#[derive(Args, Clone, Debug)]
pub struct Bounds {
    /// Requests with a body that are worked on at once; more get 429.
    #[arg(long, env = "COUNTERPOISE_MAX_IN_FLIGHT", default_value_t = Limits::default().in_flight, value_parser = at_least_one)]
    pub max_in_flight: usize,

    /// Connections at once; more wait.
    #[arg(long, env = "COUNTERPOISE_MAX_CONNECTIONS", default_value_t = Limits::default().connections, value_parser = at_least_one)]
    pub max_connections: usize,

    /// Clients that listen to events at once; more get 429.
    #[arg(long, env = "COUNTERPOISE_MAX_LISTENERS", default_value_t = Limits::default().listeners, value_parser = at_least_one)]
    pub max_listeners: usize,

    /// Batches that are reconciled at once; as many as there are processors
    /// unless set.
    #[arg(long, env = "COUNTERPOISE_WORKERS", value_parser = at_least_one)]
    pub workers: Option<usize>,

    /// Bytes of one document, as sent and after decompression.
    #[arg(long, env = "COUNTERPOISE_MAX_DOCUMENT", default_value_t = Limits::default().document, value_parser = at_least_one)]
    pub max_document: usize,

    /// Bytes of a stream of batches, as sent and after decompression.
    #[arg(long, env = "COUNTERPOISE_MAX_STREAM", default_value_t = Limits::default().stream, value_parser = at_least_one)]
    pub max_stream: usize,

    /// Seconds a client may take for its headers, and again for its body.
    #[arg(long, env = "COUNTERPOISE_READ_TIMEOUT", default_value = "10", value_parser = seconds)]
    pub read_timeout: Duration,

    /// Seconds that an orderly end may take.
    #[arg(long, env = "COUNTERPOISE_GRACE", default_value = "30", value_parser = seconds)]
    pub grace: Duration,
}

impl Config {
    /// Settings of the server; reads the files of TLS and the webhook.
    ///
    /// # Errors
    ///
    /// Where a file cannot be read, or it or the webhook's address be used.
    pub fn server(&self) -> anyhow::Result<Options> {
        let defaults = Limits::default();
        Ok(Options {
            listen: self.listen,
            grace: self.bounds.grace,
            tick: TICK,
            webhook: self.webhook.hook()?,
            tls: self.tls.load()?,
            limits: Limits {
                in_flight: self.bounds.max_in_flight,
                connections: self.bounds.max_connections,
                listeners: self.bounds.max_listeners,
                workers: self.bounds.workers.unwrap_or(defaults.workers),
                document: self.bounds.max_document,
                stream: self.bounds.max_stream,
                read_timeout: self.bounds.read_timeout,
                token_rate: self.access.token_rate,
                token_freshness: defaults.token_freshness,
                ..Limits::default()
            },
        })
    }

    /// Settings of the store.
    pub fn store(&self) -> SqliteOptions {
        SqliteOptions::new(&self.database)
    }
}

impl Tls {
    fn load(&self) -> anyhow::Result<Option<server::Tls>> {
        let (Some(cert), Some(key)) = (&self.tls_cert, &self.tls_key) else {
            return Ok(None);
        };
        let tls = server::Tls::load(cert, key).context("TLS cannot be spoken")?;
        Ok(Some(tls))
    }
}

impl Webhook {
    fn hook(&self) -> anyhow::Result<Option<Hook>> {
        let (Some(url), Some(file)) = (&self.webhook_url, &self.webhook_secret_file) else {
            return Ok(None);
        };
        let secret = std::fs::read(file)
            .with_context(|| format!("cannot read the webhook's secret {}", file.display()))?;
        let unusable = "the webhook cannot be used";
        let hook = Hook::new(url, &secret).context(unusable)?;
        let Some(file) = &self.webhook_ca else {
            return Ok(Some(hook));
        };
        let roots = std::fs::read(file)
            .with_context(|| format!("cannot read the webhook's roots {}", file.display()))?;
        Ok(Some(hook.trusting(&roots).context(unusable)?))
    }
}

fn at_least_one(text: &str) -> Result<usize, String> {
    match text.parse() {
        Ok(number) if number >= 1 => Ok(number),
        _ => Err("a whole number from 1 is needed".to_owned()),
    }
}

fn seconds(text: &str) -> Result<Duration, String> {
    let number: f64 = text
        .parse()
        .map_err(|_| "a number of seconds is needed".to_owned())?;
    match Duration::try_from_secs_f64(number) {
        Ok(duration) if !duration.is_zero() => Ok(duration),
        _ => Err("a positive number of seconds is needed".to_owned()),
    }
}
