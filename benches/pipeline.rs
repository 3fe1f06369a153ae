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
