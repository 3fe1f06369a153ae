//! `demo`: the demo plant served, its day of batches posted over HTTP, and what
//! came out of it.

use super::output::print;
use super::summary::Summary;
use super::table::{Table, fixed};
use crate::access::Rate;
use crate::config::{Access, Bounds, Config, Log};
use crate::demo;
use crate::report::{Assessment, Report};
use anyhow::{Context, bail, ensure};
use clap::Args;
use indicatif::{ProgressBar, ProgressStyle};
use reqwest::{Client, Response};
use std::net::{Ipv4Addr, SocketAddr, TcpListener};
use std::path::PathBuf;

/// Its day of batches, one per line.
const BATCHES: &str = include_str!("../../fixtures/demo/batches.ndjson");

/// The port that people expect; another free one is taken where it is not free.
const USUAL_PORT: u16 = 8080;

/// The status of an answer to a name that other content has taken.
const CONFLICT: u16 = 409;

/// Serve the demo plant.
#[derive(Args, Debug)]
pub struct Demo {
    /// Address to listen on; port 8080, or another where that is taken, unless
    /// set.
    #[arg(long, env = "COUNTERPOISE_LISTEN")]
    listen: Option<SocketAddr>,

    /// Database file; made where it is missing, and kept.
    #[arg(long, default_value = "counterpoise-demo.sqlite")]
    database: PathBuf,

    /// End after the summary.
    #[arg(long)]
    pub exit: bool,

    /// What is logged, beside the summary.
    #[arg(long, env = "COUNTERPOISE_LOG", default_value = "warn")]
    log: String,

    #[command(flatten)]
    bounds: Bounds,
}

impl Demo {
    /// Settings of the service behind the demo.
    pub fn config(&self) -> Config {
        let usual = SocketAddr::from((Ipv4Addr::LOCALHOST, USUAL_PORT));
        // Held only for a moment: who takes the port meanwhile makes the start
        // fail, and says so.
        let is_free = || TcpListener::bind(usual).is_ok();
        let listen = self.listen.unwrap_or_else(|| match is_free() {
            true => usual,
            false => SocketAddr::from((Ipv4Addr::LOCALHOST, 0)),
        });
        Config {
            config: None,
            listen,
            database: self.database.clone(),
            bounds: self.bounds.clone(),
            access: Access {
                token_rate: Rate::USUAL,
            },
            tls: Default::default(),
            webhook: Default::default(),
            log: Log {
                log_format: Default::default(),
                log: self.log.clone(),
            },
        }
    }
}

/// Posts the day to a server and prints what came out.
///
/// # Errors
///
/// Where the server does not answer as it should.
pub async fn demo(demo: &Demo, address: SocketAddr) -> anyhow::Result<()> {
    let base = format!("http://{address}");
    let client = Client::new();
    let name = put_plant(&client, &base).await?;
    let reports = post_all(&client, &base, &name, demo).await?;
    let assessment: Assessment = fetch(
        client
            .get(format!("{base}/v1/plants/{name}/assessment"))
            .send()
            .await?,
    )
    .await?;
    print(Summary::new(&reports, &assessment).to_string())?;
    print(examples(&base, &name, &reports) + "\n")?;
    if !demo.exit {
        print("Serving until Ctrl-C.\n")?;
    }
    Ok(())
}

async fn put_plant(client: &Client, base: &str) -> anyhow::Result<String> {
    let name = demo::plant()?.name;
    let request = client
        .put(format!("{base}/v1/plants/{name}"))
        .header("content-type", "application/toml")
        .body(demo::plant_file());
    let _: serde_json::Value = fetch(request.send().await?)
        .await
        .context("the demo plant")?;
    print(format!("An invented plant: {base}/v1/plants/{name}\n"))?;
    Ok(name)
}

async fn post_all(
    client: &Client,
    base: &str,
    plant: &str,
    demo: &Demo,
) -> anyhow::Result<Vec<Report>> {
    let style = ProgressStyle::with_template("{msg} {bar:40} {pos}/{len} {elapsed}")?;
    let batches: Vec<&str> = BATCHES.lines().filter(|line| !line.is_empty()).collect();
    let bar = ProgressBar::new(u64::try_from(batches.len())?).with_style(style);
    bar.set_message("Posting a day of batches");
    let address = format!("{base}/v1/plants/{plant}/batches");
    let mut reports = Vec::new();
    // One after another: what comes late raises no alarm.
    for batch in batches {
        let request = client
            .post(&address)
            .header("content-type", "application/json");
        let answer = request.body(batch).send().await?;
        ensure!(
            answer.status().as_u16() != CONFLICT,
            "{} holds another version of the demo: remove it, or name another with --database",
            demo.database.display()
        );
        reports.push(fetch(answer).await?);
        bar.inc(1);
    }
    bar.finish();
    Ok(reports)
}

async fn fetch<T: serde::de::DeserializeOwned>(response: Response) -> anyhow::Result<T> {
    let (status, address) = (response.status(), response.url().clone());
    let text = response.text().await?;
    if !status.is_success() {
        bail!("{address} answered {status}: {text}");
    }
    serde_json::from_str(&text).with_context(|| format!("the answer of {address}"))
}

fn examples(base: &str, plant: &str, reports: &[Report]) -> String {
    let worst = reports.iter().filter_map(|report| {
        let statistic = report.global_test.as_ref()?.statistic;
        Some((statistic, &report.batch))
    });
    let worst = worst.max_by(|a, b| a.0.total_cmp(&b.0));
    let mut table = Table::new(&["<Look at", "<"]);
    table.row(vec!["all routes".into(), format!("{base}/docs/")]);
    table.row(vec![
        "verdicts".into(),
        format!("{base}/v1/plants/{plant}/batches?limit=12"),
    ]);
    if let Some((statistic, batch)) = worst {
        let batch = batch.replace(':', "%3A");
        table.row(vec![
            format!("the worst batch ({})", fixed(Some(statistic), 0)),
            format!("{base}/v1/plants/{plant}/batches/{batch}"),
        ]);
    }
    let tag = reports.last().and_then(|report| report.tags.keys().next());
    if let Some(tag) = tag {
        table.row(vec![
            "a tag as CSV".into(),
            format!("{base}/v1/plants/{plant}/series?tag={tag}&format=csv"),
        ]);
    }
    table.to_string()
}
