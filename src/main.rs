//! The program: reads the command line, opens the store, starts the service.

use anyhow::Context;
use counterpoise::cli::{self, Cli, Command};
use counterpoise::config::{Config, Unusable};
use counterpoise::server::{Server, SystemClock, SystemEntropy};
use counterpoise::store::SqliteStore;
use counterpoise::telemetry;
use std::process::ExitCode;
use std::sync::Arc;
use tokio::signal::unix::{SignalKind, signal};
use tokio_util::sync::CancellationToken;

fn main() -> ExitCode {
    let Cli { command } = match cli::parse() {
        Ok(cli) => cli,
        Err(error) => {
            eprintln!("{error}");
            let unread = matches!(error, Unusable::Unread(..));
            return ExitCode::from(if unread {
                cli::EXIT_TROUBLE
            } else {
                cli::EXIT_FAULTS
            });
        }
    };
    let outcome = match command {
        Command::Serve(config) => service(serve(config)),
        Command::Demo(demo) => service(run_demo(demo)),
        Command::Check(check) => cli::check(&check),
        Command::Reconcile(reconcile) => cli::reconcile(&reconcile),
        Command::Influences(influences) => cli::influences(&influences),
        Command::TellApart(tell_apart) => cli::tell_apart(&tell_apart),
        Command::Backup(backup) => run(cli::backup(&backup)),
        Command::Restore(restore) => run(cli::restore(&restore)),
        Command::Verify(verify) => run(cli::verify(&verify)),
        Command::Token(tokens) => run(cli::tokens(tokens)),
        Command::Config(settings) => cli::settings(&settings),
        Command::Openapi => cli::openapi(),
        Command::MakeDemoFixture { out } => cli::make_demo_fixture(&out),
    };
    outcome.unwrap_or_else(|error| {
        if error.is::<cli::Unread>() {
            return ExitCode::SUCCESS;
        }
        eprintln!("error: {error:#}");
        ExitCode::from(cli::EXIT_TROUBLE)
    })
}

fn service(work: impl Future<Output = anyhow::Result<()>>) -> anyhow::Result<ExitCode> {
    run(work).map(|()| ExitCode::SUCCESS)
}

fn run<T>(work: impl Future<Output = anyhow::Result<T>>) -> anyhow::Result<T> {
    let runtime = tokio::runtime::Runtime::new().context("cannot start")?;
    runtime.block_on(work)
}

async fn serve(config: Config) -> anyhow::Result<()> {
    telemetry::start(config.log.log_format, &config.log.log)?;
    let server = start(&config).await?;
    stop_on_signal(server.stopper())?;
    tracing::info!(address = %server.address(), database = %config.database.display(), "serving");
    server.ended().await?;
    tracing::info!("ended in order");
    Ok(())
}

async fn run_demo(demo: cli::Demo) -> anyhow::Result<()> {
    let config = demo.config();
    telemetry::start(config.log.log_format, &config.log.log)?;
    let server = start(&config).await?;
    let stop = server.stopper();
    stop_on_signal(stop.clone())?;
    let shown = tokio::select! {
        shown = cli::demo(&demo, server.address()) => shown,
        () = stop.cancelled() => Ok(()),
    };
    if demo.exit || shown.is_err() {
        stop.cancel();
    }
    server.ended().await?;
    shown
}

async fn start(config: &Config) -> anyhow::Result<Server> {
    // Before a database is made: a wrong option changes nothing.
    let options = config.server()?;
    let store = SqliteStore::open(config.store())
        .await
        .with_context(|| format!("cannot use the database {}", config.database.display()))?;
    let (clock, entropy) = (Arc::new(SystemClock), Arc::new(SystemEntropy));
    Ok(Server::start(options, Arc::new(store), clock, entropy).await?)
}

/// Ends the service in order on SIGTERM and SIGINT.
fn stop_on_signal(stop: CancellationToken) -> anyhow::Result<()> {
    let mut terminate = signal(SignalKind::terminate())?;
    let mut interrupt = signal(SignalKind::interrupt())?;
    tokio::spawn(async move {
        tokio::select! {
            _ = terminate.recv() => {}
            _ = interrupt.recv() => {}
        }
        stop.cancel();
    });
    Ok(())
}
