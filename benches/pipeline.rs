//! One batch of the demo plant, from readings to report: the whole pipeline,
//! and the parts of it that stand alone.

use counterpoise::demo::{self, DAY_SEED, Day};
use counterpoise::pipeline::{Compiled, reconcile};
use counterpoise::plant::{self, Batch, Format};
use divan::{Bencher, black_box};

fn main() {
    divan::main();
}

fn compiled() -> Compiled {
    let file = plant::read(demo::plant_file(), Format::Toml).expect("the demo plant is accepted");
    Compiled::new(file.plant, 1)
}

/// A batch of the morning, before anything drifts, and one of the evening.
fn batches(compiled: &Compiled) -> Vec<Batch> {
    Day::new(compiled.plant(), DAY_SEED)
        .map(|batch| batch.expect("the demo day settles").0)
        .step_by(24)
        .collect()
}

/// Reconciles batch after batch with one compiled plant: classes and critical
/// value are known, as in service.
#[divan::bench(sample_count = 200)]
fn batch_known_class_set(bencher: Bencher) {
    let compiled = compiled();
    let batches = batches(&compiled);
    for batch in &batches {
        reconcile(&compiled, batch);
    }
    let mut next = 0;
    bencher.bench_local(|| {
        next = (next + 1) % batches.len();
        reconcile(&compiled, black_box(&batches[next]))
    });
}

/// Batches in which one tag after another reads ten sigma off: all hypotheses
/// tested, the suspect found and its group solved. To be held against
/// `batch_known_class_set` of the same run.
#[divan::bench(sample_count = 200)]
fn batch_with_a_suspect(bencher: Bencher) {
    let compiled = compiled();
    let batches: Vec<Batch> = batches(&compiled)
        .into_iter()
        .zip(BIASED)
        .map(|(batch, tag)| biased(&compiled, batch, tag))
        .collect();
    for (batch, tag) in batches.iter().zip(BIASED) {
        let report = reconcile(&compiled, batch);
        assert!(!report.suspects.is_empty(), "{tag} is not found");
    }
    let mut next = 0;
    bencher.bench_local(|| {
        next = (next + 1) % batches.len();
        reconcile(&compiled, black_box(&batches[next]))
    });
}

/// Tags that are well checked, of every kind.
const BIASED: [&str; 8] = [
    "FT-101", "TT-102A", "PT-102B", "FT-401", "TT-414", "TT-501A", "PT-107A", "TT-107B",
];

/// The batch with one tag ten sigma too high.
fn biased(compiled: &Compiled, mut batch: Batch, name: &str) -> Batch {
    let tag = compiled.plant().tags.iter().find(|tag| tag.name == name);
    let tag = tag.expect("a tag of the demo plant");
    for reading in batch.readings.iter_mut().filter(|r| r.tag == name) {
        reading.value = reading.value.and_then(|value| {
            let sigma = tag.uncertainty.sigma(value)?;
            Some(value + 10.0 * sigma.get())
        });
    }
    batch
}

/// The first batch of a revision: rank and simulation included.
#[divan::bench(sample_count = 10, sample_size = 1)]
fn first_batch(bencher: Bencher) {
    let known = compiled();
    let batch = &batches(&known)[0];
    bencher
        .with_inputs(compiled)
        .bench_local_values(|fresh| reconcile(&fresh, black_box(batch)));
}

/// The JSON of a report.
#[divan::bench(sample_count = 200)]
fn report_as_json(bencher: Bencher) {
    let compiled = compiled();
    let report = reconcile(&compiled, &batches(&compiled)[0]);
    bencher.bench_local(|| serde_json::to_vec(black_box(&report)));
}

/// Reading and compiling the plant file.
#[divan::bench(sample_count = 20)]
fn compile(bencher: Bencher) {
    bencher.bench_local(compiled);
}
