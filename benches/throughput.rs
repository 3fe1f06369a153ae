//! What the service takes over HTTP, beside the floors that it stands on.
//!
//! In one run, on one machine, whose processors the load generator shares: HTTP
//! alone (parse a batch and drop it), SQLite alone (the same bytes, raw inserts, 64
//! a commit, synced), then the program itself: batches that are made durable, and
//! batches that are made durable, reconciled and stored, by 64 clients on
//! connections that are kept; then twice the load that it can take, with its peak of
//! memory, and 2000 connections. Batches have 300 readings.
//!
//!     cargo bench --bench throughput
//!     cargo bench --bench throughput -- 10        # seconds of each measurement
//!
//! 2000 connections need as many file descriptors: `ulimit -n 8192`.

#[path = "throughput/client.rs"]
mod client;
#[path = "throughput/floors.rs"]
mod floors;
#[path = "throughput/plant.rs"]
mod plant;
#[path = "throughput/program.rs"]
mod program;

use client::{Answer, Load, Measured};
use plant::Batches;
use program::Program;
use std::time::Duration;

/// Clients that post at once.
const CLIENTS: usize = 64;

/// Connections of the last measurement.
const MANY: usize = 2000;

#[tokio::main(flavor = "multi_thread", worker_threads = 2)]
async fn main() {
    let seconds = std::env::args()
        .find_map(|text| text.parse().ok())
        .unwrap_or(5);
    let lasting = Duration::from_secs(seconds);
    let batches = Batches::new();
    println!(
        "{} processors, {CLIENTS} clients, {} tags, {} bytes a batch, {seconds} s each",
        std::thread::available_parallelism().map_or(1, usize::from),
        batches.tags(),
        batches.body(0).len(),
    );
    let http = floors::http(&batches, lasting).await;
    println!("HTTP floor (parse and drop)              {http}");
    let sqlite = floors::sqlite(&batches, lasting).await;
    println!("SQLite floor (raw, 64 a commit)          {sqlite:8.0} a second");

    let accepted = accepting(&batches, lasting).await;
    println!("made durable (respond-async)             {accepted}");
    println!(
        "    {:.2} of the SQLite floor, {:.2} of the HTTP floor",
        accepted.rate() / sqlite,
        accepted.rate() / http.rate()
    );
    let peak = reconciling(&batches, lasting).await;
    overloaded(&batches, peak, lasting).await;
    connected(&batches, peak, lasting).await;
}

/// Batches made durable. What the service then has to reconcile is kept small, or the
/// processors would be shared with that: its plant knows none of the 300 tags.
async fn accepting(batches: &Batches, lasting: Duration) -> Measured {
    let program = Program::start(&["--max-in-flight", "4096"], plant::SMALL).await;
    let load = Load::new(CLIENTS).later();
    load.run(program.address, batches, lasting).await
}

/// Batches made durable, reconciled and stored; how many a second.
async fn reconciling(batches: &Batches, lasting: Duration) -> f64 {
    let program = Program::start(&[], &batches.plant).await;
    // The first of a class set works out its critical values.
    let warm = Load::new(1).run(program.address, batches, Duration::from_secs(1));
    println!("    (to warm up, one client                {})", warm.await);
    let done = Load::new(CLIENTS)
        .run(program.address, batches, lasting)
        .await;
    println!("made durable, reconciled and stored      {done}");
    println!(
        "    peak of memory {} MiB, {} bytes of database a batch",
        program.peak_memory(),
        program.database_bytes() / done.of(Answer::Done).max(1) as u64,
    );
    println!("    verdicts: {}", program.verdicts().await);
    done.rate()
}

/// Twice what it can take, without waiting for reports: what is too much is refused,
/// and memory stays bounded.
async fn overloaded(batches: &Batches, peak: f64, lasting: Duration) {
    let program = Program::start(&[], &batches.plant).await;
    Load::new(1)
        .run(program.address, batches, Duration::from_secs(1))
        .await;
    let (before, had) = (program.peak_memory(), program.finished().await);
    let load = Load::new(CLIENTS).later().at(2.0 * peak);
    let offered = load.run(program.address, batches, lasting).await;
    let finished = program.finished().await - had;
    println!("twice that offered, not waiting          {offered}");
    println!(
        "    {} accepted, {} refused with 429, {finished} finished meanwhile ({:.2} of the peak); memory {before} -> {} MiB",
        offered.of(Answer::Done),
        offered.of(Answer::Refused),
        finished as f64 / lasting.as_secs_f64() / peak,
        program.peak_memory(),
    );
}

/// Many clients at once.
async fn connected(batches: &Batches, peak: f64, lasting: Duration) {
    let most = (MANY + 100).to_string();
    let program = Program::start(&["--max-connections", &most], &batches.plant).await;
    Load::new(1)
        .run(program.address, batches, Duration::from_secs(1))
        .await;
    let done = Load::new(MANY).run(program.address, batches, lasting).await;
    println!("{MANY} connections                         {done}");
    println!(
        "    {:.2} of the peak, {} refused with 429, {} broken; memory {} MiB",
        done.rate() / peak,
        done.of(Answer::Refused),
        done.of(Answer::Broken),
        program.peak_memory(),
    );
}
